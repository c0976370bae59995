"""Depth curves of particles that dosekit does not compute, brought in as CSV with their source.

The file begins with ``#`` lines ``key: text``; ``source`` and ``units`` are compulsory, ``treat_as`` names
the component whose effect constants apply (``primary`` when absent; ``star_heavy`` for densely ionising
ions).  Columns: ``depth_mm`` (rising, from the surface), ``dose`` (any unit), and, if known,
``let_kev_um``.

The curve is that of one energy.  Shifter steps are made by sliding it towards the surface, which holds for
water-like shifters close to the surface and leaves scattering and extra fragments out.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.basis.tables import parse_table
from dosekit.errors import InputError, TableError, UnknownNameError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["ImportedCurve", "read_curve"]


@dataclass(frozen=True, eq=False)
class ImportedCurve:
    """One depth curve from elsewhere.

    Parameters
    ----------
    name : str
        What it is called in tables and figures.
    source : str
        Where it comes from.
    depth_mm : ndarray, shape (n,)
        Depth in water, rising, mm.
    dose : ndarray, shape (n,)
        Dose, any unit.
    let_kev_um : ndarray or None
        Dose-averaged LET, keV/um.
    treat_as : str
        Component whose effect constants apply.
    """

    name: str
    source: str
    depth_mm: NDArray[np.float64]
    dose: NDArray[np.float64]
    let_kev_um: NDArray[np.float64] | None = None
    treat_as: str = "primary"

    def __post_init__(self) -> None:
        """Refuse a curve that cannot be used."""
        if not self.source.strip():
            raise InputError(f"curve {self.name!r} without a source", allowed="author, journal, year", remedy="add it")
        if self.treat_as not in COMPONENTS:
            raise UnknownNameError("component", self.treat_as, COMPONENTS)
        same = self.depth_mm.shape == self.dose.shape and self.depth_mm.ndim == 1 and len(self.depth_mm) >= 3
        if not same or not np.all(np.diff(self.depth_mm) > 0.0) or not np.all(np.isfinite(self.dose)):
            raise InputError(
                f"curve {self.name!r}: depths that do not rise or doses that do not fit",
                allowed="at least three rising depths with one finite dose each",
                remedy="correct the file",
            )
        if np.any(self.dose < 0.0) or not np.any(self.dose > 0.0):
            raise InputError(
                f"curve {self.name!r}: dose below 0 or nowhere above", allowed="0 or more", remedy="correct it"
            )
        let = self.let_kev_um
        if let is not None and (let.shape != self.dose.shape or not np.all(let >= 0.0)):
            raise InputError(
                f"curve {self.name!r}: LET that does not fit", allowed="0 or more per depth", remedy="correct it"
            )

    @property
    def peak_mm(self) -> float:
        """Depth of the largest dose, mm."""
        return float(self.depth_mm[int(np.argmax(self.dose))])

    def shifted(
        self, shift_mm: ArrayLike, *, depth_mm: ArrayLike
    ) -> tuple[NDArray[np.float64], NDArray[np.float64] | None]:
        """Give dose and LET behind shifters.

        Parameters
        ----------
        shift_mm : array_like, shape (k,)
            Thicknesses, mm water.
        depth_mm : array_like, shape (m,)
            Depths behind the surface, mm.

        Returns
        -------
        dose : ndarray, shape (k, m)
            Interpolated dose; 0 behind the curve's end.
        let_kev_um : ndarray, shape (k, m), or None
            Interpolated LET.
        """
        places = np.asarray(depth_mm, dtype=np.float64)[None, :] + np.asarray(shift_mm, dtype=np.float64)[:, None]
        dose = np.interp(places, self.depth_mm, self.dose, right=0.0)
        let = None if self.let_kev_um is None else np.interp(places, self.depth_mm, self.let_kev_um)
        return np.asarray(dose), None if let is None else np.asarray(let)


def read_curve(path: str | Path, *, name: str | None = None) -> ImportedCurve:
    """Read a depth curve with its source.

    Parameters
    ----------
    path : str or Path
        The CSV file.
    name : str, optional
        What to call it; the file's name when absent.

    Returns
    -------
    ImportedCurve
        The curve.

    Raises
    ------
    TableError, InputError
        A file without source or columns, or with a damaged row.
    """
    file = Path(path)
    try:
        text = file.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{file.name} cannot be read as text", remedy="give a CSV file in UTF-8") from error
    table = parse_table(text, name=file.name, required=("source", "units"))
    absent = [column for column in ("depth_mm", "dose") if column not in table.columns]
    if absent:
        raise TableError(
            f"{file.name}: no column {', '.join(absent)}",
            allowed="depth_mm, dose, let_kev_um",
            remedy="name the columns",
        )
    columns = {column: table[column] for column in ("depth_mm", "dose", "let_kev_um") if column in table.columns}
    for column, values in columns.items():
        if values.dtype.kind != "f" or not np.all(np.isfinite(values)):
            raise TableError(
                f"{file.name}: column {column} with words or gaps", allowed="numbers", remedy="mend the rows"
            )
    return ImportedCurve(
        name=file.stem if name is None else name,
        source=table.header["source"],
        depth_mm=np.array(columns["depth_mm"], dtype=np.float64),
        dose=np.array(columns["dose"], dtype=np.float64),
        let_kev_um=np.array(columns["let_kev_um"], dtype=np.float64) if "let_kev_um" in columns else None,
        treat_as=table.header.get("treat_as", "primary"),
    )
