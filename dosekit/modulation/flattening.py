"""How are weights found that make a sum of curves flat?

The depth dose of step ``k`` per unit weight is row ``k`` of a matrix ``M``.  Weights ``w >= 0`` minimise::

    sum over bins in the interval of (sum_k w_k M_k(z) - D(z))^2 / D_mean^2
        + s^2 n sum_k (w_{k-1} - 2 w_k + w_{k+1})^2 / w_mean^2

with wanted dose ``D`` (one number, or a profile), ``n`` bins and smoothing ``s``.  Solved by non-negative
least squares (Lawson & Hanson, Solving Least Squares Problems, 1974) with columns scaled to equal length,
and repeated twice with the curvature of the last answer as the wanted one (iterated regularisation: what
the dose does determine loses its bias, what it does not stays smooth).

Effect-weighted dose ``X`` depends on the weights through two linear sums ``A`` and ``B``
(`dosekit.effects.mixed_field`).  It is flattened by repeating the linear problem with ``X`` replaced by its
tangent at the last weights, halving the change while the sum of squares grows.  Stopping rule: the largest
change of ``X / D_mean`` inside the interval below 1e-5, or 40 rounds (a warning).
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError, SettingsWarning

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import ArrayLike, NDArray

    from dosekit.effects.mixed_field import EffectModel
    from dosekit.effects.tissues import Tissue

__all__ = ["SMOOTHING", "EffectCurves", "FlatteningProblem", "weighted_curve"]

#: Default smoothing; small enough to leave a solvable problem its solution.
SMOOTHING = 3e-5
_PASSES = 3
_ROUNDS = 40
_CHANGE = 1e-5
_HALVINGS = 12


@dataclass(frozen=True)
class EffectCurves:
    """Effect per unit weight of each step, and the tissue it is meant for.

    Parameters
    ----------
    linear, root : ndarray, shape (k, n)
        Sums of alpha times dose and of sqrt(beta) times dose over the components, per unit weight.
    tissue : Tissue
        Photon constants.
    """

    linear: NDArray[np.float64]
    root: NDArray[np.float64]
    tissue: Tissue

    @classmethod
    def from_components(
        cls, dose: Mapping[str, ArrayLike], model: EffectModel, let_kev_um: Mapping[str, ArrayLike] | None = None
    ) -> EffectCurves:
        """Make effect curves from depth doses by component.

        Parameters
        ----------
        dose : mapping of str to array_like, shape (k, n)
            Depth dose of each step per unit weight, by component.
        model : EffectModel
            Effect model with one tissue.
        let_kev_um : mapping of str to array_like, optional
            Dose-averaged LET by component, numbers or shape (k, n), keV/um.

        Returns
        -------
        EffectCurves
            Sums of alpha and of sqrt(beta) times dose.

        Examples
        --------
        >>> from dosekit.effects.mixed_field import EffectModel
        >>> curves = EffectCurves.from_components({"primary": [[1.0, 2.0]]}, EffectModel("physical"))
        >>> curves.linear.round(3).tolist()
        [[0.3, 0.6]]
        """
        from dosekit.effects.mixed_field import effect_sums
        from dosekit.effects.tissues import Tissue

        if not isinstance(model.tissue, Tissue):
            raise InputError("a tissue map for depth curves", allowed="one tissue", remedy="choose a tissue by name")
        linear, root = effect_sums(dose, model.constants(let_kev_um))
        return cls(linear, root, model.tissue)


@dataclass(frozen=True)
class FlatteningProblem:
    """The least-squares problem inside an interval.

    Parameters
    ----------
    curves : ndarray, shape (k, m)
        Dose of each candidate per unit weight at the bins of the interval.
    wanted : ndarray, shape (m,)
        Wanted dose there.
    effect : EffectCurves or None
        Effect curves at all bins, when the effect-weighted dose is flattened.
    inside : ndarray of bool, shape (n,)
        Which bins lie in the interval.
    smoothing : float
        Strength of the penalty on uneven weights.
    scale : float
        Mean wanted dose.
    """

    curves: NDArray[np.float64]
    wanted: NDArray[np.float64]
    effect: EffectCurves | None
    inside: NDArray[np.bool_]
    smoothing: float
    scale: float

    def solve(self, chosen: NDArray[np.int64]) -> tuple[NDArray[np.float64], tuple[float, ...], str]:
        """Find the weights of some of the candidates.

        Parameters
        ----------
        chosen : ndarray of int, shape (j,)
            Rows of the candidates allowed.

        Returns
        -------
        weights : ndarray, shape (j,)
            Weights, 0 or more.
        history : tuple of float
            Root-mean-square deviation over the mean wanted dose after each round.
        stopped_because : str
            Stopping rule that applied.
        """
        matrix, goal = self.curves[chosen].T / self.scale, self.wanted / self.scale
        weights = self._linear(matrix, goal)
        if self.effect is None:
            return weights, (_rms(matrix @ weights - goal),), "solved at once (linear)"
        value = self._value(weights, chosen)
        weights = weights / max(float(np.mean(value)), 1e-30)
        value = self._value(weights, chosen)
        history = [_rms(value - goal)]
        for _ in range(_ROUNDS):
            slopes = self._slopes(weights, chosen)
            wished = self._linear(slopes, goal - value + slopes @ weights)
            part = 1.0
            for _ in range(_HALVINGS):
                trial = weights + part * (wished - weights)
                after = self._value(trial, chosen)
                if _rms(after - goal) <= history[-1] * (1.0 + 1e-9):
                    break
                part *= 0.5
            else:
                return weights, tuple(history), "no smaller deviation found"
            change = float(np.max(np.abs(after - value)))
            weights, value = trial, after
            history.append(_rms(value - goal))
            if change < _CHANGE:
                return weights, tuple(history), f"change below {_CHANGE:g}"
        warnings.warn(f"range steps: still changing after {_ROUNDS} rounds", SettingsWarning, stacklevel=4)
        return weights, tuple(history), f"{_ROUNDS} rounds"

    def _linear(self, matrix: NDArray[np.float64], right: NDArray[np.float64]) -> NDArray[np.float64]:
        """Solve the regularised non-negative problem."""
        count = matrix.shape[1]
        length = np.sqrt(np.sum(matrix**2, axis=0))
        length[length == 0.0] = 1.0
        if self.smoothing == 0.0 or count < 3:
            return np.asarray(_non_negative(matrix / length, right) / length)
        bend = np.zeros((count - 2, count))
        for row in range(count - 2):
            bend[row, row : row + 3] = (1.0, -2.0, 1.0)
        mean = 1.0 / max(float(np.mean(np.sum(matrix, axis=1))), 1e-30)  # weight of each step if all were alike
        bend *= self.smoothing * np.sqrt(len(right)) / mean
        stacked = np.vstack([matrix / length, bend / length])
        weights = np.zeros(count)
        for _ in range(_PASSES):
            wished = np.concatenate([right, bend @ weights])
            weights = _non_negative(stacked, wished) / length
        return weights

    def _value(self, weights: NDArray[np.float64], chosen: NDArray[np.int64]) -> NDArray[np.float64]:
        """Effect-weighted dose over the mean wanted dose."""
        effect = self.effect
        assert effect is not None
        return weighted_curve(weights, effect, chosen)[self.inside] / self.scale

    def _slopes(self, weights: NDArray[np.float64], chosen: NDArray[np.int64]) -> NDArray[np.float64]:
        """Slope of the effect-weighted dose over the mean wanted dose with respect to each weight."""
        from dosekit.effects.mixed_field import weighted_dose_slopes

        effect = self.effect
        assert effect is not None
        linear, root = effect.linear[chosen][:, self.inside], effect.root[chosen][:, self.inside]
        by_linear, by_root = weighted_dose_slopes(weights @ linear, weights @ root, tissue=effect.tissue)
        return np.asarray(((linear * by_linear + root * by_root) / self.scale).T)


def _non_negative(matrix: NDArray[np.float64], right: NDArray[np.float64]) -> NDArray[np.float64]:
    """Solve a non-negative least-squares problem; a second method where the first does not come to an end."""
    from scipy.optimize import lsq_linear, nnls

    try:
        return np.asarray(nnls(matrix, right, maxiter=100 * matrix.shape[1])[0])
    except RuntimeError:
        return np.asarray(np.maximum(lsq_linear(matrix, right, bounds=(0.0, np.inf)).x, 0.0))


def weighted_curve(
    weights: NDArray[np.float64], effect: EffectCurves, chosen: NDArray[np.int64]
) -> NDArray[np.float64]:
    """Give the effect-weighted dose of weighted steps.

    Parameters
    ----------
    weights : ndarray, shape (j,)
        Weights.
    effect : EffectCurves
        Effect per unit weight.
    chosen : ndarray of int, shape (j,)
        Rows that the weights belong to.

    Returns
    -------
    ndarray, shape (n,)
        Gy.
    """
    from dosekit.effects.mixed_field import weighted_dose_gy

    return weighted_dose_gy(weights @ effect.linear[chosen], weights @ effect.root[chosen], tissue=effect.tissue)


def _rms(values: NDArray[np.float64]) -> float:
    return float(np.sqrt(np.mean(values**2)))
