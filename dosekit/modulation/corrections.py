"""Weights from a quick stand-in, set right by the exact dose.

A search needs a hundred doses and slopes; the exact one may take seconds.  Each round searches with a
stand-in ``s`` plus what it lacked at the last weights ``w_n``::

    d(w) = s(w) + (e(w_n) - s(w_n))

with the exact dose ``e``, and keeps the outcome only if the exact cost falls; otherwise it goes half as
far.  Only one exact dose, and no exact slope, is needed in a round.  A fixed point meets the goals with the
exact dose as well as the stand-in's slopes allow.  Each search with the stand-in ends at a quarter of `enough`.

With errors to stand, every scenario has a stand-in and an exact dose of its own, and the cost is the joined one of
`dosekit.modulation.costs`.  The first judgement takes the lack of the nominal scenario for that of all; from then on
each is judged and corrected by its own.

Stopping rules: exact cost at or below `enough`; it falls by less than `least_gain`; number of rounds; no
lower cost after four halvings.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import SettingsWarning
from dosekit.modulation.costs import joined_costs
from dosekit.modulation.goals import Goal, goal_costs
from dosekit.modulation.weights import FoundWeights, find_weights

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import ArrayLike, NDArray

    from dosekit.modulation.responses import Judge, Response

__all__ = ["CorrectedResponse", "find_weights_corrected"]

_HALVINGS = 4
_LEAST_GAIN = 1e-3
_QUICK_SHARE = 0.25


@dataclass(frozen=True, eq=False)
class CorrectedResponse:
    """A stand-in with a fixed dose added.

    Parameters
    ----------
    inner : Response
        The stand-in.
    lacking_gy : ndarray, shape (n,)
        Dose added in each voxel, Gy.
    """

    inner: Response
    lacking_gy: NDArray[np.float64]

    @property
    def shape(self) -> tuple[int, int]:
        """Voxels and weights."""
        return self.inner.shape

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the corrected dose.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dose_gy : ndarray, shape (n,)
            Gy.
        kept : object
            What the stand-in needs on the way back.
        """
        dose, kept = self.inner.dose(weights)
        return dose + self.lacking_gy, kept

    def pull_back(self, slope: NDArray[np.float64], kept: Any) -> NDArray[np.float64]:
        """Turn a slope per voxel into a slope per weight.

        Parameters
        ----------
        slope : ndarray, shape (n,)
            Slope with respect to the dose.
        kept : object
            From `dose`.

        Returns
        -------
        ndarray, shape (w,)
            Slope with respect to the weights.
        """
        return self.inner.pull_back(slope, kept)


def find_weights_corrected(
    exact: Judge,
    quick: Response,
    goals: Sequence[Goal],
    *,
    scale_gy: float,
    start: ArrayLike | None = None,
    scenarios: Sequence[tuple[Judge, Response]] = (),
    robust: str = "worst",
    rounds: int = 5,
    largest_steps: int = 60,
    least_gain: float = 0.2,
    enough: float = 1e-4,
    progress: Callable[[int, float], None] | None = None,
) -> FoundWeights:
    """Find weights with a stand-in, corrected by the exact dose.

    Parameters
    ----------
    exact : Judge
        The exact dose.
    quick : Response
        Its stand-in, for the same voxels and weights.
    goals : sequence of Goal
        The goals.
    scale_gy : float
        The prescription, Gy.
    start : array_like, shape (w,), optional
        Weights to begin with.
    scenarios : sequence of (Judge, Response)
        Exact dose and stand-in of further scenarios.
    robust : str
        ``worst`` or ``expectation``; how scenarios are joined.
    rounds : int
        Largest number of rounds.
    largest_steps : int
        Steps of each search with the stand-in.
    least_gain : float
        Relative gain of the exact cost that counts as no progress.
    enough : float
        An exact cost at or below this ends the search (1e-4: 1 % of the prescription root-mean-square on a
        goal of weight 1).
    progress : callable, optional
        Called with round and exact cost.

    Returns
    -------
    FoundWeights
        Best weights; history (of the joined cost), parts and dose (nominal) are those of the exact response. With
        scenarios the first cost of the history rests on what the nominal one lacks.
    """
    exacts = [exact, *(pair[0] for pair in scenarios)]
    quicks = [quick, *(pair[1] for pair in scenarios)]

    def search(stand_ins: Sequence[Response], begin: ArrayLike | None) -> NDArray[np.float64]:
        first, *others = stand_ins
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", SettingsWarning)
            return find_weights(
                first,
                goals,
                scale_gy=scale_gy,
                start=begin,
                scenarios=others,
                robust=robust,
                largest_steps=largest_steps,
                least_gain=_LEAST_GAIN,
                enough=_QUICK_SHARE * enough,
            ).weights

    evaluations = 0

    def judge(
        weights: NDArray[np.float64], *, first: bool = False
    ) -> tuple[list[NDArray[np.float64]], float, dict[str, float]]:
        nonlocal evaluations
        evaluations += 1
        doses = [one.dose(weights)[0] for one in (exacts[:1] if first else exacts)]
        lack = doses[0] - quick.dose(weights)[0] if len(doses) < len(quicks) else 0.0
        doses += [one.dose(weights)[0] + lack for one in quicks[len(doses) :]]
        costs = [goal_costs(goals, dose, scale_gy=scale_gy)[:2] for dose in doses]
        return doses, joined_costs(np.array([cost for cost, _ in costs]), robust)[0], costs[0][1]

    best = search(quicks, start)
    doses, cost, parts = judge(best, first=True)
    supposed = len(exacts) > 1
    history, parts_history = [cost], {name: [value] for name, value in parts.items()}
    reason = f"{rounds} rounds"
    for number in range(1, rounds + 1):
        if cost <= enough and not supposed:
            break
        aimed = search(
            [CorrectedResponse(one, dose - one.dose(best)[0]) for dose, one in zip(doses, quicks, strict=True)], best
        )
        part, found = 1.0, None
        for _ in range(_HALVINGS + 1):
            trial = best + part * (aimed - best)
            after = judge(trial)
            if after[1] < cost or supposed:
                found = (trial, *after)
                break
            part *= 0.5
        if found is None:
            reason = f"no lower cost after {_HALVINGS} halvings"
            break
        before, known = cost, not supposed
        supposed = False
        best, doses, cost, parts = found
        history.append(cost)
        for name, value in parts.items():
            parts_history[name].append(value)
        if progress is not None:
            progress(number, cost)
        if cost > enough and known and before - cost < least_gain * before:
            reason = f"exact cost falls by less than {100 * least_gain:g} %"
            break
    if cost <= enough:
        reason = f"exact cost at or below {enough:g}"
    return FoundWeights(
        weights=best,
        dose_gy=doses[0],
        history=tuple(history),
        parts={name: tuple(values) for name, values in parts_history.items()},
        steps=len(history) - 1,
        evaluations=evaluations,
        stopped_because=reason,
    )
