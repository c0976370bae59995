"""Which weights of spots and range steps reach the goals in three dimensions?

Non-negative weights that minimise the summed penalties of `dosekit.modulation.goals`, by the
limited-memory quasi-Newton method with bounds (L-BFGS-B: Byrd, Lu, Nocedal & Zhu, SIAM J. Sci. Comput. 16
(1995) 1190).  Weights are measured in units that give each of them the same mean effect on the target
(diagonal preconditioning).

Stopping rules, the first that applies: the cost falls by less than `least_gain` (relative) in each of
three steps in a row; the number of steps; no lower cost in the search direction; a cost of `enough` or less.

Robust weights: scenarios (say a range 3 % longer or shorter, a shift of 3 mm) are given as responses of
their own, the nominal one first, and their costs joined (`dosekit.modulation.costs`).

Two modes: `find_weights` with all fields together; `find_weights_each_field` makes each field alone give
its share of the goals.

Same input, same result: no random numbers; the order of all sums is fixed.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import InputError, SettingsWarning, UnknownNameError
from dosekit.modulation.costs import ROBUST_MODES, CostProblem, goals_asking, scale_to_mean, unit_weights
from dosekit.modulation.goals import Goal

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import ArrayLike, NDArray

    from dosekit.modulation.responses import Response

__all__ = ["FoundWeights", "find_weights", "find_weights_each_field"]

_PATIENCE = 3


@dataclass(frozen=True, eq=False)
class FoundWeights:
    """Weights with the history of their search.

    Parameters
    ----------
    weights : ndarray, shape (w,)
        Weights, 0 or more.
    dose_gy : ndarray, shape (n,)
        Dose in the known voxels of the nominal scenario, Gy.
    history : tuple of float
        Cost at the start and after each step.
    parts : dict of str to tuple of float
        Cost of each goal (nominal scenario) at the same steps.
    steps, evaluations : int
        Steps, and evaluations of cost and slope.
    stopped_because : str
        Stopping rule that applied.
    """

    weights: NDArray[np.float64]
    dose_gy: NDArray[np.float64]
    history: tuple[float, ...]
    parts: dict[str, tuple[float, ...]]
    steps: int
    evaluations: int
    stopped_because: str


class _Stop(Exception):  # noqa: N818
    """Ends the search from inside the callback."""


def find_weights(
    response: Response,
    goals: Sequence[Goal],
    *,
    scale_gy: float,
    start: ArrayLike | None = None,
    scenarios: Sequence[Response] = (),
    robust: str = "worst",
    largest_steps: int = 60,
    least_gain: float = 1e-4,
    enough: float = 0.0,
    progress: Callable[[int, float], None] | None = None,
) -> FoundWeights:
    """Find non-negative weights that reach the goals.

    Parameters
    ----------
    response : Response
        Dose as a function of the weights, nominal scenario.
    goals : sequence of Goal
        At least one goal; at least one that asks for dose (`uniform`, `minimum` or `volume_above`).
    scale_gy : float
        The prescription in Gy; penalties are relative to it.
    start : array_like, shape (w,), optional
        Weights to begin with; all alike (in preconditioned units) when absent.
    scenarios : sequence of Response
        Further scenarios with the same voxels and weights.
    robust : str
        ``worst`` or ``expectation``; how the scenarios are joined.
    largest_steps : int
        Largest number of steps.
    least_gain : float
        Relative gain that counts as no progress.
    enough : float
        A cost at or below this ends the search.
    progress : callable, optional
        Called with step and cost after each step.

    Returns
    -------
    FoundWeights
        Weights, dose and history.

    Raises
    ------
    InputError, ReachError
        Goals or scenarios that do not fit; no weight that reaches the voxels asked for dose.

    Warns
    -----
    SettingsWarning
        When the number of steps ended the search.

    Examples
    --------
    >>> from dosekit.modulation.responses import LinearResponse
    >>> goal = Goal("target", "uniform", np.array([0, 1]), level_gy=2.0)
    >>> found = find_weights(LinearResponse(np.array([[1.0, 0.0], [0.0, 4.0]])), [goal], scale_gy=2.0)
    >>> found.weights.round(6).tolist()
    [2.0, 0.5]
    """
    from scipy import optimize

    responses = [response, *scenarios]
    _check(responses, goals, scale_gy, robust)
    unit = unit_weights(response, goals)
    begin = _beginning(response, goals, unit, start)
    problem = CostProblem(responses, list(goals), float(scale_gy), robust, unit)
    first, _ = problem(begin)
    history = [first]
    parts: dict[str, list[float]] = {name: [cost] for name, cost in problem.parts_at(begin).items()}
    best, reason = begin, ""

    def after_step(x: NDArray[np.float64]) -> None:
        nonlocal best, reason
        best = np.array(x)
        cost, _ = problem(best)
        history.append(cost)
        for name, part in problem.parts_at(best).items():
            parts[name].append(part)
        if progress is not None:
            progress(len(history) - 1, cost)
        if cost <= enough:
            reason = "cost is zero" if cost == 0.0 else f"cost at or below {enough:g}"
            raise _Stop
        if len(history) > _PATIENCE and all(
            history[-k - 2] - history[-k - 1] < least_gain * history[-k - 2] for k in range(_PATIENCE)
        ):
            reason = f"gain below {least_gain:g} in {_PATIENCE} steps in a row"
            raise _Stop

    if first > enough:
        try:
            search: Any = optimize.minimize
            options = {
                "maxiter": int(largest_steps),
                "maxfun": 4 * int(largest_steps) + 20,
                "maxcor": 20,
                "ftol": 0.0,
                "gtol": 0.0,
            }
            outcome = search(
                problem,
                begin,
                jac=True,
                method="L-BFGS-B",
                bounds=[(0.0, None)] * len(begin),
                callback=after_step,
                options=options,
            )
            best = np.maximum(outcome.x, 0.0)
            reason = f"{largest_steps} steps" if len(history) > largest_steps else "no lower cost found"
        except _Stop:
            pass
    else:
        reason = "cost is zero" if first == 0.0 else f"cost at or below {enough:g}"
    if reason == f"{largest_steps} steps" and history[-2] - history[-1] > 0.01 * history[-1]:
        warnings.warn(
            f"weights: cost still falling by {100 * (1 - history[-1] / history[-2]):.1f} % after {largest_steps} steps",
            SettingsWarning,
            stacklevel=2,
        )
    weights = np.maximum(best, 0.0) * unit
    return FoundWeights(
        weights=weights,
        dose_gy=response.dose(weights)[0],
        history=tuple(history),
        parts={name: tuple(values) for name, values in parts.items()},
        steps=len(history) - 1,
        evaluations=problem.evaluations,
        stopped_because=reason,
    )


def find_weights_each_field(
    responses: Sequence[Response],
    goals: Sequence[Goal],
    *,
    scale_gy: float,
    shares: ArrayLike | None = None,
    largest_steps: int = 60,
    least_gain: float = 1e-4,
    progress: Callable[[int, float], None] | None = None,
) -> list[FoundWeights]:
    """Find weights field by field, each giving an even dose of its own.

    Every field gets the goals with levels and scale times its share.  With effect-weighted dose the
    effects of the fields together exceed the sum of each alone (or fall below, by fractionation); the
    caller scales the sum (`scale_to_mean`).

    Parameters
    ----------
    responses : sequence of Response
        One for each field.
    goals : sequence of Goal
        Goals for the sum of the fields.
    scale_gy : float
        The prescription in Gy.
    shares : array_like, optional
        Share of each field, summing to 1; equal when absent.
    largest_steps, least_gain, progress
        As in `find_weights`, for each field.

    Returns
    -------
    list of FoundWeights
        One for each field.
    """
    count = len(responses)
    part = np.full(count, 1.0 / max(count, 1)) if shares is None else np.asarray(shares, dtype=np.float64)
    if count == 0 or part.shape != (count,) or np.any(part <= 0.0) or abs(float(np.sum(part)) - 1.0) > 1e-6:
        raise InputError(
            f"shares {part} for {count} fields",
            allowed="one share above 0 for each field, sum 1",
            remedy="correct them",
        )
    found = []
    for response, share in zip(responses, part, strict=True):
        scaled = [
            Goal(
                goal.name, goal.kind, goal.voxels, goal.level_gy * float(share),
                coverage=goal.coverage, weight=goal.weight, percent=goal.percent,
            )
            for goal in goals
        ]  # fmt: skip
        found.append(
            find_weights(
                response,
                scaled,
                scale_gy=scale_gy * float(share),
                largest_steps=largest_steps,
                least_gain=least_gain,
                progress=progress,
            )
        )
    return found


def _beginning(
    response: Response, goals: Sequence[Goal], unit: NDArray[np.float64], start: ArrayLike | None
) -> NDArray[np.float64]:
    """Give the start in preconditioned units, scaled to the mean dose asked for."""
    if start is None:
        begin = np.where(unit > 0.0, 1.0, 0.0)
    else:
        given = np.asarray(start, dtype=np.float64).ravel()
        if given.shape != unit.shape or np.any(given < 0.0) or not np.any(given > 0.0):
            raise InputError(
                f"start weights of shape {given.shape}",
                allowed=f"{len(unit)} weights of 0 or more, some above 0",
                remedy="leave the start out",
            )
        begin = np.where(unit > 0.0, given / np.where(unit > 0.0, unit, 1.0), 0.0)
        if not np.any(begin > 0.0):
            begin = np.where(unit > 0.0, 1.0, 0.0)
    goal = max(goals_asking(goals), key=lambda one: one.weight)
    scaled = scale_to_mean(response, begin * unit, voxels=goal.voxels, coverage=goal.coverage, dose_gy=goal.level_gy)
    return np.where(unit > 0.0, scaled / np.where(unit > 0.0, unit, 1.0), 0.0)


def _check(responses: Sequence[Response], goals: Sequence[Goal], scale_gy: float, robust: str) -> None:
    """Refuse what does not fit together."""
    if robust not in ROBUST_MODES:
        raise UnknownNameError("robust mode", robust, ROBUST_MODES)
    rows = responses[0].shape[0]
    if any(response.shape != responses[0].shape for response in responses):
        raise InputError(
            f"scenarios of shapes {[response.shape for response in responses]}",
            allowed="the same voxels and weights in every scenario",
            remedy="build all scenarios from the same fields and voxels",
        )
    if not scale_gy > 0.0 or not goals_asking(goals):
        raise InputError(
            f"{len(goals)} goals with a prescription of {scale_gy} Gy",
            allowed="a prescription above 0 and a goal that asks for dose",
            remedy="add a uniform goal for the target",
        )
    for goal in goals:
        if int(np.max(goal.voxels)) >= rows or int(np.min(goal.voxels)) < 0:
            raise InputError(
                f"goal {goal.name!r} with voxels beyond the {rows} known",
                allowed="places among them",
                remedy="renumber",
            )
