"""What are the weights to reach?  Goals for structures, as penalties on the dose of their voxels.

With dose ``d_i`` and share ``v_i`` of the structure's volume in voxel ``i`` (summing to 1), level ``L``
and scale ``S``
(the prescription), a goal costs ``weight x P``::

    uniform                 P = sum v_i (d_i - L)^2 / S^2
    minimum                 P = sum v_i max(L - d_i, 0)^2 / S^2
    maximum                 P = sum v_i max(d_i - L, 0)^2 / S^2
    mean (no more than L)   P = max(sum v_i d_i - L, 0)^2 / S^2
    volume_below            at most `percent` of the volume may have more than L
    volume_above            at least `percent` of the volume must have L or more

The volume goals count only the voxels that are nearest to meeting them: with ``D`` the dose that
`percent` of the volume has now, `volume_below` penalises voxels with ``L < d_i < D``, `volume_above`
those with ``D < d_i < L``.

Source of the volume penalties: Wu & Mohan, Med. Phys. 27 (2000) 701 (memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError, UnknownNameError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

__all__ = ["GOAL_KINDS", "Goal", "goal_costs"]

GOAL_KINDS: tuple[str, ...] = ("uniform", "minimum", "maximum", "mean", "volume_below", "volume_above")
"""Kinds of goal."""


@dataclass(frozen=True, eq=False)
class Goal:
    """One goal for one structure.

    Parameters
    ----------
    name : str
        What it is called in tables and figures.
    kind : str
        One of `GOAL_KINDS`.
    voxels : ndarray of int, shape (m,)
        Places of the structure's voxels among those that the dose is known in.
    level_gy : float
        Dose aimed at, Gy.
    coverage : ndarray, shape (m,), optional
        Share of each voxel inside the structure; equal shares when absent.
    weight : float
        Importance, above 0.
    percent : float
        Percentage of the volume, for the volume goals.
    """

    name: str
    kind: str
    voxels: NDArray[np.int64]
    level_gy: float
    coverage: NDArray[np.float64] | None = None
    weight: float = 1.0
    percent: float = 0.0

    def __post_init__(self) -> None:
        """Refuse what is no goal; bring the shares to a sum of 1."""
        if self.kind not in GOAL_KINDS:
            raise UnknownNameError("goal", self.kind, GOAL_KINDS)
        places = np.asarray(self.voxels, dtype=np.int64).ravel()
        if self.coverage is None:
            share = np.ones(len(places))
        else:
            share = np.asarray(self.coverage, dtype=np.float64).ravel()
        if len(places) == 0 or share.shape != places.shape or np.any(share < 0.0) or not np.sum(share) > 0.0:
            raise InputError(
                f"goal {self.name!r} with {len(places)} voxels and {len(share)} shares",
                allowed="at least one voxel, one share of 0 or more for each",
                remedy="check that the structure lies in the dose grid",
            )
        if not self.level_gy >= 0.0 or not self.weight > 0.0 or not 0.0 <= self.percent <= 100.0:
            raise InputError(
                f"goal {self.name!r}: level {self.level_gy} Gy, weight {self.weight}, percent {self.percent}",
                allowed="a level of 0 or more, a weight above 0, 0 to 100 percent",
                remedy="correct the goal",
            )
        object.__setattr__(self, "voxels", places)
        object.__setattr__(self, "coverage", share / np.sum(share))

    def cost(self, dose_gy: NDArray[np.float64], *, scale_gy: float) -> tuple[float, NDArray[np.float64]]:
        """Give the weighted penalty and its slope.

        Parameters
        ----------
        dose_gy : ndarray, shape (n,)
            Dose in all known voxels, Gy.
        scale_gy : float
            The prescription, Gy.

        Returns
        -------
        cost : float
            Weighted penalty.
        slope : ndarray, shape (m,)
            Its slope with respect to the dose of the goal's voxels, 1/Gy.
        """
        dose = dose_gy[self.voxels]
        share = self.coverage
        assert share is not None
        if self.kind == "mean":
            excess = max(float(np.dot(share, dose)) - self.level_gy, 0.0) / scale_gy
            return self.weight * excess**2, self.weight * 2.0 * excess * share / scale_gy
        off = (dose - self.level_gy) / scale_gy
        if self.kind == "minimum":
            off = np.minimum(off, 0.0)
        elif self.kind == "maximum":
            off = np.maximum(off, 0.0)
        elif self.kind == "volume_below":
            off = np.where(dose < self._reached_by(dose, share), np.maximum(off, 0.0), 0.0)
        elif self.kind == "volume_above":
            off = np.where(dose >= self._reached_by(dose, share), np.minimum(off, 0.0), 0.0)
        return self.weight * float(np.dot(share, off**2)), self.weight * 2.0 * share * off / scale_gy

    def _reached_by(self, dose: NDArray[np.float64], share: NDArray[np.float64]) -> float:
        """Dose that `percent` of the volume has at least."""
        order = np.argsort(-dose, kind="stable")
        summed = np.cumsum(share[order])
        last = int(np.searchsorted(summed, self.percent / 100.0 - 1e-12))
        if self.kind == "volume_below" and self.percent == 0.0:
            return float("inf")
        return float(dose[order[min(last, len(order) - 1)]])


def goal_costs(
    goals: Sequence[Goal], dose_gy: ArrayLike, *, scale_gy: float
) -> tuple[float, dict[str, float], NDArray[np.float64]]:
    """Sum the costs of several goals.

    Parameters
    ----------
    goals : sequence of Goal
        The goals.
    dose_gy : array_like, shape (n,)
        Dose in all known voxels, Gy.
    scale_gy : float
        The prescription, Gy.

    Returns
    -------
    total : float
        Sum of the weighted penalties.
    parts : dict of str to float
        Weighted penalty by goal name (same names are added).
    slope : ndarray, shape (n,)
        Slope with respect to the dose, 1/Gy.

    Examples
    --------
    >>> goal = Goal("target", "uniform", np.array([0, 1]), level_gy=2.0)
    >>> total, parts, slope = goal_costs([goal], [1.0, 2.0, 5.0], scale_gy=2.0)
    >>> total, slope.tolist()
    (0.125, [-0.25, 0.0, 0.0])
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    total, slope = 0.0, np.zeros_like(dose)
    parts: dict[str, float] = {}
    for goal in goals:
        cost, part = goal.cost(dose, scale_gy=scale_gy)
        total += cost
        parts[goal.name] = parts.get(goal.name, 0.0) + cost
        np.add.at(slope, goal.voxels, part)
    return total, parts, slope
