"""Where do neutrons and high-energy photons from reactions in flight leave their energy?

Both reach decimetres; in one dimension their energy is spread by a plane kernel, a mixture over source energies of kernels
about a plane of emission, pushed forward by the mean cosine g of the emission (1 + 3 g mu).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, material
from dosekit.capture.neutrons import EDGES_MM
from dosekit.capture.photons import NODE_PHOTON_MEV
from dosekit.capture.products import planar_neutron_kernel
from dosekit.capture.profiles import photon_response

__all__ = ["convolve_planes", "neutron_plane_kernel", "photon_plane_kernel"]

_NEUTRON_NODES_MEV = (2.0, 5.0, 10.0, 20.0, 35.0, 55.0, 80.0, 118.0)


@lru_cache(maxsize=256)
def neutron_plane_kernel(
    medium: Material, energies_mev: tuple[float, ...], *, bin_mm: float, half_length_mm: float, mean_cosine: float = 0.0
) -> NDArray[np.float64]:
    """Return the share of the energy of neutrons left per bin about a plane of emission.

    The kernels of :func:`dosekit.capture.products.planar_neutron_kernel` in water, stretched by density and averaged with
    the energies as weights.

    Parameters
    ----------
    medium : Material
        Medium; its density counts.
    energies_mev : tuple of float
        Equally likely neutron energies, MeV; rounded to the nodes of the kernels.
    bin_mm : float
        Bin, mm.
    half_length_mm : float
        Half length, mm; kernels end at 1 m of water.
    mean_cosine : float
        Mean cosine of emission.

    Returns
    -------
    ndarray, odd length
        Share of the energy per bin; the centre is the plane.
    """
    density = medium.density_g_cm3
    half = min(half_length_mm * density, 1000.0)
    bias = round(float(np.clip(mean_cosine, -0.33, 0.33)), 1)
    nodes = np.array(_NEUTRON_NODES_MEV)
    weight = np.zeros(len(nodes))
    for energy in energies_mev:
        place = float(np.interp(energy, nodes, np.arange(len(nodes))))
        low = min(int(place), len(nodes) - 2)
        weight[low] += energy * (1.0 - place + low)
        weight[low + 1] += energy * (place - low)
    weight /= max(float(np.sum(weight)), 1e-12)
    kernel = sum(
        share * _neutron_node(energy, bias, bin_mm * density, half)
        for energy, share in zip(_NEUTRON_NODES_MEV, weight, strict=True)
        if share > 0.0
    )
    kernel = np.asarray(kernel)
    kernel.setflags(write=False)
    return kernel


@lru_cache(maxsize=256)
def _neutron_node(energy_mev: float, mean_cosine: float, bin_mm: float, half_length_mm: float) -> NDArray[np.float64]:
    """Return a kernel at a node energy."""
    return planar_neutron_kernel(energy_mev, mean_cosine, bin_mm=bin_mm, half_length_mm=half_length_mm)


@lru_cache(maxsize=64)
def photon_plane_kernel(
    medium: Material, energy_mev: float, *, bin_mm: float, half_length_mm: float, mean_cosine: float = 0.0
) -> NDArray[np.float64]:
    """Return the share of the energy of photons left per bin about a plane of emission.

    The shells of :func:`dosekit.capture.profiles.photon_response` in water (histories with pair production, Compton
    scattering, electrons and bremsstrahlung), stretched by density and laid on the axis with emission 1 + 3 g mu.

    Parameters
    ----------
    medium : Material
        Medium; its density counts.
    energy_mev : float
        Photon energy, MeV.
    bin_mm, half_length_mm : float
        Bin and half length, mm; kernels end at 1 m of water.
    mean_cosine : float
        Mean cosine of emission, -1/3 to 1/3.

    Returns
    -------
    ndarray, odd length
        Share of the energy per bin; the centre is the plane.
    """
    response = photon_response(material("water"))
    place = float(np.interp(np.log(energy_mev), np.log(NODE_PHOTON_MEV), np.arange(len(NODE_PHOTON_MEV))))
    low = min(int(place), len(NODE_PHOTON_MEV) - 2)
    shells = (1.0 - place + low) * response[low] + (place - low) * response[low + 1]
    step = bin_mm * medium.density_g_cm3
    half = int(np.ceil(min(half_length_mm * medium.density_g_cm3, 1000.0) / step))
    edges = step * (np.arange(2 * half + 2) - half - 0.5)
    bias = float(np.clip(mean_cosine, -0.33, 0.33))
    kernel = np.zeros(2 * half + 1)
    for inner, outer, energy in zip(EDGES_MM[:-1], EDGES_MM[1:], shells[:-1], strict=True):
        for radius in np.linspace(inner, outer, 9)[1::2]:
            mu = np.clip(edges / radius, -1.0, 1.0)
            # integral of (1 + 3 g mu) / 2
            kernel += 0.25 * energy * np.diff(0.5 * (mu + 1.5 * bias * mu**2))
    kernel.setflags(write=False)
    return kernel


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
