"""Where a beam points: gantry and couch angles turned into axes in the patient.

Angles follow IEC 61217 (International Electrotechnical Commission, Radiotherapy equipment - coordinates, movements
and scales, 2011). Its fixed axes are x_f to the right of somebody who faces the gantry, y_f towards the gantry and
z_f up. The gantry turns about y_f, clockwise for that onlooker; the couch turns about z_f, counter-clockwise from
above. The collimator angle is taken as zero.

The patient's own axes are DICOM's (L, P, S): x to the left, y to the back, z to the head. Head first and on the
back (HFS), x_f = x, y_f = z and z_f = -y, so that

    direction of the beam   d = R (-sin g, cos g, 0)
    beam axis x_b           u = R ( cos g, sin g, 0)
    beam axis y_b           v = R ( 0, 0, 1)

in patient axes (x, y, z), with R the turn of the couch: (x, z) -> (x cos c + z sin c, z cos c - x sin c). Gantry 0
sends the beam towards +y; gantry 90 has the source at the patient's left.

Positions along the beam are w = d . (r - isocentre): 0 at the isocentre, larger further on. With a source at a
distance S a point has the fan position (u, v) = (x_b, y_b) S / (S + w), that is where its ray meets the plane of the
isocentre; parallel beams have (u, v) = (x_b, y_b).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.errors import InputError, UnknownNameError

__all__ = ["PATIENT_POSITIONS", "BeamFrame", "beam_frame"]

Axis = tuple[float, float, float]

PATIENT_POSITIONS: dict[str, tuple[Axis, Axis, Axis]] = {
    # where the axes x, y, z of the patient point in IEC fixed axes (x_f, y_f, z_f); DICOM PS3.3 C.7.3.1.1.2
    "HFS": ((1.0, 0.0, 0.0), (0.0, 0.0, -1.0), (0.0, 1.0, 0.0)),
    "HFP": ((-1.0, 0.0, 0.0), (0.0, 0.0, 1.0), (0.0, 1.0, 0.0)),
    "FFS": ((-1.0, 0.0, 0.0), (0.0, 0.0, -1.0), (0.0, -1.0, 0.0)),
    "FFP": ((1.0, 0.0, 0.0), (0.0, 0.0, 1.0), (0.0, -1.0, 0.0)),
}
"""Axes of the patient in the room for each position on the couch."""


@dataclass(frozen=True)
class BeamFrame:
    """Axes of one beam in patient axes.

    Attributes
    ----------
    isocentre_mm : tuple of float
        The isocentre (x, y, z), mm.
    u_axis, v_axis, direction : tuple of float
        Unit vectors in patient axes (x, y, z).
    source_distance_mm : float or None
        Distance from the source to the isocentre, mm; None for a parallel beam.
    """

    isocentre_mm: tuple[float, float, float]
    u_axis: tuple[float, float, float]
    v_axis: tuple[float, float, float]
    direction: tuple[float, float, float]
    source_distance_mm: float | None = None

    @property
    def rotation(self) -> NDArray[np.float64]:
        """Rows: the axes u, v and the direction, in patient axes, shape (3, 3)."""
        return np.array([self.u_axis, self.v_axis, self.direction])

    def magnification(self, w_mm: ArrayLike) -> NDArray[np.float64]:
        """Return how much wider the fan is at w than at the isocentre.

        Parameters
        ----------
        w_mm : array_like
            Position along the beam, mm.

        Returns
        -------
        ndarray
            1 + w / S; one everywhere for a parallel beam.
        """
        w = np.asarray(w_mm, dtype=np.float64)
        return np.ones_like(w) if self.source_distance_mm is None else 1.0 + w / self.source_distance_mm

    def to_beam(self, points_mm: ArrayLike) -> NDArray[np.float64]:
        """Return fan positions of points.

        Parameters
        ----------
        points_mm : array_like
            Points (x, y, z) in patient axes, shape (..., 3), mm.

        Returns
        -------
        ndarray
            (u, v, w), shape (..., 3), mm.
        """
        beam = (np.asarray(points_mm, dtype=np.float64) - np.asarray(self.isocentre_mm)) @ self.rotation.T
        beam[..., :2] /= self.magnification(beam[..., 2])[..., None]
        return np.asarray(beam)

    def to_patient(self, beam_mm: ArrayLike) -> NDArray[np.float64]:
        """Return points from their fan positions, the inverse of `to_beam`.

        Parameters
        ----------
        beam_mm : array_like
            (u, v, w), shape (..., 3), mm.

        Returns
        -------
        ndarray
            Points (x, y, z) in patient axes, shape (..., 3), mm.
        """
        beam = np.array(beam_mm, dtype=np.float64)
        beam[..., :2] *= self.magnification(beam[..., 2])[..., None]
        return np.asarray(beam @ self.rotation + np.asarray(self.isocentre_mm))


def beam_frame(
    isocentre_mm: tuple[float, float, float],
    *,
    gantry_deg: float,
    couch_deg: float = 0.0,
    source_distance_mm: float | None = None,
    patient_position: str = "HFS",
) -> BeamFrame:
    """Return the axes of a beam from its angles.

    Parameters
    ----------
    isocentre_mm : tuple of float
        The isocentre (x, y, z) in patient axes, mm.
    gantry_deg, couch_deg : float
        Angles after IEC 61217, degrees.
    source_distance_mm : float, optional
        Distance from the source to the isocentre, mm; None for a parallel beam.
    patient_position : str
        How the patient lies, one of `PATIENT_POSITIONS`.

    Returns
    -------
    BeamFrame
        The axes.

    Raises
    ------
    UnknownNameError
        When the patient position is not known.
    InputError
        When an angle is not finite or the source distance not positive.

    Examples
    --------
    >>> frame = beam_frame((0.0, 0.0, 0.0), gantry_deg=90.0)
    >>> [round(x) for x in frame.direction], [round(x) for x in frame.u_axis]
    ([-1, 0, 0], [0, 1, 0])
    """
    if patient_position not in PATIENT_POSITIONS:
        raise UnknownNameError("patient position", patient_position, PATIENT_POSITIONS)
    if not np.all(np.isfinite([gantry_deg, couch_deg, *isocentre_mm])):
        raise InputError(
            f"gantry {gantry_deg}, couch {couch_deg}, isocentre {isocentre_mm}",
            allowed="finite numbers",
            remedy="correct the field's angles and isocentre",
        )
    if source_distance_mm is not None and not 0.0 < source_distance_mm < np.inf:
        raise InputError(
            f"a source distance of {source_distance_mm} mm",
            allowed="a positive distance, or none for a parallel beam",
            remedy="correct source_distance_mm",
        )
    (sin_g, cos_g), (sin_c, cos_c) = _sin_cos(gantry_deg), _sin_cos(couch_deg)
    room = np.array(  # axes of the beam in fixed axes (x_f, y_f, z_f)
        [[cos_g, 0.0, -sin_g], [0.0, 1.0, 0.0], [-sin_g, 0.0, -cos_g]]
    )
    couch = np.array([[cos_c, sin_c, 0.0], [-sin_c, cos_c, 0.0], [0.0, 0.0, 1.0]])  # fixed axes to the couch's
    patient = np.array(PATIENT_POSITIONS[patient_position])
    u, v, d = (patient @ (couch @ axis) for axis in room)
    return BeamFrame(
        isocentre_mm=_triple(isocentre_mm),
        u_axis=_triple(u),
        v_axis=_triple(v),
        direction=_triple(d),
        source_distance_mm=None if source_distance_mm is None else float(source_distance_mm),
    )


def _sin_cos(angle_deg: float) -> tuple[float, float]:
    """Return sine and cosine, exact at whole quarter turns."""
    quarter, rest = divmod(float(angle_deg), 90.0)
    s, c = (0.0, 1.0) if rest == 0.0 else (float(np.sin(np.radians(rest))), float(np.cos(np.radians(rest))))
    turns = ((s, c), (c, -s), (-s, -c), (-c, s))
    return turns[int(quarter) % 4]


def _triple(values: ArrayLike) -> tuple[float, float, float]:
    """Return three plain floats, with no negative zero."""
    x, y, z = (float(value) + 0.0 for value in np.asarray(values, dtype=np.float64))
    return x, y, z
