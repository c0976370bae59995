"""Folds of a study: used twice only for the weights they were made with."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.studies.folding import JudgingFold, fold_fields, scaled_dose, summed, weights_given
from dosekit.studies.planning import effect_model_of


@pytest.fixture(scope="module")
def judging(finished):
    _, result = finished
    voxels = np.flatnonzero(result.grid.structure(result.target) > 0.5)
    model = effect_model_of(result.study, "pi-")
    return result, JudgingFold(result.study, result.grid, result.planned, voxels, model, model.constants())


def test_judged_dose_is_that_of_the_run_and_its_folds_are_kept(judging):
    result, exact = judging
    weights = np.concatenate([np.asarray(plan.field.weights).ravel() for plan in result.planned])
    dose, _ = exact.dose(weights)
    whole = result.dose["dose"].values.astype(np.float64).sum(axis=0).reshape(-1)[exact.voxels]
    np.testing.assert_allclose(dose, whole, rtol=1e-5)
    kept = exact.folded(weights)
    assert set(kept) == {plan.field.name for plan in result.planned}
    again = fold_fields(result.study, result.grid, result.planned, known=kept)
    assert all(again[name] is kept[name] for name in kept)
    np.testing.assert_allclose(summed(kept)["dose"].values.sum(), result.dose["dose"].values.sum(), rtol=1e-5)
    assert exact.folded(weights * 1.0000001) == {}


def test_effect_is_judged_where_the_goal_asks_for_it(judging):
    result, exact = judging
    study = result.study.model_copy(update={"goal": result.study.goal.model_copy(update={"quantity": "effect"})})
    weights = np.concatenate([np.asarray(plan.field.weights).ravel() for plan in result.planned])
    other = JudgingFold(study, result.grid, result.planned, exact.voxels, exact.model, exact.constants)
    np.testing.assert_allclose(other.dose(weights)[0], result.effect_dose_gy.reshape(-1)[exact.voxels], rtol=1e-4)


def test_a_first_judgement_elsewhere_keeps_nothing(judging):
    result, exact = judging

    class Elsewhere:
        def dose(self, weights):
            return np.full(3, weights.sum()), None

    other = JudgingFold(
        result.study, result.grid, result.planned, exact.voxels, exact.model, exact.constants, Elsewhere()
    )
    weights = np.ones(2)
    assert other.dose(weights)[0].tolist() == [2.0, 2.0, 2.0]
    assert other.folded(weights) == {}
    assert other.first is None


def test_one_vector_gives_every_field_its_own_weights(finished):
    _, result = finished
    count = sum(int(np.prod(plan.field.shape)) for plan in result.planned)
    given = weights_given(result.planned, np.arange(float(count)))
    np.testing.assert_array_equal(np.concatenate([plan.field.weights.ravel() for plan in given]), np.arange(count))


def test_scaling_leaves_the_original_alone(finished):
    _, result = finished
    before = float(result.dose["dose"].values.sum())
    doubled = scaled_dose(result.dose[["dose", "stops"]], 2.0)
    assert float(result.dose["dose"].values.sum()) == before
    assert float(doubled["dose"].values.sum()) == pytest.approx(2.0 * before, rel=1e-6)
    assert doubled["dose"].sizes["component"] == len(COMPONENTS)
