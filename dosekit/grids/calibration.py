"""From HU to matter: density and composition of every voxel of a CT.

A calibration is a chain of reference tissues, each with its HU, density and composition. Between two neighbours a
voxel is taken as a mixture of both by volume, with the share that its HU says::

    v = (HU_2 - HU) / (HU_2 - HU_1),   rho = v rho_1 + (1 - v) rho_2,   w = (v rho_1 w_1 + (1 - v) rho_2 w_2) / rho

(the attenuation adds by volume, so this is what the stoichiometric method of Schneider, Pedroni and Lomax, Phys. Med.
Biol. 41 (1996) 111 says of a mixture; Schneider, Bortfeld and Schlegel, Phys. Med. Biol. 45 (2000) 459 write it the
same way). Density follows the HU of each voxel; composition is taken from a few dozen bins of HU. Relative stopping
power, scattering and capture then follow from density and composition, as for any other material.

HU below -1000 (air clipped at -1024, padding of -1500 or -3024) count as -1000. Beyond the last tissue the last one
is taken and a warning counts the voxels: metal must be told by an override, never guessed.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any
from warnings import warn

import numpy as np

from dosekit.basis.materials import Material, material, mixture
from dosekit.errors import CalibrationError, CalibrationWarning, DosekitError
from dosekit.grids.attenuation import KAPPA_COHERENT, KAPPA_PHOTO, hounsfield_units
from dosekit.grids.tissues import usual_chain

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = [
    "AIR_HU",
    "Calibration",
    "CalibrationCurve",
    "read_calibration",
    "stoichiometric_calibration",
]

AIR_HU = -1000
"""HU below this count as this."""

_FINE_STEP_HU, _COARSE_STEP_HU = 20.0, 100.0
_FINE_RANGE_HU = (-120.0, 200.0)
_AIR_SLACK_HU = 5  # a chain that begins with air begins a little above -1000
_HU_RANGE = (-1100.0, 40000.0)
_LARGEST_FILE_BYTES = 1_000_000
_MOST_ROWS = 500


@dataclass(frozen=True)
class CalibrationCurve:
    """What a calibration says over a range of HU, for a figure or a table.

    Parameters
    ----------
    hu : ndarray
        HU, increasing.
    density_g_cm3, relative_stopping_power : ndarray
        Density, and stopping power per length over that of water for pions of 60 MeV.
    star_energy_mev : ndarray
        Energy of charged star products per stopped negative pion, MeV.
    tissues : dict
        Reference tissue to (HU, density, relative stopping power).
    """

    hu: NDArray[np.float64]
    density_g_cm3: NDArray[np.float64]
    relative_stopping_power: NDArray[np.float64]
    star_energy_mev: NDArray[np.float64]
    tissues: dict[str, tuple[float, float, float]]


@dataclass(frozen=True)
class Calibration:
    """A chain of tissues over HU.

    Parameters
    ----------
    name : str
        Shown in outputs.
    nodes_hu : tuple of float
        HU of the tissues, strictly increasing, at least two.
    tissues : tuple of Material
        The tissues, each at its density.
    source : dict
        Where the numbers come from.

    Raises
    ------
    CalibrationError
        When the chain cannot be used.

    Examples
    --------
    >>> usual = stoichiometric_calibration()
    >>> bool(0.99 < usual.density_g_cm3(0.0) < 1.03)
    True
    """

    name: str
    nodes_hu: tuple[float, ...]
    tissues: tuple[Material, ...]
    source: dict[str, Any] = field(default_factory=dict, compare=False)

    def __post_init__(self) -> None:
        """Check the chain."""
        hu = self.nodes_hu
        if len(hu) < 2 or len(hu) != len(self.tissues):
            raise CalibrationError(
                f"a calibration of {len(hu)} HU and {len(self.tissues)} tissues",
                allowed="at least two rows, one tissue each",
                remedy="add rows for air and bone",
            )
        if not all(math.isfinite(v) and _HU_RANGE[0] <= v <= _HU_RANGE[1] for v in hu):
            raise CalibrationError(
                f"HU {hu}", allowed=f"finite, {_HU_RANGE[0]:g} to {_HU_RANGE[1]:g}", remedy="correct the table"
            )
        if any(b <= a for a, b in pairwise(hu)):
            raise CalibrationError(
                f"HU in the order {', '.join(f'{v:g}' for v in hu)}",
                allowed="strictly increasing HU",
                remedy="sort the rows and remove doubled HU",
            )
        densities = [tissue.density_g_cm3 for tissue in self.tissues]
        if any(b < a for a, b in pairwise(densities)):
            raise CalibrationError(
                f"densities {', '.join(f'{v:g}' for v in densities)} g/cm3",
                allowed="densities that do not fall as HU rise",
                remedy="correct the table, or leave out the row",
            )

    def density_g_cm3(self, hu: ArrayLike) -> NDArray[np.float64]:
        """Return the density at given HU, clamped at the ends of the chain.

        Parameters
        ----------
        hu : array_like
            HU.

        Returns
        -------
        ndarray
            Density, g/cm3.
        """
        densities = [tissue.density_g_cm3 for tissue in self.tissues]
        return np.asarray(np.interp(np.asarray(hu, dtype=float), self.nodes_hu, densities))

    def tissue(self, hu: float) -> Material:
        """Return the mixture of neighbours at given HU.

        Parameters
        ----------
        hu : float
            HU, clamped at the ends of the chain.

        Returns
        -------
        Material
            The mixture at its density.
        """
        at = float(np.clip(hu, self.nodes_hu[0], self.nodes_hu[-1]))
        right = int(np.clip(np.searchsorted(self.nodes_hu, at), 1, len(self.nodes_hu) - 1))
        low, high = self.tissues[right - 1], self.tissues[right]
        share = (self.nodes_hu[right] - at) / (self.nodes_hu[right] - self.nodes_hu[right - 1])
        density = share * low.density_g_cm3 + (1.0 - share) * high.density_g_cm3
        if share >= 1.0 - 1e-12 or share <= 1e-12:
            return low if share > 0.5 else high
        weight = share * low.density_g_cm3 / density
        return mixture(f"tissue at {at:.0f} HU", [(low, weight), (high, 1.0 - weight)], density)

    @cached_property
    def bins_hu(self) -> NDArray[np.float64]:
        """Edges of the bins of one composition each, HU."""
        low, high = self.nodes_hu[0], self.nodes_hu[-1]
        edges = [low]
        while edges[-1] < high:
            fine = _FINE_RANGE_HU[0] <= edges[-1] + 1e-9 < _FINE_RANGE_HU[1]
            step = _FINE_STEP_HU if fine else _COARSE_STEP_HU
            following = math.floor(edges[-1] / step + 1e-9) * step + step
            if edges[-1] < _FINE_RANGE_HU[0]:
                following = min(following, _FINE_RANGE_HU[0])
            edges.append(min(following, high))
        return np.array(edges)

    @cached_property
    def compositions(self) -> tuple[Material, ...]:
        """Tissue of each bin, taken at its middle."""
        edges = self.bins_hu
        return tuple(self.tissue(0.5 * (a + b)) for a, b in pairwise(edges))

    def matter(
        self, hu: NDArray[Any], *, padding: NDArray[np.bool_] | None = None
    ) -> tuple[NDArray[np.float32], NDArray[np.uint16], tuple[Material, ...], int]:
        """Return density and composition of every voxel.

        Parameters
        ----------
        hu : ndarray
            HU of the voxels.
        padding : ndarray of bool, optional
            Voxels that are air whatever their HU.

        Returns
        -------
        tuple
            Density (g/cm3, float32), index of composition (uint16), the compositions, and how many voxels lie beyond
            the chain.

        Warns
        -----
        CalibrationWarning
            When voxels lie beyond the chain; they get the tissue at its end.
        """
        low, high = math.floor(self.nodes_hu[0]), math.ceil(self.nodes_hu[-1])
        top = max(AIR_HU, high) + 1  # the last cell of the tables stands for all that lies above
        cells = np.arange(AIR_HU, top + 1, dtype=float)
        density_of = self.density_g_cm3(cells).astype(np.float32)
        bin_of = np.clip(np.searchsorted(self.bins_hu, cells, side="right") - 1, 0, len(self.compositions) - 1)

        def cells_of(plane: int) -> NDArray[np.intp]:
            values = hu[plane] if hu.dtype.kind == "i" else np.rint(hu[plane])
            if padding is not None:
                values = np.where(padding[plane], AIR_HU, values)
            return np.asarray(np.clip(values, AIR_HU, top), dtype=np.intp) - AIR_HU

        voxels = np.zeros(len(cells), dtype=np.int64)
        for plane in range(hu.shape[0]):
            voxels += np.bincount(cells_of(plane).ravel(), minlength=len(cells))
        used = np.unique(bin_of[voxels > 0])
        numbers = np.searchsorted(used, bin_of).astype(np.uint16)
        density = np.empty(hu.shape, dtype=np.float32)
        index = np.empty(hu.shape, dtype=np.uint16)
        for plane in range(hu.shape[0]):
            which = cells_of(plane)
            density[plane] = density_of[which]
            index[plane] = numbers[which]
        above = int(voxels[cells > high].sum())
        below = int(voxels[cells < low].sum()) if low > AIR_HU + _AIR_SLACK_HU else 0
        highest = float(hu.max()) if above else 0.0
        if above or below:
            sides = [f"{above} voxels above {high} HU (highest {highest:.0f})"] if above else []
            sides += [f"{below} voxels below {low} HU"] if below else []
            warn(
                f"HU outside the calibration {self.name!r}: {' and '.join(sides)}; they get the tissue at its end. "
                "Metal needs an override by structure.",
                CalibrationWarning,
                stacklevel=2,
            )
        return density, index, tuple(self.compositions[int(i)] for i in used), above + below

    def curve(self, *, step_hu: float = 5.0, yields: str = "evaluated") -> CalibrationCurve:
        """Return density, relative stopping power and star energy over HU.

        Parameters
        ----------
        step_hu : float
            Distance of the points, HU.
        yields : {"evaluated", "cascade"}
            Set of star yields.

        Returns
        -------
        CalibrationCurve
            The curves and the reference tissues.
        """
        from dosekit.beams.stopping import relative_stopping_power
        from dosekit.capture.stars import star_energy_mev

        low, high = self.nodes_hu[0], self.nodes_hu[-1]
        hu = np.unique(np.append(np.arange(low, high, step_hu), high))
        which = np.clip(np.searchsorted(self.bins_hu, hu, side="right") - 1, 0, len(self.compositions) - 1)
        ratios = [relative_stopping_power(tissue) / tissue.density_g_cm3 for tissue in self.compositions]
        energies = [star_energy_mev(tissue, yields) for tissue in self.compositions]
        stars = [energy["star_light"] + energy["star_heavy"] for energy in energies]
        density = self.density_g_cm3(hu)
        points = {
            tissue.name: (units, tissue.density_g_cm3, relative_stopping_power(tissue))
            for units, tissue in zip(self.nodes_hu, self.tissues, strict=True)
        }
        return CalibrationCurve(hu, density, np.array(ratios)[which] * density, np.array(stars)[which], points)


def stoichiometric_calibration(
    kappa_coherent: float = KAPPA_COHERENT,
    kappa_photo: float = KAPPA_PHOTO,
    *,
    tissues: Sequence[str | Material] | None = None,
) -> Calibration:
    """Compute a calibration from reference tissues and the scanner's coefficients.

    Parameters
    ----------
    kappa_coherent, kappa_photo : float
        The scanner's coefficients over its Klein-Nishina coefficient; `fit_kappas` finds them from inserts.
    tissues : sequence of str or Material, optional
        The chain, by rising HU; air, inflated lung, fat, soft tissue, muscle, skin, spongy, compact and
        cortical bone by default.

    Returns
    -------
    Calibration
        The calibration.

    Raises
    ------
    CalibrationError
        When the coefficients are impossible or the tissues do not rise in HU and density.

    Examples
    --------
    >>> round(stoichiometric_calibration().nodes_hu[0])
    -999
    """
    if not (0.0 <= kappa_coherent < 0.1 and 0.0 <= kappa_photo < 0.01):
        raise CalibrationError(
            f"coefficients {kappa_coherent!r} and {kappa_photo!r}",
            allowed="0 to 0.1 (coherent) and 0 to 0.01 (photo-electric)",
            remedy="fit them to a scan of known inserts",
        )
    chain = usual_chain() if tissues is None else [material(tissue) for tissue in tissues]
    units = [hounsfield_units(t, kappa_coherent=kappa_coherent, kappa_photo=kappa_photo) for t in chain]
    return Calibration(
        name="stoichiometric",
        nodes_hu=tuple(units),
        tissues=tuple(chain),
        source={"method": "Schneider 1996", "kappa_coherent": kappa_coherent, "kappa_photo": kappa_photo},
    )


def read_calibration(path: str | Path) -> Calibration:
    """Read a calibration from a CSV table.

    The columns are ``hu``, ``density_g_cm3`` and, if wanted, ``material`` (a name of the table of materials); lines
    that begin with ``#`` are comments. Without materials the compositions are those of the usual chain at that HU.

    Parameters
    ----------
    path : str or Path
        The table.

    Returns
    -------
    Calibration
        The calibration.

    Raises
    ------
    CalibrationError
        When the table cannot be read or used; the line is named.
    """
    import hashlib

    file = Path(path)
    try:
        if file.stat().st_size > _LARGEST_FILE_BYTES:
            raise CalibrationError(f"{file.name} has {file.stat().st_size} bytes", allowed="a table below 1 MB")
        raw = file.read_bytes()
        text = raw.decode("utf-8-sig")
    except (OSError, UnicodeDecodeError, ValueError) as problem:
        if isinstance(problem, DosekitError):
            raise
        raise CalibrationError(
            f"calibration {str(path)!r} cannot be read: {problem}", allowed="a CSV table in UTF-8",
            remedy="check the file",
        ) from None  # fmt: skip
    lines = [(number, line) for number, line in enumerate(text.splitlines(), start=1) if line.strip()]
    lines = [(number, line) for number, line in lines if not line.lstrip().startswith("#")]
    if not lines or len(lines) > _MOST_ROWS:
        raise CalibrationError(
            f"{file.name} has {len(lines)} lines", allowed=f"a heading and 2 to {_MOST_ROWS - 1} rows"
        )
    heading = [name.strip().lower() for name in next(csv.reader(io.StringIO(lines[0][1])))]
    if heading not in (["hu", "density_g_cm3"], ["hu", "density_g_cm3", "material"]):
        raise CalibrationError(
            f"{file.name}, line {lines[0][0]}: columns {', '.join(heading)}",
            allowed="hu,density_g_cm3 or hu,density_g_cm3,material",
            remedy="write the heading so",
        )
    usual = stoichiometric_calibration()
    nodes, tissues = [], []
    for number, line in lines[1:]:
        units, tissue = _row(line, len(heading), f"{file.name}, line {number}", usual)
        nodes.append(units)
        tissues.append(tissue)
    source = {"file": file.name, "sha256": hashlib.sha256(raw).hexdigest()}
    try:
        return Calibration(file.stem, tuple(nodes), tuple(tissues), source)
    except CalibrationError as problem:
        raise CalibrationError(
            f"{file.name}: {problem.found}", allowed=problem.allowed, remedy=problem.remedy
        ) from None


def _row(line: str, columns: int, where: str, usual: Calibration) -> tuple[float, Material]:
    """Read one row of a table."""
    try:
        cells = [cell.strip() for cell in next(csv.reader(io.StringIO(line), strict=True))]
        if len(cells) != columns:
            raise CalibrationError(f"{where}: {len(cells)} cells", allowed=f"{columns} cells", remedy="correct the row")
        units, density = float(cells[0]), float(cells[1])
    except (ValueError, csv.Error, StopIteration) as problem:
        if isinstance(problem, DosekitError):
            raise
        raise CalibrationError(
            f"{where}: {line[:60]!r}", allowed="numbers hu,density_g_cm3", remedy="correct it"
        ) from None
    if not (math.isfinite(units) and math.isfinite(density) and 1e-6 <= density <= 25.0):
        raise CalibrationError(
            f"{where}: HU {units:g} and density {density:g} g/cm3",
            allowed="finite HU and a density of 1e-6 to 25 g/cm3",
            remedy="correct the row",
        )
    if columns == 3 and cells[2]:
        return units, material(cells[2], density_g_cm3=density)
    return units, usual.tissue(units).replace(name=f"table at {units:g} HU", density_g_cm3=density)
