"""A run in words: the one line on the console and the text summary beside the figures."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from dosekit.basis.components import COMPONENT_TITLES, STAR_COMPONENTS
from dosekit.caution import BANNER, CAUTION
from dosekit.errors import InputError
from dosekit.outputs.tables import spoken

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.outputs.tables import OutputTable

__all__ = ["RunSummary", "console_line", "key_lines", "mean_doses_gy", "star_share", "summary_text"]

_WIDTH = 100


@dataclass(frozen=True)
class RunSummary:
    """What a reader wants to know first.

    Parameters
    ----------
    title : str
        The study's title.
    target : str
        Name of the target.
    quantity : str
        What was made flat, e.g. ``"dose"`` or ``"effect-weighted dose"``.
    flatness_percent : float
        Largest deviation from the mean along the interval below, the worst of all fields.
    flat_field : str
        The field it was found in.
    flat_from_mm, flat_to_mm : float
        The interval it was judged over (water-equivalent depth): the target's less one step at each end.
    target_d98_percent, target_d2_percent : float
        Dose that 98 % and 2 % of the target receive, in % of the prescription.
    peak_depth_mm : float
        Water-equivalent depth of the deepest step's peak; with several fields, of the first.
    peak_to_entrance : float
        Peak over entrance of the modulated beam.
    star_share : float
        Share of the target's dose that comes from stars, 0 to 1.
    mean_dose_gy : float
        Mean target dose.
    beam_time_s : float
        Time for all fields at the stated rate.
    component_doses_gy : mapping of str to float
        Mean target dose of each component.
    measures : mapping of structure to mapping of str to float
        Volume measures.
    effect_measures : mapping of structure to mapping of str to float
        The same of the effect-weighted dose.
    energy_balance : mapping of str to float
        Where the energy went; the unit is in the name.
    energy_by_component : mapping of component to mapping of str to float
        Energy deposited; for stars also emitted, bound and escaped.
    sources, warnings : tuple of str
        What it rests on, and what was warned of.
    run_hash : str
        Hash of the run.
    unit : str
        Unit of the dose.
    """

    title: str
    target: str
    quantity: str
    flatness_percent: float
    peak_depth_mm: float
    peak_to_entrance: float
    star_share: float
    mean_dose_gy: float
    beam_time_s: float
    component_doses_gy: Mapping[str, float] = field(default_factory=dict)
    measures: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    effect_measures: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    energy_balance: Mapping[str, float] = field(default_factory=dict)
    energy_by_component: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    sources: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    run_hash: str = ""
    unit: str = "Gy"
    flat_field: str = ""
    flat_from_mm: float = float("nan")
    flat_to_mm: float = float("nan")
    target_d98_percent: float = float("nan")
    target_d2_percent: float = float("nan")


def console_line(summary: RunSummary) -> str:
    """Say in one line what is flat, where the peak is, what stars give, and that it is research only.

    Parameters
    ----------
    summary : RunSummary
        The run.

    Returns
    -------
    str
        One line without a newline.
    """
    where = f" in {summary.target} (D98 to D2)"
    if np.isfinite(summary.flat_from_mm):
        where = f" from {summary.flat_from_mm:.0f} to {summary.flat_to_mm:.0f} mm water (field '{summary.flat_field}')"
    spread = ""
    if np.isfinite(summary.target_d98_percent):
        spread = (
            f"D98 {summary.target_d98_percent:.0f} % and D2 {summary.target_d2_percent:.0f} % in {summary.target}, "
        )
    return (
        f"{summary.quantity} flat to ±{summary.flatness_percent:.1f} %{where}, {spread}"
        f"peak at {summary.peak_depth_mm:.0f} mm water, "
        f"{100.0 * summary.star_share:.0f} % of the target dose from stars. {BANNER}"
    )


def key_lines(summary: RunSummary) -> list[tuple[str, str]]:
    """Return the numbers that a reader wants first, each with what it is and where it was judged.

    Parameters
    ----------
    summary : RunSummary
        The run.

    Returns
    -------
    list of (str, str)
        Name and value with unit.
    """
    unit = summary.unit
    judged = "in water" if np.isfinite(summary.flat_from_mm) else "in the target (D98 to D2)"
    lines = [(f"{summary.quantity}, flat {judged} to", f"±{summary.flatness_percent:.1f} %")]
    if np.isfinite(summary.flat_from_mm):
        name = f"judged in water, field '{summary.flat_field}'"
        lines.append((name, f"{summary.flat_from_mm:.0f} to {summary.flat_to_mm:.0f} mm"))
    if np.isfinite(summary.target_d98_percent):
        spread = f"{summary.target_d98_percent:.0f} % and {summary.target_d2_percent:.0f} %"
        lines.append((f"D98 and D2 in {summary.target}", spread))
    return [
        *lines,
        (f"mean dose in {summary.target}", f"{summary.mean_dose_gy:.3f} {unit}"),
        ("share of it from stars", f"{100.0 * summary.star_share:.1f} %"),
        ("peak, depth in water", f"{summary.peak_depth_mm:.1f} mm"),
        ("peak over entrance", f"{summary.peak_to_entrance:.2f}"),
        ("beam time at the stated rate", f"{summary.beam_time_s:.1f} s"),
    ]


def mean_doses_gy(dose: xr.Dataset, coverage: ArrayLike, *, variable: str = "dose") -> dict[str, float]:
    """Return the mean dose of each component in a structure.

    Parameters
    ----------
    dose : Dataset
        ``dose(component, z, y, x)`` in Gy.
    coverage : array_like, shape (nz, ny, nx)
        Part of each voxel inside the structure, 0 to 1, on the dose grid.
    variable : str
        Name of the variable.

    Returns
    -------
    dict of str to float
        Component to mean dose in Gy.
    """
    array = dose[variable].transpose("component", "z", "y", "x")
    weights = np.asarray(coverage, dtype=np.float64)
    if weights.shape != array.shape[1:]:
        raise InputError(f"a coverage of shape {weights.shape} for a dose of shape {array.shape[1:]}")
    whole = float(weights.sum())
    if not whole > 0.0:
        raise InputError("a structure without volume on the dose grid", remedy="use a finer dose grid")
    inside = weights > 0.0
    return {
        str(name): float(np.sum(np.asarray(array.values[i])[inside] * weights[inside], dtype=np.float64)) / whole
        for i, name in enumerate(array["component"].values)
    }


def star_share(component_doses_gy: Mapping[str, float]) -> float:
    """Return the share of a dose that comes from stars.

    Parameters
    ----------
    component_doses_gy : mapping of str to float
        Dose of each component.

    Returns
    -------
    float
        0 to 1; 0 without any dose.

    Examples
    --------
    >>> star_share({"primary": 1.5, "star_light": 0.4, "star_heavy": 0.1})
    0.25
    """
    whole = sum(component_doses_gy.values())
    stars = sum(dose for name, dose in component_doses_gy.items() if name in STAR_COMPONENTS)
    return stars / whole if whole > 0.0 else 0.0


def summary_text(summary: RunSummary, *, settings: OutputTable | None = None) -> str:
    """Write the run down as plain text.

    Parameters
    ----------
    summary : RunSummary
        The run.
    settings : OutputTable, optional
        The settings table, printed at the end.

    Returns
    -------
    str
        Text with the caution on top.
    """
    unit = summary.unit
    parts = [
        _wrapped(CAUTION),
        _heading(summary.title),
        _pairs([*key_lines(summary), ("run", summary.run_hash[:16] or "not hashed")]),
    ]
    if summary.component_doses_gy:
        whole = sum(summary.component_doses_gy.values()) or 1.0
        parts += [
            _heading(f"Mean dose in {summary.target} by component"),
            _pairs(
                [
                    (COMPONENT_TITLES.get(name, name), f"{dose:.4f} {unit}  {100.0 * dose / whole:5.1f} %")
                    for name, dose in summary.component_doses_gy.items()
                ]
            ),
        ]
    for quantity, measures in (("", summary.measures), (", effect-weighted dose", summary.effect_measures)):
        for structure, values in measures.items():
            pairs = [(spoken(name), f"{value:.4g}") for name, value in values.items()]
            parts += [_heading(f"{structure}{quantity}"), _pairs(pairs)]
    if summary.energy_balance:
        parts += [
            _heading("Energy balance"),
            _pairs([(spoken(name), f"{value:.6g}") for name, value in summary.energy_balance.items()]),
        ]
    if settings is not None:
        parts += [_heading("Settings"), settings.text(), f"({settings.units})\n"]
    parts += [_heading("Warnings"), _list(summary.warnings, empty="none")]
    parts += [_heading("Sources"), _list(summary.sources, empty="see the run record")]
    return "\n".join(parts)


def _heading(text: str) -> str:
    return f"\n{text}\n{'=' * len(text)}"


def _pairs(pairs: Sequence[tuple[str, str]]) -> str:
    width = max(len(name) for name, _ in pairs)
    return "\n".join(f"{name.ljust(width)}  {value}" for name, value in pairs)


def _list(lines: Sequence[str], *, empty: str) -> str:
    return "\n".join(
        textwrap.fill(line, _WIDTH, initial_indent="- ", subsequent_indent="  ") for line in lines or (empty,)
    )


def _wrapped(text: str) -> str:
    return textwrap.fill(text, _WIDTH)
