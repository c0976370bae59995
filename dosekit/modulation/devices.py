"""What can a machine do, and what does it have to do to give a set of range steps?

`DeviceLimits` says what a range modulator can set.  `ridge_profile` turns weights into the widths of the
terraces of a ridge filter; `dwell_program` into times at a stated rate.  Pions decay on their way, so a
rate counted upstream is larger than the rate at the surface by ``exp(path / (beta gamma c tau))`` (decay
length: `dosekit.beams.decay`).

What it does not do: scattering in the modulator is the business of the depth library; edges of ridges, beam
growth between filter and patient and dead time between steps are left out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["DeviceLimits", "DwellProgram", "RidgeProfile", "dwell_program", "flight_survival", "ridge_profile"]


@dataclass(frozen=True)
class DeviceLimits:
    """What a range modulator can set.

    Parameters
    ----------
    smallest_step_mm : float
        Smallest distance of neighbouring residual ranges, mm water.
    smallest_share : float
        Smallest share of the particles that a step may have, below 1.
    largest_count : int
        Largest number of steps.
    thickness_quantum_mm : float
        Shifter thicknesses are multiples of this, mm water; 0 for any thickness.
    """

    smallest_step_mm: float = 1.0
    smallest_share: float = 0.0
    largest_count: int = 100
    thickness_quantum_mm: float = 0.0

    def __post_init__(self) -> None:
        """Refuse limits that no set of steps can meet."""
        if not self.smallest_step_mm > 0.0 or not self.thickness_quantum_mm >= 0.0:
            raise InputError(
                f"smallest step {self.smallest_step_mm} mm, quantum {self.thickness_quantum_mm} mm",
                allowed="a step above 0 and a quantum of 0 or more",
                remedy="give what the machine can set",
            )
        if not 0.0 <= self.smallest_share < 1.0 or self.largest_count < 1:
            raise InputError(
                f"smallest share {self.smallest_share}, largest count {self.largest_count}",
                allowed="a share from 0 to below 1 and at least one step",
                remedy="give what the machine can set",
            )


@dataclass(frozen=True)
class RidgeProfile:
    """One ridge of a ridge filter, symmetric about its middle.

    Parameters
    ----------
    thickness_mm : ndarray, shape (k,)
        Thickness of each terrace in mm of the filter's material, ascending.
    width_mm : ndarray, shape (k,)
        Width of each terrace, both flanks together, mm; the widths sum to the pitch.
    half_width_mm : ndarray, shape (k,)
        Half-width of the ridge at and above each thickness, mm.
    pitch_mm : float
        Distance from ridge to ridge, mm.
    """

    thickness_mm: NDArray[np.float64]
    width_mm: NDArray[np.float64]
    half_width_mm: NDArray[np.float64]
    pitch_mm: float


def ridge_profile(
    shift_mm: ArrayLike,
    weights: ArrayLike,
    *,
    pitch_mm: float = 5.0,
    relative_stopping_power: float = 1.0,
) -> RidgeProfile:
    """Turn range steps into the section of a ridge.

    Parameters
    ----------
    shift_mm : array_like, shape (k,)
        Water-equivalent thickness of each step, mm.
    weights : array_like, shape (k,)
        Particles of each step, any unit; steps without particles are left out.
    pitch_mm : float
        Distance from ridge to ridge, mm.
    relative_stopping_power : float
        Stopping power of the filter's material relative to water, per length.

    Returns
    -------
    RidgeProfile
        Widths proportional to the particles of each step.

    Raises
    ------
    InputError
        If there are no particles or a number is not positive.

    Examples
    --------
    >>> profile = ridge_profile([0.0, 10.0], [3.0, 1.0], pitch_mm=4.0, relative_stopping_power=1.25)
    >>> profile.thickness_mm.tolist(), profile.width_mm.tolist(), profile.half_width_mm.tolist()
    ([0.0, 8.0], [3.0, 1.0], [2.0, 0.5])
    """
    shift, share = np.asarray(shift_mm, dtype=np.float64), np.asarray(weights, dtype=np.float64)
    if not pitch_mm > 0.0 or not relative_stopping_power > 0.0:
        raise InputError(
            f"pitch {pitch_mm} mm, relative stopping power {relative_stopping_power}",
            allowed="both above 0",
            remedy="give the filter's pitch and material",
        )
    if share.shape != shift.shape or np.any(share < 0.0) or not share.sum() > 0.0 or np.any(shift < 0.0):
        raise InputError(
            "range steps that no ridge can give",
            allowed="thicknesses and weights of 0 or more, some weight above 0",
            remedy="find the weights first",
        )
    used = share > 0.0
    order = np.argsort(shift[used], kind="stable")
    width = (share[used] / share.sum() * pitch_mm)[order]
    return RidgeProfile(
        thickness_mm=shift[used][order] / relative_stopping_power,
        width_mm=width,
        half_width_mm=0.5 * np.cumsum(width[::-1])[::-1],
        pitch_mm=float(pitch_mm),
    )


@dataclass(frozen=True)
class DwellProgram:
    """Times of a set of range steps given one after another.

    Parameters
    ----------
    particles : ndarray, shape (k,)
        Particles at the surface for each step.
    time_s : ndarray, shape (k,)
        Time of each step, s.
    survival : ndarray, shape (k,)
        Share of the counted particles that reach the surface.
    total_s : float
        Sum of the times, s.
    """

    particles: NDArray[np.float64]
    time_s: NDArray[np.float64]
    survival: NDArray[np.float64]
    total_s: float


def flight_survival(particle: str, kinetic_energy_mev: ArrayLike, *, path_m: float) -> NDArray[np.float64]:
    """Give the share of particles that do not decay over a path in vacuum.

    Parameters
    ----------
    particle : str
        Name of the particle.
    kinetic_energy_mev : array_like
        Kinetic energy in MeV.
    path_m : float
        Length of the path in m, not negative.

    Returns
    -------
    ndarray
        ``exp(-path / (beta gamma c tau))``; 1 for stable particles.

    Examples
    --------
    >>> float(flight_survival("proton", 150.0, path_m=10.0))
    1.0
    """
    from dosekit.beams.decay import decay_per_mm

    if not path_m >= 0.0:
        raise InputError(
            f"a flight path of {path_m} m", allowed="0 or more", remedy="give the path from counter to surface"
        )
    return np.asarray(np.exp(-1000.0 * path_m * decay_per_mm(particle, kinetic_energy_mev)))


def dwell_program(particles: ArrayLike, *, particles_per_s: float, survival: ArrayLike = 1.0) -> DwellProgram:
    """Turn particle numbers into times.

    Parameters
    ----------
    particles : array_like, shape (k,)
        Particles at the surface for each step.
    particles_per_s : float
        Rate where it is counted, per second.
    survival : array_like
        Share of the counted particles that reach the surface (see `flight_survival`).

    Returns
    -------
    DwellProgram
        Time of each step and in total.

    Examples
    --------
    >>> dwell_program([2e9, 1e9], particles_per_s=1e8, survival=0.5).time_s.tolist()
    [40.0, 20.0]
    """
    number = np.asarray(particles, dtype=np.float64)
    alive = np.broadcast_to(np.asarray(survival, dtype=np.float64), number.shape)
    if not particles_per_s > 0.0 or np.any(number < 0.0) or not np.all((alive > 0.0) & (alive <= 1.0)):
        raise InputError(
            "particle numbers, rate or survival that cannot be",
            allowed="numbers of 0 or more, a rate above 0, survival above 0 and up to 1",
            remedy="check the rate and the flight path",
        )
    time = number / (particles_per_s * alive)
    return DwellProgram(particles=number, time_s=time, survival=np.array(alive), total_s=float(np.sum(time)))
