"""Errors and warnings: what was found, what is allowed, what to do.

::

    DosekitError
    |-- InputError (ValueError)       the input is at fault; exit status 2
    |   |-- UnknownNameError          a name that is not in a table; the nearest is suggested
    |   |-- TableError                a data table is damaged; file and line are named
    |   |-- MaterialError             a material that cannot exist
    |   |-- BeamError                 a beam that cannot exist, or whose range is too short to model
    |   |-- StudyError                a study file that does not say what to do
    |   |-- GridError                 a voxel volume, phantom or structure that does not fit
    |   |-- ReachError                the beam does not reach the target
    |   |-- SizeError                 the work would take more memory or time than allowed
    |   |-- CalibrationError          a HU calibration that cannot be used
    |   `-- DicomError                a DICOM file or set that cannot be used
    |       |-- SeriesError           which files belong together is unclear or wrong
    |       |-- GeometryError         positions, spacing or orientation cannot be trusted
    |       `-- StructureError        contours that cannot be turned into a volume
    `-- OutputError                   results could not be written; exit status 1

    DosekitWarning (UserWarning)
    |-- ValidityWarning               a model is used outside what it was made for
    |-- CalibrationWarning            HU values outside the calibration were clamped
    |-- FitWarning                    a fit cannot tell its parameters apart, or ended at a limit
    |-- GeometryWarning               geometry was repaired or a field misses the volume
    `-- SettingsWarning               the chosen settings do not reach their goal
"""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches

__all__ = [
    "BeamError",
    "CalibrationError",
    "CalibrationWarning",
    "DicomError",
    "DosekitError",
    "DosekitWarning",
    "FitWarning",
    "GeometryError",
    "GeometryWarning",
    "GridError",
    "InputError",
    "MaterialError",
    "OutputError",
    "ReachError",
    "SeriesError",
    "SettingsWarning",
    "SizeError",
    "StructureError",
    "StudyError",
    "TableError",
    "UnknownNameError",
    "ValidityWarning",
]


class DosekitError(Exception):
    """Any error that dosekit raises on purpose.

    Parameters
    ----------
    found : str
        What was found.
    allowed : str, optional
        What is allowed.
    remedy : str, optional
        What to do.
    """

    def __init__(self, found: str, *, allowed: str = "", remedy: str = "") -> None:
        self.found = found.rstrip(".")
        self.allowed = allowed.rstrip(".")
        self.remedy = remedy.rstrip(".")
        parts = [self.found]
        if allowed:
            parts.append(f"Allowed: {self.allowed}")
        if remedy:
            parts.append(f"What to do: {self.remedy}")
        super().__init__(". ".join(parts) + ".")


class InputError(DosekitError, ValueError):
    """The input is at fault."""


class UnknownNameError(InputError):
    """A name that is not in a table.

    Parameters
    ----------
    kind : str
        What the name should be, e.g. ``"material"``.
    name : str
        The name that was given.
    known : iterable of str
        The names there are.
    """

    def __init__(self, kind: str, name: object, known: Iterable[str]) -> None:
        names = sorted(map(str, known))
        lowered = {known_name.lower(): known_name for known_name in names}
        near = get_close_matches(str(name).lower(), list(lowered), n=1, cutoff=0.5)
        super().__init__(
            f"unknown {kind} {str(name)!r}",
            allowed=", ".join(names),
            remedy=f"did you mean {lowered[near[0]]!r}?".rstrip("?") if near else "choose one of these names",
        )


class TableError(InputError):
    """A data table is damaged; file and line are named."""


class MaterialError(InputError):
    """A material that cannot exist."""


class BeamError(InputError):
    """A beam that cannot exist or cannot be modelled."""


class StudyError(InputError):
    """A study file that does not say what to do."""


class GridError(InputError):
    """A voxel volume, phantom or structure that does not fit."""


class ReachError(InputError):
    """The beam does not reach the target."""


class SizeError(InputError):
    """The work would take more memory or time than allowed."""


class CalibrationError(InputError):
    """A HU calibration that cannot be used."""


class DicomError(InputError):
    """A DICOM file or set that cannot be used."""


class SeriesError(DicomError):
    """Which files belong together is unclear or wrong."""


class GeometryError(DicomError):
    """Positions, spacing or orientation cannot be trusted."""


class StructureError(DicomError):
    """Contours that cannot be turned into a volume."""


class OutputError(DosekitError):
    """Results could not be written."""


class DosekitWarning(UserWarning):
    """Any warning that dosekit gives on purpose."""


class ValidityWarning(DosekitWarning):
    """A model is used outside what it was made for."""


class CalibrationWarning(DosekitWarning):
    """HU values outside the calibration were clamped."""


class FitWarning(DosekitWarning):
    """A fit cannot tell its parameters apart, or ended at a limit."""


class GeometryWarning(DosekitWarning):
    """Geometry was repaired, or a field misses the volume."""


class SettingsWarning(DosekitWarning):
    """The chosen settings do not reach their goal."""
