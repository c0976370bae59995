"""Products of reactions in flight, carried through a body with a forward push.

The energy that reactions release in each voxel goes along the directions of `dosekit.maps.cones` with weights
exp(kappa u.b), b being the direction of the beam; kappa gives the wanted mean cosine c = coth(kappa) - 1 / kappa
(the distribution of R. A. Fisher, Proc. R. Soc. A 217 (1953) 295). Charged products: protons with an exponential
spectrum of the wanted mean energy; neutral products: the kernel of star neutrons; photons (pi0 of charge exchange):
the kernel of pionic hydrogen.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from dosekit.capture.exponentials import ConeKernel, cone_kernel, proton_kernel
from dosekit.errors import GridError, InputError, UnknownNameError
from dosekit.maps.stars import BLOCK_MM, DIRECTIONS, scale_per_density
from dosekit.maps.stars_modes import Travel

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["REACTION_CHANNELS", "carry_reactions", "forward_bias"]

REACTION_CHANNELS = ("charged", "neutral", "photon")
"""What carries the energy away."""

_COMPONENT = {"charged": "star_light", "neutral": "star_neutron", "photon": "star_photon"}


def forward_bias(
    beam_direction: tuple[float, float, float], mean_cosine: float
) -> Callable[[NDArray[np.float64]], NDArray[np.float64]]:
    """Return emission against direction with a mean cosine to the beam.

    Parameters
    ----------
    beam_direction : tuple of float
        (x, y, z), any length above 0.
    mean_cosine : float
        Between -0.95 and 0.95.

    Returns
    -------
    callable
        Unit vectors (n, 3) to weights.

    Raises
    ------
    InputError
        If the direction has no length or the cosine is out of range.
    """
    beam = np.asarray(beam_direction, dtype=float)
    length = float(np.linalg.norm(beam))
    if not length > 0.0 or not abs(mean_cosine) <= 0.95:
        raise InputError(
            f"beam direction {beam_direction!r} with mean cosine {mean_cosine!r}",
            allowed="a vector with a length, and a cosine from -0.95 to 0.95",
        )
    beam = beam / length
    size = abs(mean_cosine)
    if size < 1e-6:
        kappa = 0.0
    else:
        kappa = math.copysign(float(brentq(lambda k: 1.0 / math.tanh(k) - 1.0 / k - size, 1e-6, 60.0)), mean_cosine)
    return lambda units: np.exp(kappa * (units @ beam - 1.0))


def carry_reactions(
    energy_per_voxel: NDArray[Any],
    grid: VoxelGrid,
    beam_direction: tuple[float, float, float],
    *,
    channel: str = "charged",
    mean_cosine: float = 0.0,
    mean_energy_mev: float = 30.0,
    block_mm: float = BLOCK_MM,
) -> NDArray[np.float64]:
    """Carry the energy of reaction products away from where the reactions happen.

    Parameters
    ----------
    energy_per_voxel : ndarray [z, y, x]
        Energy released to this channel in each voxel, MeV.
    grid : VoxelGrid
        The volume, on the same lattice.
    beam_direction : tuple of float
        Direction of the beam (x, y, z).
    channel : {"charged", "neutral", "photon"}
        What carries the energy.
    mean_cosine : float
        Mean cosine to the beam, weighted by energy.
    mean_energy_mev : float
        Mean energy of charged products, MeV.
    block_mm : float
        Size of blocks for neutral products and photons, mm.

    Returns
    -------
    ndarray [z, y, x]
        Energy left in each voxel, MeV.

    Raises
    ------
    UnknownNameError
        If there is no such channel.
    GridError
        If the energy does not fit the volume.
    """
    if channel not in REACTION_CHANNELS:
        raise UnknownNameError("reaction channel", channel, REACTION_CHANNELS)
    energy = np.asarray(energy_per_voxel, dtype=np.float64)
    if energy.shape != grid.shape:
        raise GridError(f"energy of shape {energy.shape}", allowed=f"the volume's shape {grid.shape}")
    component = _COMPONENT[channel]
    kernel = _kernel(channel, mean_energy_mev)
    share = kernel.energies_mev / kernel.energy_mev
    local = kernel.local_mev / kernel.energy_mev * energy
    bias = forward_bias(beam_direction, mean_cosine)
    travel = Travel(component, grid, scale_per_density(grid, component), DIRECTIONS[component], block_mm, bias)
    return local + travel.carry(energy, np.zeros(grid.shape, dtype=np.uint16), share[None, :])


def _kernel(channel: str, mean_energy_mev: float) -> ConeKernel:
    """Return the kernel of a channel."""
    if channel == "charged":
        return proton_kernel(float(mean_energy_mev))
    return (
        cone_kernel("star_neutron", "evaluated", "O")
        if channel == "neutral"
        else cone_kernel("star_photon", "evaluated", "H")
    )
