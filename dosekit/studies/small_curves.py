"""The small verbs about one beam: a depth curve, and a beam fitted to a measured one."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from dosekit.basis.components import COMPONENT_TITLES, COMPONENTS
from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.studies.places import made_folder

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.depths.fitting import BeamFit
    from dosekit.depths.layers import Layers

__all__ = [
    "curve_summary",
    "depth_curve_of",
    "fit_summary",
    "fit_to_file",
    "parse_medium",
    "write_curve",
    "write_fit",
]

_HASH_OF_NO_RUN = "not part of a run"


def parse_medium(text: str) -> str | Layers:
    """Turn words for a medium into a material or layers.

    Parameters
    ----------
    text : str
        A material's name, or layers as ``"muscle_skeletal:50,lung_tissue@0.3:80,water:300"``: name, density in
        g/cm3 after ``@`` where it differs, thickness in mm after ``:``.

    Returns
    -------
    str or Layers
        The medium.

    Raises
    ------
    InputError
        If the words cannot be read.

    Examples
    --------
    >>> parse_medium("muscle_skeletal:50,lung_tissue@0.3:80,water:300").total_mm
    430.0
    """
    if ":" not in text and "@" not in text:
        return text
    from dosekit.basis.materials import material
    from dosekit.depths.layers import Layers

    parts = []
    for piece in text.split(","):
        name, _, thickness = piece.strip().partition(":")
        name, _, density = name.partition("@")
        try:
            dense = float(density) if density else None
            parts.append((material(name.strip(), dense), float(thickness)))
        except InputError:
            raise
        except ValueError as error:
            raise InputError(
                f"layer {piece.strip()!r}", allowed="name:mm or name@density:mm, separated by commas"
            ) from error
    return Layers(parts)


def depth_curve_of(
    particle: str,
    momentum_mev_c: float,
    *,
    spread: float = 0.0,
    medium: str = "water",
    contaminants: Mapping[str, float] | None = None,
    yields: str = "evaluated",
    bin_mm: float = 1.0,
) -> xr.Dataset:
    """Return a depth curve from a few words.

    Parameters
    ----------
    particle : str
        Main species.
    momentum_mev_c : float
        Mean momentum, MeV/c.
    spread : float
        Standard deviation of momentum over its mean.
    medium : str
        See :func:`parse_medium`.
    contaminants : mapping of str to float, optional
        Muons and electrons per beam particle.
    yields : str
        Star yields.
    bin_mm : float
        Depth bin, mm.

    Returns
    -------
    Dataset
        The curve; its title says what it is.
    """
    from dosekit.beams.beam import Beam
    from dosekit.depths.curves import depth_curve

    beam = Beam(particle, momentum_mev_c=momentum_mev_c, momentum_sigma=spread, contaminants=contaminants or None)
    curve = depth_curve(beam, parse_medium(medium), yields=yields, bin_mm=bin_mm)
    curve.attrs["title"] = f"{particle} {momentum_mev_c:g} MeV/c (spread {100 * spread:g} %) in {medium}"
    return curve


def curve_summary(curve: xr.Dataset) -> str:
    """Say where a depth curve peaks and what each component leaves.

    Parameters
    ----------
    curve : Dataset
        A depth curve.

    Returns
    -------
    str
        A few lines, the research-only words at the end.
    """
    from dosekit.outputs.marks import curve_marks

    total = curve["energy"].sum("component").values
    marks = curve_marks(curve["depth"].values, total)
    step = float(curve["depth"].values[1] - curve["depth"].values[0])
    peak = f"peak at {marks.peak_depth_mm:.1f} mm, {marks.peak_to_entrance:.2f} times the entrance"
    fall = f"80 % at {marks.distal_80_mm:.1f} mm, 80 to 20 % in {marks.distal_fall_mm:.1f} mm"
    lines = [
        str(curve.attrs.get("title", "depth curve")),
        f"  {peak}; {fall}",
        f"  stops per beam particle {float(curve['stops'].sum()) * step:.3f}",
    ]
    whole = float(total.sum()) * step
    for name in COMPONENTS:
        part = float(curve["energy"].sel(component=name).sum()) * step
        if part > 0.0:
            lines.append(f"  {part:8.2f} MeV  {100 * part / whole:5.1f} %  {COMPONENT_TITLES[name]}")
    lines.append(BANNER)
    return "\n".join(lines)


def write_curve(curve: xr.Dataset, folder: str | Path) -> list[Path]:
    """Write a depth curve as CSV, NetCDF and figure.

    Parameters
    ----------
    curve : Dataset
        A depth curve.
    folder : str or Path
        Where; made if it is not there.

    Returns
    -------
    list of Path
        The files.
    """
    from dosekit.outputs.figures_depth import depth_curve_figure
    from dosekit.outputs.netcdf import write_dataset
    from dosekit.outputs.style import write_figure
    from dosekit.outputs.tables import depth_curve_table

    where = made_folder(folder)
    table = depth_curve_table(curve).write(where / "curve.csv", run_hash=_HASH_OF_NO_RUN)
    data = write_dataset(curve, where / "curve.nc", run_hash=_HASH_OF_NO_RUN, title=str(curve.attrs.get("title", "")))
    files = write_figure(depth_curve_figure(curve, title=str(curve.attrs.get("title", ""))), where / "curve")
    return [table, data, files.pdf, files.png]


def fit_to_file(
    path: str | Path, *, particle: str, momentum_mev_c: float, medium: str = "water", offset: bool = False
) -> BeamFit:
    """Fit momentum, spread, muons and electrons to a measured depth dose in a CSV file.

    Parameters
    ----------
    path : str or Path
        CSV of depth (mm) and relative dose.
    particle : str
        Main species.
    momentum_mev_c : float
        First guess, MeV/c.
    medium : str
        See :func:`parse_medium`.
    offset : bool
        Whether the zero of depth is fitted too; it nearly stands for the momentum.

    Returns
    -------
    BeamFit
        The fit.
    """
    from dosekit.beams.beam import Beam
    from dosekit.depths.fitting import fit_beam, read_depth_dose

    depth, dose = read_depth_dose(path)
    free = ["momentum_mev_c", "momentum_sigma", *(["offset_mm"] if offset else [])]
    contaminants: dict[str, float] | None = None
    if particle in ("pi-", "pi+"):
        sign = particle[-1]
        contaminants = {f"mu{sign}": 0.05, f"e{sign}": 0.1}
        free += list(contaminants)
    beam = Beam(particle, momentum_mev_c=momentum_mev_c, momentum_sigma=0.02, contaminants=contaminants)
    return fit_beam(depth, dose, beam, parse_medium(medium), free=tuple(free))


def fit_summary(fit: BeamFit) -> str:
    """Say what a fit found.

    Parameters
    ----------
    fit : BeamFit
        The fit.

    Returns
    -------
    str
        Parameters with their standard deviations, and the largest correlation.
    """
    lines = [f"fitted {fit.beam.particle} beam, rms residual {100 * fit.residual_rms:.2f} % of the peak"]
    lines += [f"  {name:16s} {value:10.4f} ± {fit.sigma[name]:.4f}" for name, value in fit.parameters.items()]
    pairs = {(i, j): fit.correlation[i, j] for i in range(len(fit.parameters)) for j in range(i)}
    if pairs:
        i, j = max(pairs, key=lambda pair: abs(pairs[pair]))
        names = list(fit.parameters)
        lines.append(f"  largest correlation: {names[j]} with {names[i]}, {pairs[i, j]:.2f}")
    lines.append(BANNER)
    return "\n".join(lines)


def write_fit(fit: BeamFit, folder: str | Path) -> list[Path]:
    """Write a fit as tables and a figure of data, fit and residual.

    Parameters
    ----------
    fit : BeamFit
        The fit.
    folder : str or Path
        Where.

    Returns
    -------
    list of Path
        The files.
    """
    from dosekit.outputs.figures_fit import fit_figure
    from dosekit.outputs.style import write_figure
    from dosekit.outputs.tables import OutputTable

    where = made_folder(folder)
    names = tuple(fit.parameters)
    rows: tuple[tuple[str | float, ...], ...] = tuple(
        (name, fit.parameters[name], fit.sigma[name], *(float(value) for value in fit.covariance[row]))
        for row, name in enumerate(names)
    )
    table = OutputTable(
        f"fit of a {fit.beam.particle} beam to a measured depth dose",
        ("parameter", "value", "sigma", *(f"covariance_{name}" for name in names)),
        "momentum MeV/c; spread as fraction; offset mm; contaminants per beam particle",
        rows,
    ).write(where / "fit.csv", run_hash=_HASH_OF_NO_RUN)
    data = fit.data
    units = {"momentum_mev_c": "MeV/c", "offset_mm": "mm"}
    figure = fit_figure(
        data["depth"].values,
        data["measured"].values,
        fit_depth_mm=data["depth"].values,
        fitted=data["fitted"].values,
        parameters={name: (value, fit.sigma[name], units.get(name, "")) for name, value in fit.parameters.items()},
    )
    files = write_figure(figure, where / "fit")
    return [table, files.pdf, files.png]
