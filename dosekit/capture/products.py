"""How far from a stopped pion does its energy go? Kernels in shells, in planes and as sums of exponentials.

`point_kernel` and `planar_kernel` are exact integrals of a profile (`dosekit.capture.profiles`); `cone_kernel` is
its best approximation by exponentials, for the superposition along directions (A. Ahnesjoe, Med. Phys. 16 (1989)
577).
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.materials import Material, material
from dosekit.capture.neutrons import EDGES_MM, NODE_ENERGIES_MEV
from dosekit.capture.profiles import neutron_response, star_profile
from dosekit.errors import InputError

__all__ = ["planar_kernel", "planar_neutron_kernel", "point_kernel"]


def point_kernel(
    medium: Material | str,
    component: str,
    *,
    yields: str = "evaluated",
    edges_mm: ArrayLike,
    star_scale: float = 1.0,
) -> NDArray[np.float64]:
    """Return the energy in shells about a stopped pion.

    Parameters
    ----------
    medium : Material or str
        Uniform medium.
    component : str
        Star component.
    yields : str
        Yield set.
    edges_mm : array_like, shape (n + 1,)
        Shell radii, mm, increasing, from 0 or more.
    star_scale : float
        Factor on the charged components.

    Returns
    -------
    ndarray, shape (n,)
        MeV per stop in each shell.

    Raises
    ------
    InputError
        If radii are negative or do not increase.

    Examples
    --------
    >>> shells = point_kernel("water", "star_light", edges_mm=[0.0, 5.0, 200.0])
    >>> bool(shells[0] > shells[1] > 0.0)
    True
    """
    edges = np.asarray(edges_mm, dtype=float)
    if edges.ndim != 1 or len(edges) < 2 or edges[0] < 0.0 or np.any(np.diff(edges) <= 0.0):
        raise InputError("shell radii that do not increase from 0", allowed="increasing radii, mm")
    profile = star_profile(medium, component, yields=yields, star_scale=star_scale)
    return np.asarray(-np.diff(profile.beyond(edges)))


def planar_kernel(
    medium: Material | str,
    component: str,
    *,
    yields: str = "evaluated",
    bin_mm: float = 1.0,
    half_length_mm: float = 400.0,
    star_scale: float = 1.0,
) -> NDArray[np.float64]:
    """Return the energy in plane slices about the slice of the stop.

    Parameters
    ----------
    medium : Material or str
        Uniform medium.
    component : str
        Star component.
    yields : str
        Yield set.
    bin_mm : float
        Thickness of a slice, mm.
    half_length_mm : float
        Reach to either side, mm.
    star_scale : float
        Factor on the charged components.

    Returns
    -------
    ndarray, shape (2 n + 1,)
        MeV per stop in each slice; stops are spread evenly over the central slice. Read-only. The sum is the energy
        left within reach.

    Raises
    ------
    InputError
        If lengths are not positive.

    Examples
    --------
    >>> kernel = planar_kernel("water", "star_light", half_length_mm=100.0)
    >>> len(kernel), round(float(kernel.sum()), 1)
    (201, 15.2)
    """
    if not bin_mm > 0.0 or not half_length_mm > 0.0:
        raise InputError(f"slices of {bin_mm!r} mm over {half_length_mm!r} mm", allowed="positive lengths")
    return _planar(material(medium), component, yields, float(bin_mm), float(half_length_mm), float(star_scale))


@lru_cache(maxsize=256)
def _planar(
    medium: Material, component: str, yields: str, bin_mm: float, half_length_mm: float, star_scale: float
) -> NDArray[np.float64]:
    """Average the planar integral over the stop's slice."""
    profile = star_profile(medium, component, yields=yields, star_scale=star_scale)
    count = max(1, math.ceil(half_length_mm / bin_mm))
    # stops at the middles of fine sub-slices, averaged
    parts = 16
    kernel = np.zeros(2 * count + 1)
    edges = (np.arange(2 * count + 2) - count - 0.5) * bin_mm
    for offset in (np.arange(parts) + 0.5) / parts * bin_mm - 0.5 * bin_mm:
        distance = edges - offset
        one_side = profile.beyond_plane(np.abs(distance))
        cumulative = np.where(distance > 0.0, profile.energy_mev - one_side, one_side)
        kernel += np.diff(cumulative) / parts
    kernel = 0.5 * (kernel + kernel[::-1])
    kernel.setflags(write=False)
    return kernel


def planar_neutron_kernel(
    energy_mev: float, mean_cosine: float = 0.0, *, bin_mm: float = 1.0, half_length_mm: float = 400.0
) -> NDArray[np.float64]:
    """Return the share of a neutron's energy in plane slices of water about its start.

    Parameters
    ----------
    energy_mev : float
        Energy of the neutron, MeV, 0.2 to 118 (clamped).
    mean_cosine : float
        Mean cosine to the axis, -1/3 to 1/3 exactly (density 1 + 3 c mu), beyond that clipped to 0 where negative.
    bin_mm : float
        Thickness of a slice, mm.
    half_length_mm : float
        Reach to either side, mm.

    Returns
    -------
    ndarray, shape (2 n + 1,)
        Fractions of the energy, from behind to ahead.

    Notes
    -----
    The energy at distance r is taken to lie in the direction of emission, so that a forward bias c weights the
    slice at z by the mean of 1 + 3 c z / r.
    """
    response = neutron_response(material("water"))
    place = float(
        np.interp(math.log(max(energy_mev, 0.2)), np.log(NODE_ENERGIES_MEV), np.arange(len(NODE_ENERGIES_MEV)))
    )
    index = min(int(place), len(NODE_ENERGIES_MEV) - 2)
    shells = (1.0 - place + index) * response[index] + (place - index) * response[index + 1]
    count = max(1, math.ceil(half_length_mm / bin_mm))
    edges = (np.arange(2 * count + 2) - count - 0.5) * bin_mm
    # fine cosines of equal weight, biased
    cosines = (np.arange(400) + 0.5) / 200.0 - 1.0
    weight = np.maximum(0.0, 1.0 + 3.0 * mean_cosine * cosines)
    weight /= weight.sum()
    kernel = np.zeros(2 * count + 1)
    for inner, outer, energy in zip(EDGES_MM[:-1], EDGES_MM[1:], shells[:-1], strict=True):
        for r in np.linspace(inner, outer, 9)[1::2]:
            kernel += 0.25 * energy * np.histogram(r * cosines, bins=edges, weights=weight)[0]
    return kernel
