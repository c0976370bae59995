"""Where do neutrons and high-energy photons from reactions in flight leave their energy?

Both reach decimetres; in one dimension their energy is spread by a plane kernel, a mixture over source energies of
kernels about a plane of emission, pushed forward by the mean cosine g of the emission (1 + 3 g mu).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, material
from dosekit.capture.neutrons import EDGES_MM, NODE_ENERGIES_MEV
from dosekit.capture.photons import NODE_PHOTON_MEV
from dosekit.capture.products import point_kernel
from dosekit.capture.profiles import neutron_response, photon_response

__all__ = [
    "convolve_planes",
    "neutron_kerma_ratio",
    "neutron_plane_kernel",
    "photon_plane_kernel",
    "plane_from_shells",
    "star_plane_kernel",
]

_REACH_MM = 1000.0
_KERMA_H, _KERMA_REST = 45.0, 2.4


def plane_from_shells(
    energy: NDArray[np.float64],
    edges_mm: NDArray[np.float64],
    *,
    bin_mm: float,
    half_length_mm: float,
    mean_cosine: float = 0.0,
    width_mm: float | None = None,
) -> NDArray[np.float64]:
    """Turn energy in spherical shells about a point into energy per bin of depth.

    Parameters
    ----------
    energy : ndarray, shape (n,)
        Energy in each shell.
    edges_mm : ndarray, shape (n + 1,)
        Shell radii, mm.
    bin_mm, half_length_mm : float
        Bin and half length, mm.
    mean_cosine : float
        Mean cosine g of the emission, -1/3 to 1/3; energy at distance r lies in the direction of emission, 1 + 3 g mu.
    width_mm : float, optional
        Only what lies inside a square of this width, centred on the axis, counts: of a ring of radius rho beyond
        the half width a, the share 1 - (4 / pi) arccos(a / rho). None: no end.

    Returns
    -------
    ndarray, odd length
        Energy per bin; the centre is the plane of the point.
    """
    half = int(np.ceil(half_length_mm / bin_mm))
    edges = bin_mm * (np.arange(2 * half + 2) - half - 0.5)
    bias = float(np.clip(mean_cosine, -1.0 / 3.0, 1.0 / 3.0))
    inner = np.repeat(edges_mm[:-1], 4)
    outer = np.repeat(edges_mm[1:], 4)
    radius = inner + (outer - inner) * np.tile([0.125, 0.375, 0.625, 0.875], len(energy))
    mu = np.clip(edges[None, :] / radius[:, None], -1.0, 1.0)
    share = np.diff(0.5 * (mu + 1.5 * bias * mu**2), axis=1)
    if width_mm is not None:
        middle = 0.5 * (mu[:, 1:] + mu[:, :-1])
        rho = radius[:, None] * np.sqrt(np.maximum(1.0 - middle**2, 0.0))
        inside = 1.0 - 4.0 / np.pi * np.arccos(np.clip(0.5 * width_mm / np.maximum(rho, 1e-9), 0.0, 1.0))
        share = share * np.clip(np.where(rho <= 0.5 * width_mm, 1.0, inside), 0.0, 1.0)
    kernel = np.sum(0.25 * np.repeat(energy, 4)[:, None] * share, axis=0)
    kernel.setflags(write=False)
    return np.asarray(kernel)


@lru_cache(maxsize=256)
def neutron_plane_kernel(
    medium: Material,
    energies_mev: tuple[float, ...],
    *,
    bin_mm: float,
    mean_cosine: float = 0.0,
    width_mm: float | None = None,
) -> NDArray[np.float64]:
    """Return the share of the energy of neutrons left per bin about a plane of emission.

    The shells of :func:`dosekit.capture.profiles.neutron_response` in water, stretched by density and averaged with the
    energies as weights.

    Parameters
    ----------
    medium : Material
        Medium; its density counts.
    energies_mev : tuple of float
        Equally likely neutron energies, MeV.
    bin_mm : float
        Bin, mm.
    mean_cosine : float
        Mean cosine of emission.
    width_mm : float, optional
        Width of the square over which energy is summed, mm.

    Returns
    -------
    ndarray, odd length
        Share of the energy per bin, to 1 m of water; the centre is the plane.
    """
    response = neutron_response(material("water"))
    shells = _mix(response, NODE_ENERGIES_MEV, energies_mev)
    return _scaled_plane(shells, medium, bin_mm, mean_cosine, width_mm)


@lru_cache(maxsize=64)
def photon_plane_kernel(
    medium: Material,
    energy_mev: float,
    *,
    bin_mm: float,
    mean_cosine: float = 0.0,
    width_mm: float | None = None,
) -> NDArray[np.float64]:
    """Return the share of the energy of photons left per bin about a plane of emission.

    The shells of :func:`dosekit.capture.profiles.photon_response` in water (histories with pair production, Compton
    scattering, electrons and bremsstrahlung), stretched by density.

    Parameters
    ----------
    medium : Material
        Medium; its density counts.
    energy_mev : float
        Photon energy, MeV.
    bin_mm : float
        Bin, mm.
    mean_cosine : float
        Mean cosine of emission.
    width_mm : float, optional
        Width of the square over which energy is summed, mm.

    Returns
    -------
    ndarray, odd length
        Share of the energy per bin, to 1 m of water; the centre is the plane.
    """
    response = photon_response(material("water"))
    shells = _mix(response, NODE_PHOTON_MEV, (energy_mev,))
    return _scaled_plane(shells, medium, bin_mm, mean_cosine, width_mm)


@lru_cache(maxsize=256)
def star_plane_kernel(
    medium: Material, component: str, *, yields: str, bin_mm: float, width_mm: float | None
) -> NDArray[np.float64]:
    """Return the energy of star neutrons or photons per bin and stop, inside a square of finite width.

    Parameters
    ----------
    medium : Material
        Where the pion stops; its density counts.
    component : str
        star_neutron or star_photon.
    yields : str
        Yield set.
    bin_mm : float
        Bin, mm.
    width_mm : float or None
        Width of the square, mm.

    Returns
    -------
    ndarray, odd length
        MeV per stop and bin, to 1 m of water.
    """
    edges = EDGES_MM[EDGES_MM <= 2000.0] / medium.density_g_cm3
    shells = point_kernel(medium, component, yields=yields, edges_mm=edges)
    return plane_from_shells(
        shells, edges, bin_mm=bin_mm, half_length_mm=_REACH_MM / medium.density_g_cm3, width_mm=width_mm
    )


def _mix(response: NDArray[np.float64], nodes: NDArray[np.float64], energies: tuple[float, ...]) -> NDArray[np.float64]:
    """Average shells over energies, energy as weight."""
    place = np.interp(np.log(np.maximum(energies, 1e-6)), np.log(nodes), np.arange(len(nodes)))
    low = np.minimum(place.astype(np.int64), len(nodes) - 2)
    weight = np.zeros(len(nodes))
    np.add.at(weight, low, np.asarray(energies) * (1.0 - place + low))
    np.add.at(weight, low + 1, np.asarray(energies) * (place - low))
    return np.asarray(weight @ response / max(float(np.sum(weight)), 1e-12))


def _scaled_plane(
    shells: NDArray[np.float64], medium: Material, bin_mm: float, mean_cosine: float, width_mm: float | None
) -> NDArray[np.float64]:
    """Return a plane kernel from shells at unit density."""
    density = medium.density_g_cm3
    count = min(len(shells), len(EDGES_MM) - 1)
    return plane_from_shells(
        shells[:count],
        EDGES_MM[: count + 1] / density,
        bin_mm=bin_mm,
        half_length_mm=_REACH_MM / density,
        mean_cosine=mean_cosine,
        width_mm=width_mm,
    )


def neutron_kerma_ratio(medium: Material) -> float:
    """Return what neutrons of some 20 MeV leave per mass in a material, relative to water.

    Kerma factors at 20 MeV: hydrogen 45, other light elements 2.4 (1e-15 Gy m2; ICRU Report 63 (2000), from
    memory), so that hydrogen takes 0.70 of the energy in water. Energy that a material poor in hydrogen does not
    take goes on and is counted as escaped.

    Parameters
    ----------
    medium : Material
        Material.

    Returns
    -------
    float
        Ratio per mass; 1 for water.

    Examples
    --------
    >>> neutron_kerma_ratio(material("water"))
    1.0
    """
    kerma = [
        _KERMA_H * stuff.fraction("H") + _KERMA_REST * (1.0 - stuff.fraction("H"))
        for stuff in (medium, material("water"))
    ]
    return kerma[0] / kerma[1]


def convolve_planes(source: NDArray[np.float64], kernel: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return what planes of emission leave in a slab; what goes beyond its faces is lost.

    Parameters
    ----------
    source : ndarray, shape (n,)
        Energy emitted per bin.
    kernel : ndarray, odd length
        Share per bin about a plane.

    Returns
    -------
    ndarray, shape (n,)
        Energy left per bin.
    """
    n = len(source)
    half = len(kernel) // 2
    if half >= n:
        kernel = kernel[half - n + 1 : half + n]
        half = n - 1
    size = 1 << int(np.ceil(np.log2(n + 2 * half + 1)))
    full = np.fft.irfft(np.fft.rfft(source, size) * np.fft.rfft(kernel, size), size)
    return np.asarray(np.maximum(full[half : half + n], 0.0))
