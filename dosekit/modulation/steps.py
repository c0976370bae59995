"""Which range steps, with which weights, make the dose flat over a depth interval?

The mathematics is in `dosekit.modulation.flattening`.

Device limits: ranges nearer than the smallest step are passed over from the deepest up; while the lightest
step has less than the smallest share, or steps are too many, the lightest is dropped and the rest solved
again.

Flatness is judged over the interval less one step at each end.  Validity: broad fields (lateral
equilibrium) in water.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError, ReachError, SettingsWarning
from dosekit.modulation.devices import DeviceLimits
from dosekit.modulation.flattening import SMOOTHING, EffectCurves, FlatteningProblem, weighted_curve
from dosekit.modulation.profiles import ProfileMeasures, profile_measures

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["EffectCurves", "StepSettings", "candidate_ranges_mm", "range_steps"]


@dataclass(frozen=True)
class StepSettings:
    """Range steps found for an interval, deepest first.

    Parameters
    ----------
    residual_range_mm, shift_mm : ndarray, shape (k,)
        Residual range behind the shifter and the shifter's water-equivalent thickness, mm.
    weights : ndarray, shape (k,)
        Weight of each step (unit: that of the doses handed over; all above 0).
    share : ndarray, shape (k,)
        Weights over their sum.
    index : ndarray of int, shape (k,)
        Row of each step among the candidates handed over.
    depth_mm, dose : ndarray, shape (n,)
        Depths and the physical dose of all steps together.
    effect_dose : ndarray or None
        Effect-weighted dose, when that was flattened.
    interval_mm : (float, float)
        Interval asked for.
    measures : ProfileMeasures
        Flatness, distal fall and entrance of the flattened quantity.
    quantity : str
        ``physical`` or ``effect``.
    history : tuple of float
        Root-mean-square deviation from the wanted dose in the interval after each round.
    stopped_because : str
        Stopping rule that applied.
    """

    residual_range_mm: NDArray[np.float64]
    shift_mm: NDArray[np.float64]
    weights: NDArray[np.float64]
    share: NDArray[np.float64]
    index: NDArray[np.int64]
    depth_mm: NDArray[np.float64]
    dose: NDArray[np.float64]
    effect_dose: NDArray[np.float64] | None
    interval_mm: tuple[float, float]
    measures: ProfileMeasures
    quantity: str
    history: tuple[float, ...]
    stopped_because: str

    @property
    def flatness(self) -> float:
        """Largest deviation from the mean over the interval less one step at each end, as a fraction."""
        return self.measures.flatness

    @property
    def flattened(self) -> NDArray[np.float64]:
        """The curve that was made flat."""
        return self.dose if self.effect_dose is None else self.effect_dose


def candidate_ranges_mm(
    interval_mm: tuple[float, float],
    *,
    full_range_mm: float,
    step_mm: float = 5.0,
    peak_offset_mm: float = 0.0,
    limits: DeviceLimits | None = None,
) -> NDArray[np.float64]:
    """Propose residual ranges for an interval, deepest first.

    The deepest step peaks at the far end, the last one no deeper than the near end.  Shifter thicknesses
    (full range less residual range) are brought to multiples of the device's quantum.

    Parameters
    ----------
    interval_mm : (float, float)
        Near and far end of the interval, water-equivalent mm.
    full_range_mm : float
        Residual range without any shifter, mm.
    step_mm : float
        Distance wanted between steps, mm; never below the device's smallest step.
    peak_offset_mm : float
        How far the peak of a step lies before its residual range, mm.
    limits : DeviceLimits, optional
        What the device can set.

    Returns
    -------
    ndarray, shape (k,)
        Residual ranges in mm, descending.

    Raises
    ------
    InputError, ReachError
        An interval that is none; a far end that the beam does not reach.

    Examples
    --------
    >>> candidate_ranges_mm((80.0, 100.0), full_range_mm=120.0, step_mm=10.0).tolist()
    [100.0, 90.0, 80.0]
    """
    near, far = (float(end) for end in interval_mm)
    if not 0.0 <= near < far < float("inf"):
        raise InputError(
            f"an interval from {near:g} to {far:g} mm", allowed="0 <= near < far", remedy="give both depths in mm"
        )
    if not step_mm > 0.0:
        raise InputError(f"a step of {step_mm} mm", allowed="above 0", remedy="3 to 8 mm are customary")
    device = limits or DeviceLimits()
    deepest = far + peak_offset_mm
    quantum = device.thickness_quantum_mm
    if deepest > full_range_mm + max(1e-6, 0.5 * quantum):
        raise ReachError(
            f"a far end at {far:g} mm needs a residual range of {deepest:.1f} mm; the beam has {full_range_mm:.1f} mm",
            allowed="a far end within the beam's range",
            remedy="raise the momentum",
        )
    step = max(step_mm, device.smallest_step_mm, quantum)
    count = int(np.ceil((far - near) / step - 1e-9)) + 1
    if count > device.largest_count:
        count = device.largest_count
        step = (far - near) / max(count - 1, 1)
    shift = np.maximum(full_range_mm - (deepest - step * np.arange(count)), 0.0)
    if quantum > 0.0:
        shift = np.unique(np.round(shift / quantum)) * quantum
    ranges = full_range_mm - shift
    return np.asarray(ranges[ranges > 0.0])


def range_steps(
    depth_dose: ArrayLike,
    depth_mm: ArrayLike,
    interval_mm: tuple[float, float],
    *,
    residual_range_mm: ArrayLike,
    shift_mm: ArrayLike | None = None,
    effect: EffectCurves | None = None,
    dose_gy: float = 1.0,
    profile_gy: ArrayLike | None = None,
    limits: DeviceLimits | None = None,
    smoothing: float = SMOOTHING,
    flatness_goal: float = 0.02,
) -> StepSettings:
    """Find weights of range steps that make dose or effect-weighted dose flat over an interval.

    Parameters
    ----------
    depth_dose : array_like, shape (k, n)
        Dose of each candidate step per unit weight (all components summed), Gy.
    depth_mm : array_like, shape (n,)
        Bin centres, water-equivalent mm, ascending.
    interval_mm : (float, float)
        Near and far end, mm.
    residual_range_mm : array_like, shape (k,)
        Residual range of each candidate, mm.
    shift_mm : array_like, shape (k,), optional
        Shifter thickness of each candidate, mm water; largest residual range less its own when absent.
    effect : EffectCurves, optional
        Flatten the effect-weighted dose made from these instead of the physical dose.
    dose_gy : float
        Wanted dose (per fraction) in the interval, Gy.
    profile_gy : array_like, shape (n,), optional
        Wanted dose per depth instead of one number.
    limits : DeviceLimits, optional
        What the device can set.
    smoothing : float
        Strength of the penalty on uneven weights; 0 switches it off.
    flatness_goal : float
        A flatness above this warns.

    Returns
    -------
    StepSettings
        Steps in use, deepest first, with the curve they make.

    Raises
    ------
    InputError, ReachError
        Arrays that do not fit together; an interval without bins, or that no candidate reaches.

    Warns
    -----
    SettingsWarning
        If the flatness goal is missed or the rounds ran out.

    Examples
    --------
    >>> curves = [[1.0, 1.0, 4.0, 0.0], [1.0, 3.0, 0.0, 0.0]]
    >>> settings = range_steps(curves, [5.0, 15.0, 25.0, 35.0], (10.0, 30.0),
    ...                        residual_range_mm=[25.0, 15.0], dose_gy=2.0, smoothing=0.0)
    >>> settings.weights.round(6).tolist(), settings.dose.round(6).tolist()
    ([0.5, 0.5], [1.0, 2.0, 2.0, 0.0])
    """
    curves, depth, ranges, shift = _checked(depth_dose, depth_mm, residual_range_mm, shift_mm, dose_gy, smoothing)
    near, far = (float(end) for end in interval_mm)
    inside = (depth >= near - 1e-9) & (depth <= far + 1e-9)
    if not near < far or not inside.any():
        raise InputError(
            f"no depth bin in the interval from {near:g} to {far:g} mm",
            allowed="an interval within the depths handed over",
            remedy="give near and far end in mm",
        )
    wanted = np.full(depth.shape, float(dose_gy)) if profile_gy is None else np.asarray(profile_gy, dtype=np.float64)
    if wanted.shape != depth.shape or not (np.all(wanted[inside] >= 0.0) and np.any(wanted[inside] > 0.0)):
        raise InputError(
            "a wanted dose that is nowhere above 0 in the interval",
            allowed="0 Gy or more, some above 0",
            remedy="check dose or profile",
        )
    if effect is not None and not effect.linear.shape == effect.root.shape == curves.shape:
        raise InputError(
            "effect curves that do not fit the dose", allowed=f"shape {curves.shape}", remedy="rebuild them"
        )
    device = limits or DeviceLimits()
    problem = FlatteningProblem(
        curves[:, inside], wanted[inside], effect, inside, float(smoothing), float(np.mean(wanted[inside]))
    )
    chosen = _spaced(ranges, device)
    _check_thicknesses(shift[chosen], device)
    while True:
        weights, history, stopped = problem.solve(chosen)
        if not np.any(weights > 0.0):
            raise ReachError(
                f"no step gives dose between {near:g} and {far:g} mm",
                allowed="steps that reach it",
                remedy="add ranges",
            )
        used, weights = chosen[weights > 0.0], weights[weights > 0.0]
        share = weights / np.sum(weights)
        if len(used) <= device.largest_count and float(np.min(share)) >= device.smallest_share:
            break
        chosen = np.delete(used, int(np.argmin(share)))
    total = weights @ curves[used]
    weighted = None if effect is None else weighted_curve(weights, effect, used)
    step = float(np.median(-np.diff(ranges[chosen]))) if len(chosen) > 1 else 0.0
    judged = (near + step, far - step) if far - near > 2.0 * step else (near, far)
    measures = profile_measures(depth, total if weighted is None else weighted, judged_mm=judged)
    if profile_gy is None and measures.flatness > flatness_goal:
        warnings.warn(
            f"flat to {100 * measures.flatness:.1f} % between {judged[0]:.0f} and {judged[1]:.0f} mm, "
            f"wanted {100 * flatness_goal:.1f} %; more or finer range steps may help",
            SettingsWarning,
            stacklevel=2,
        )
    return StepSettings(
        residual_range_mm=ranges[used],
        shift_mm=shift[used],
        weights=weights,
        share=share,
        index=used,
        depth_mm=depth,
        dose=total,
        effect_dose=weighted,
        interval_mm=(near, far),
        measures=measures,
        quantity="physical" if effect is None else "effect",
        history=history,
        stopped_because=stopped,
    )


def _spaced(ranges: NDArray[np.float64], device: DeviceLimits) -> NDArray[np.int64]:
    """Pass over ranges nearer than the smallest step, from the deepest up."""
    kept: list[int] = []
    for index in np.argsort(-ranges, kind="stable"):
        if not kept or ranges[kept[-1]] - ranges[index] >= device.smallest_step_mm - 1e-9:
            kept.append(int(index))
    return np.array(kept, dtype=np.int64)


def _check_thicknesses(shift: NDArray[np.float64], device: DeviceLimits) -> None:
    """Refuse thicknesses that the device cannot set."""
    quantum = device.thickness_quantum_mm
    if quantum > 0.0 and np.any(np.abs(shift / quantum - np.round(shift / quantum)) > 1e-6):
        raise InputError(
            f"shifter thicknesses that are no multiples of {quantum:g} mm",
            allowed=f"multiples of {quantum:g} mm water",
            remedy="take the ranges that candidate_ranges_mm proposes for the same limits",
        )


def _checked(
    depth_dose: ArrayLike,
    depth_mm: ArrayLike,
    residual_range_mm: ArrayLike,
    shift_mm: ArrayLike | None,
    dose_gy: float,
    smoothing: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Bring the input into arrays that fit together."""
    curves, depth = np.asarray(depth_dose, dtype=np.float64), np.asarray(depth_mm, dtype=np.float64)
    ranges = np.asarray(residual_range_mm, dtype=np.float64)
    shift = np.max(ranges, initial=0.0) - ranges if shift_mm is None else np.asarray(shift_mm, dtype=np.float64)
    if curves.ndim != 2 or curves.shape != (len(ranges), len(depth)) or shift.shape != ranges.shape or not len(ranges):
        raise InputError(
            f"doses of shape {curves.shape} for {ranges.size} ranges and {depth.size} depths",
            allowed="one curve for each range, one value for each depth",
            remedy="sum the components first",
        )
    if not (np.all(np.isfinite(curves)) and np.all(curves >= 0.0) and np.all(np.diff(depth) > 0.0)):
        raise InputError(
            "depth doses below 0 or no number, or depths that do not rise",
            allowed="doses of 0 or more at rising depths",
            remedy="check the depth library",
        )
    if not dose_gy > 0.0 or not smoothing >= 0.0:
        raise InputError(
            f"a wanted dose of {dose_gy} Gy with a smoothing of {smoothing}",
            allowed="a dose above 0, a smoothing of 0 or more",
            remedy="check goal and smoothing",
        )
    return curves, depth, ranges, shift
