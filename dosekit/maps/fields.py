"""A field: one beam direction, where its spots lie and how much each spot gives at each range step.

Spots are given where they cross the plane of the isocentre, in the beam's own axes (u, v) after IEC 61217. The size of
a spot, its divergence and their correlation (see :class:`dosekit.beams.beam.Beam`) hold in that plane too, for a
beam that meets nothing on its way. What a spot gives is counted in units of 1e9 particles of the beam's main species.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.errors import InputError, SizeError
from dosekit.maps.frames import BeamFrame, beam_frame

if TYPE_CHECKING:
    from dosekit.beams.beam import Beam

__all__ = ["PARTICLES_PER_UNIT", "Field", "spot_lattice"]

PARTICLES_PER_UNIT = 1e9
"""Particles of the main species that one unit of weight stands for."""

_MOST_SPOTS = 200_000


@dataclass(frozen=True, eq=False)
class Field:
    """One field of spots and range steps.

    Attributes
    ----------
    name : str
        What it is called in tables and figures.
    beam : Beam
        The beam, before the range shifter.
    isocentre_mm : tuple of float
        The isocentre (x, y, z) in patient axes, mm.
    gantry_deg, couch_deg : float
        Angles after IEC 61217, degrees.
    spots_mm : ndarray
        Where each spot crosses the plane of the isocentre, (u, v), shape (n, 2), mm.
    shift_mm : ndarray
        Water-equivalent thickness of the range shifter for each step, shape (K,), mm.
    weights : ndarray
        What each spot gives at each step, shape (n, K), in units of 1e9 particles.
    source_distance_mm : float or None
        Distance from the source to the isocentre, mm; None for a parallel beam.

    Examples
    --------
    >>> from dosekit.beams.beam import Beam
    >>> beam = Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02)
    >>> one = Field("front", beam, isocentre_mm=(0, 0, 0), gantry_deg=0)
    >>> one.weights.shape, one.frame().direction
    ((1, 1), (0.0, 1.0, 0.0))
    """

    name: str
    beam: Beam
    isocentre_mm: tuple[float, float, float]
    gantry_deg: float
    couch_deg: float = 0.0
    spots_mm: NDArray[np.float64] = field(default_factory=lambda: np.zeros((1, 2)))
    shift_mm: NDArray[np.float64] = field(default_factory=lambda: np.zeros(1))
    weights: NDArray[np.float64] = None  # type: ignore[assignment]  # ones when not given
    source_distance_mm: float | None = None

    def __post_init__(self) -> None:
        """Check the parts and make the arrays read-only."""
        spots = np.atleast_2d(np.array(self.spots_mm, dtype=np.float64))
        shift = np.atleast_1d(np.array(self.shift_mm, dtype=np.float64))
        if spots.ndim != 2 or spots.shape[1] != 2 or not np.all(np.isfinite(spots)):
            self._refuse(f"spots of shape {spots.shape}", "finite (u, v) pairs, shape (n, 2)")
        if shift.ndim != 1 or not np.all(np.isfinite(shift)) or np.any(shift < 0.0):
            self._refuse(f"range shifter thicknesses {shift}", "finite thicknesses of 0 mm or more, shape (K,)")
        if len(spots) > _MOST_SPOTS:
            raise SizeError(
                f"field {self.name!r} has {len(spots)} spots",
                allowed=f"at most {_MOST_SPOTS}",
                remedy="place the spots further apart",
            )
        given: Any = self.weights
        if given is None:
            given = np.ones((len(spots), len(shift)))
        weights = np.array(given, dtype=np.float64)
        if weights.shape != (len(spots), len(shift)):
            self._refuse(f"weights of shape {weights.shape}", f"shape {(len(spots), len(shift))}, spots by steps")
        if not np.all(np.isfinite(weights)):
            self._refuse("weights that are not finite", "finite numbers of particles (1e9)")
        for key, value in (("spots_mm", spots), ("shift_mm", shift), ("weights", weights)):
            value.setflags(write=False)
            object.__setattr__(self, key, value)
        try:
            x, y, z = (float(value) for value in self.isocentre_mm)
        except (TypeError, ValueError):
            self._refuse(f"isocentre {self.isocentre_mm!r}", "three numbers (x, y, z), mm")
        object.__setattr__(self, "isocentre_mm", (x, y, z))
        self.frame()  # refuses angles and distances that make no sense

    @property
    def shape(self) -> tuple[int, int]:
        """Number of spots and of steps."""
        return len(self.spots_mm), len(self.shift_mm)

    @property
    def particles(self) -> float:
        """All particles of the main species the field gives."""
        return float(self.weights.sum()) * PARTICLES_PER_UNIT

    def frame(self, patient_position: str = "HFS") -> BeamFrame:
        """Return the axes of the field.

        Parameters
        ----------
        patient_position : str
            How the patient lies.

        Returns
        -------
        BeamFrame
            The axes in the patient.
        """
        return beam_frame(
            self.isocentre_mm,
            gantry_deg=self.gantry_deg,
            couch_deg=self.couch_deg,
            source_distance_mm=self.source_distance_mm,
            patient_position=patient_position,
        )

    def replace(self, **changes: Any) -> Field:
        """Return a copy with other values.

        Parameters
        ----------
        **changes
            Attributes and their new values.

        Returns
        -------
        Field
            The changed copy.
        """
        return replace(self, **changes)

    def _refuse(self, found: str, allowed: str) -> None:
        raise InputError(f"field {self.name!r}: {found}", allowed=allowed, remedy="correct the field")


def spot_lattice(
    half_width_mm: ArrayLike, spacing_mm: float, *, centre_mm: ArrayLike = (0.0, 0.0)
) -> NDArray[np.float64]:
    """Return spots on a square lattice that fills a rectangle, symmetric about its centre.

    Parameters
    ----------
    half_width_mm : array_like
        Half the width along u and v, or one for both, mm.
    spacing_mm : float
        Distance between neighbours, mm.
    centre_mm : array_like
        Centre (u, v), mm.

    Returns
    -------
    ndarray
        Spots (u, v), shape (n, 2), mm.

    Raises
    ------
    InputError
        When the spacing is not positive.

    Examples
    --------
    >>> spot_lattice(5.0, 5.0).shape
    (9, 2)
    """
    if not 0.0 < spacing_mm < np.inf:
        raise InputError(f"a spot spacing of {spacing_mm} mm", allowed="a positive distance", remedy="correct it")
    half = np.broadcast_to(np.asarray(half_width_mm, dtype=np.float64), (2,))
    counts = np.floor(half / spacing_mm + 1e-9).astype(int)
    if np.prod(2.0 * counts + 1.0) > _MOST_SPOTS:
        raise SizeError("a lattice of too many spots", allowed=f"at most {_MOST_SPOTS}", remedy="use a wider spacing")
    u, v = (np.arange(-n, n + 1) * spacing_mm + c for n, c in zip(counts, np.asarray(centre_mm), strict=True))
    grid_v, grid_u = np.meshgrid(v, u, indexing="ij")
    return np.stack([grid_u.ravel(), grid_v.ravel()], axis=1)
