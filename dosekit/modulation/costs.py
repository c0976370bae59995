"""What do weights cost, and which way does the cost fall?

Cost and slope of non-negative weights for the goals of `dosekit.modulation.goals`, in units that give each weight the
same summed dose in the target, so that a search sees them all alike.

The costs F of several scenarios are joined: ``expectation`` is their mean; ``worst`` the norm
``(mean of F_i^p)^(1/p)`` with p = 8, a smooth stand-in for the largest, between F / n^(1/8) and F for n scenarios.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import ReachError
from dosekit.modulation.goals import Goal, goal_costs

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    from dosekit.modulation.responses import Response

__all__ = ["ROBUST_MODES", "CostProblem", "goals_asking", "joined_costs", "scale_to_mean", "unit_weights"]

ROBUST_MODES: tuple[str, ...] = ("expectation", "worst")
"""How scenarios are joined."""

_NORM = 8.0


class CostProblem:
    """Cost and slope in preconditioned units, remembering the last few points.

    Parameters
    ----------
    responses : list of Response
        Nominal scenario first.
    goals : list of Goal
        The goals.
    scale_gy : float
        The prescription, Gy.
    robust : str
        One of `ROBUST_MODES`.
    unit : ndarray, shape (w,)
        Weight that one preconditioned unit stands for.
    """

    def __init__(
        self,
        responses: list[Response],
        goals: list[Goal],
        scale_gy: float,
        robust: str,
        unit: NDArray[np.float64],
    ) -> None:
        self.responses, self.goals, self.scale_gy = responses, goals, scale_gy
        self.robust, self.unit = robust, unit
        self.evaluations = 0
        self._memory: dict[bytes, tuple[float, NDArray[np.float64], dict[str, float]]] = {}

    def __call__(self, x: NDArray[np.float64]) -> tuple[float, NDArray[np.float64]]:
        """Give cost and slope in preconditioned units."""
        return self._at(x)[:2]

    def parts_at(self, x: NDArray[np.float64]) -> dict[str, float]:
        """Give the nominal cost of each goal.

        Parameters
        ----------
        x : ndarray, shape (w,)
            Weights in preconditioned units.

        Returns
        -------
        dict of str to float
            Weighted penalty by goal.
        """
        return self._at(x)[2]

    def _at(self, x: NDArray[np.float64]) -> tuple[float, NDArray[np.float64], dict[str, float]]:
        key = np.ascontiguousarray(x).tobytes()
        if key not in self._memory:
            if len(self._memory) > 4:
                self._memory.pop(next(iter(self._memory)))
            self._memory[key] = self._evaluate(np.maximum(x, 0.0) * self.unit)
        return self._memory[key]

    def _evaluate(self, weights: NDArray[np.float64]) -> tuple[float, NDArray[np.float64], dict[str, float]]:
        self.evaluations += 1
        costs, back, nominal = [], [], {}
        for number, response in enumerate(self.responses):
            dose, kept = response.dose(weights)
            cost, parts, slope = goal_costs(self.goals, dose, scale_gy=self.scale_gy)
            costs.append(cost)
            back.append((response, slope, kept))
            if number == 0:
                nominal = parts
        total, factors = joined_costs(np.array(costs), self.robust)
        gradient = np.zeros_like(weights)
        for factor, (response, slope, kept) in zip(factors, back, strict=True):
            if factor > 0.0 and np.any(slope):
                gradient += response.pull_back(factor * slope, kept)
        return total, gradient * self.unit, nominal


def joined_costs(costs: NDArray[np.float64], robust: str) -> tuple[float, NDArray[np.float64]]:
    """Join the costs of the scenarios.

    Parameters
    ----------
    costs : ndarray, shape (n,)
        Cost of each scenario.
    robust : str
        One of `ROBUST_MODES`.

    Returns
    -------
    joined : float
        The joined cost.
    slopes : ndarray, shape (n,)
        Its slope with respect to each.

    Examples
    --------
    >>> joined_costs(np.array([1.0, 3.0]), "expectation")[0]
    2.0
    """
    count = len(costs)
    if count == 1:
        return float(costs[0]), np.ones(1)
    top = float(np.max(costs))
    if robust == "expectation" or top == 0.0:
        return float(np.mean(costs)), np.full(count, 1.0 / count)
    relative = costs / top
    mean = float(np.mean(relative**_NORM))
    return top * mean ** (1.0 / _NORM), mean ** (1.0 / _NORM - 1.0) * relative ** (_NORM - 1.0) / count


def scale_to_mean(
    response: Response, weights: ArrayLike, *, voxels: ArrayLike, coverage: ArrayLike | None = None, dose_gy: float
) -> NDArray[np.float64]:
    """Multiply weights by one number so that the mean dose of some voxels is the one wanted.

    Parameters
    ----------
    response : Response
        Dose as a function of the weights.
    weights : array_like, shape (w,)
        Weights.
    voxels : array_like of int
        Places of the voxels.
    coverage : array_like, optional
        Share of each voxel.
    dose_gy : float
        Mean dose wanted, Gy.

    Returns
    -------
    ndarray, shape (w,)
        Scaled weights; found by secant steps to 1e-9, since effect-weighted dose is not proportional.

    Raises
    ------
    ReachError
        If the weights give no dose there.
    """
    given = np.asarray(weights, dtype=np.float64)
    places = np.asarray(voxels, dtype=np.int64)
    share = None if coverage is None else np.asarray(coverage, dtype=np.float64)
    factor = 1.0
    for _ in range(50):
        mean = float(np.average(response.dose(factor * given)[0][places], weights=share))
        if not mean > 0.0:
            raise ReachError(
                "weights without dose in the voxels asked for",
                allowed="some dose",
                remedy="check the fields",
            )
        if abs(mean / dose_gy - 1.0) < 1e-9:
            break
        factor *= dose_gy / mean
    return factor * given


def goals_asking(goals: Sequence[Goal]) -> list[Goal]:
    """Return the goals that ask for dose.

    Parameters
    ----------
    goals : sequence of Goal
        Goals.

    Returns
    -------
    list of Goal
        Those of kind uniform, minimum and volume_above with a level above 0.
    """
    return [goal for goal in goals if goal.kind in {"uniform", "minimum", "volume_above"} and goal.level_gy > 0.0]


def unit_weights(response: Response, goals: Sequence[Goal]) -> NDArray[np.float64]:
    """Return the weight of each entry that gives the target the same summed dose.

    Parameters
    ----------
    response : Response
        Nominal scenario.
    goals : sequence of Goal
        Goals.

    Returns
    -------
    ndarray, shape (w,)
        Weights; 0 where an entry does not reach the target.

    Raises
    ------
    ReachError
        If none does.
    """
    asked = np.zeros(response.shape[0])
    for goal in goals_asking(goals):
        assert goal.coverage is not None
        np.add.at(asked, goal.voxels, goal.coverage)
    _, kept = response.dose(np.zeros(response.shape[1]))
    reach = response.pull_back(asked, kept)
    top = float(np.max(reach, initial=0.0))
    if not top > 0.0:
        raise ReachError(
            "no spot or step gives dose where it is asked for",
            allowed="fields that reach the target",
            remedy="check them",
        )
    # entries that hardly touch the target keep a moderate unit, so that they do not run away
    return np.asarray(1.0 / np.maximum(reach, 0.02 * top) * (reach > 1e-6 * top))
