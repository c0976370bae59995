"""What do capture stars leave in one dimension?

The density of stops is folded with the plane kernels of the capture room, material by material. In a stack the
folding is done along a stretched depth: water-equivalent depth for charged products, mass thickness for neutrons
and photons; the charged kernel is that of the capturing material brought to unit stretching. For neutrons and
photons in a stack it is the kernel of water times the energy that the capturing material emits over that of water:
tissues differ little per mass. Where layers differ this is the first order of density scaling; what neutrons leave
follows the local hydrogen (:func:`dosekit.depths.broad.neutron_kerma_ratio`).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import STAR_COMPONENTS
from dosekit.basis.materials import Material, material
from dosekit.beams.stopping import relative_stopping_power
from dosekit.capture.products import planar_kernel
from dosekit.capture.stars import star_energy_mev
from dosekit.depths.broad import convolve_planes, neutron_kerma_ratio, star_plane_kernel

__all__ = ["star_deposits", "star_ledger"]

_HALF_LENGTH_MM = {"star_light": 120.0, "star_heavy": 8.0}


def star_deposits(
    stops: NDArray[np.float64],
    *,
    edges_mm: NDArray[np.float64],
    layer: NDArray[np.int64],
    materials: tuple[Material, ...],
    yields: str,
    star_scale: float = 1.0,
    width_mm: float | None = None,
) -> dict[str, NDArray[np.float64]]:
    """Return the energy that stars leave per bin.

    Parameters
    ----------
    stops : ndarray, shape (bins,) or (k, bins)
        Captures per bin.
    edges_mm : ndarray, shape (bins + 1,)
        Bin edges, mm.
    layer : ndarray of int, shape (bins,)
        Layer of each bin.
    materials : tuple of Material
        Material of each layer.
    yields : str
        Yield set.
    star_scale : float
        Factor on the charged energy.
    width_mm : float, optional
        Width of the square over which the energy of neutrons and photons is summed, mm.

    Returns
    -------
    dict of str to ndarray
        MeV per bin for the four star components, shape of `stops`.
    """
    rows = np.atleast_2d(stops)
    widths = np.diff(edges_mm)
    result = {component: np.zeros_like(rows) for component in STAR_COMPONENTS}
    even = len(set(materials)) == 1 and np.allclose(widths, widths[0], rtol=1e-9)
    step = float(np.max(widths))
    for component in STAR_COMPONENTS:
        scale = star_scale if component in ("star_light", "star_heavy") else 1.0
        if even:
            kernel = _kernel(materials[0], component, yields, float(widths[0]), width_mm)
            for index, row in enumerate(rows):
                result[component][index] = scale * convolve_planes(row, kernel)
            continue
        stretch = np.array([_stretch(stuff, component) for stuff in materials])
        place = np.concatenate([[0.0], np.cumsum(widths * stretch[layer])])
        cells = int(np.ceil(place[-1] / step - 1e-9))
        axis = step * np.arange(cells + 1.0)
        taken = np.ones(len(materials))
        if component == "star_neutron":
            taken = np.array([neutron_kerma_ratio(stuff) for stuff in materials])
        for stuff in dict.fromkeys(materials):
            mine = np.array([other == stuff for other in materials])[layer]
            kernel = _unit_kernel(stuff, component, yields, step, width_mm)
            for index, row in enumerate(rows):
                here = np.where(mine, row, 0.0)
                if not np.any(here):
                    continue
                stretched = np.diff(np.interp(axis, place, np.concatenate([[0.0], np.cumsum(here)])))
                left = convolve_planes(stretched, kernel)
                running = np.concatenate([[0.0], np.cumsum(left)])
                result[component][index] += scale * np.diff(np.interp(place, axis, running)) * taken[layer]
    if np.ndim(stops) == 1:
        return {component: values[0] for component, values in result.items()}
    return result


def star_ledger(stops_by_material: dict[Material, float], *, yields: str, star_scale: float = 1.0) -> dict[str, float]:
    """Return the energy of stars by component and in binding, before transport.

    Parameters
    ----------
    stops_by_material : dict of Material to float
        Captures.
    yields : str
        Yield set.
    star_scale : float
        Factor on the charged energy.

    Returns
    -------
    dict of str to float
        MeV by star component, and ``binding``; the sum is 139.57 per capture.
    """
    total: dict[str, float] = {}
    for stuff, number in stops_by_material.items():
        for name, energy in star_energy_mev(stuff, yields, star_scale=star_scale).items():
            total[name] = total.get(name, 0.0) + number * energy
    return total


def _stretch(stuff: Material, component: str) -> float:
    """Return stretched length per length."""
    return relative_stopping_power(stuff) if component in ("star_light", "star_heavy") else stuff.density_g_cm3


def _kernel(stuff: Material, component: str, yields: str, bin_mm: float, width_mm: float | None) -> NDArray[np.float64]:
    """Return a plane kernel, MeV per stop and bin."""
    if component in ("star_neutron", "star_photon"):
        return star_plane_kernel(stuff, component, yields=yields, bin_mm=bin_mm, width_mm=width_mm)
    half = _HALF_LENGTH_MM[component] / stuff.density_g_cm3
    return np.asarray(planar_kernel(stuff, component, yields=yields, bin_mm=bin_mm, half_length_mm=half))


def _unit_kernel(
    stuff: Material, component: str, yields: str, bin_mm: float, width_mm: float | None
) -> NDArray[np.float64]:
    """Return the kernel of a capturing material along stretched depth."""
    if component in ("star_neutron", "star_photon"):
        water = material("water")
        emitted = star_energy_mev(stuff, yields)[component] / star_energy_mev(water, yields)[component]
        return emitted * _kernel(water, component, yields, bin_mm, width_mm)
    unit = stuff.replace(density_g_cm3=stuff.density_g_cm3 / _stretch(stuff, component))
    return _kernel(unit, component, yields, bin_mm, width_mm)
