"""Weights in three dimensions: optimum, slopes, robustness, determinism, on small linear maps."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import nnls
from scipy.sparse.linalg import aslinearoperator

from dosekit.basis.components import COMPONENTS
from dosekit.effects.mixed_field import EffectModel
from dosekit.effects.tissues import Tissue, TissueMap
from dosekit.errors import InputError, ReachError, SettingsWarning, UnknownNameError
from dosekit.modulation.costs import scale_to_mean
from dosekit.modulation.goals import Goal, goal_costs
from dosekit.modulation.responses import EffectResponse, FoldEffectResponse, LinearResponse
from dosekit.modulation.weights import find_weights, find_weights_each_field

ANY = Tissue("any", 0.3, 6.0)


def pencil_map(shift_mm=0.0, scale=1.0):
    """Sixty voxels on a line, twenty Gaussian peaks with a plateau before them."""
    depth = np.arange(60.0)[:, None]
    peaks = scale * np.linspace(20.0, 42.0, 20)[None, :] + shift_mm
    return np.exp(-0.5 * ((depth - peaks) / 1.8) ** 2) + 0.15 * (depth < peaks)


TARGET = np.arange(22, 40)
BEFORE = np.arange(5, 15)


class FoldStandIn:
    """Offers what the fold offers: components apart, factors per voxel."""

    def __init__(self, maps, factors=None):
        self.maps = maps
        self.factors = factors or dict.fromkeys(maps, 1.0)
        self.shape = next(iter(maps.values())).shape

    def components(self, weights):
        return {name: matrix @ weights for name, matrix in self.maps.items()}

    def with_factors(self, factors):
        return FoldStandIn(self.maps, factors)

    @property
    def T(self):
        return sum(matrix.T * self.factors[name] for name, matrix in self.maps.items())


@pytest.mark.parametrize("wrap", [np.asarray, aslinearoperator])
def test_uniform_goal_reaches_the_least_squares_optimum(wrap):
    matrix = pencil_map()
    goal = Goal("target", "uniform", TARGET, 2.0)
    found = find_weights(LinearResponse(wrap(matrix)), [goal], scale_gy=2.0, largest_steps=2000, least_gain=1e-10)
    best, residual = nnls(matrix[TARGET], np.full(len(TARGET), 2.0))
    optimum = residual**2 / len(TARGET) / 4.0
    assert found.history[-1] <= optimum + 1e-6
    assert found.history[-1] >= optimum - 1e-12
    assert np.all(found.weights >= 0.0)
    np.testing.assert_allclose(found.dose_gy[TARGET], (matrix @ best)[TARGET], atol=0.01)


def test_history_never_rises_and_says_why_it_stopped():
    goals = [Goal("target", "uniform", TARGET, 2.0), Goal("before", "maximum", BEFORE, 0.3, weight=2.0)]
    found = find_weights(LinearResponse(pencil_map()), goals, scale_gy=2.0)
    assert np.all(np.diff(found.history) <= 0.0)
    assert len(found.history) == found.steps + 1
    assert found.stopped_because
    for step, cost in enumerate(found.history):
        assert sum(part[step] for part in found.parts.values()) == pytest.approx(cost, rel=1e-12)
    assert goal_costs(goals, found.dose_gy, scale_gy=2.0)[0] == pytest.approx(found.history[-1], rel=1e-9)


def test_goals_pull_the_dose_their_way():
    uniform = Goal("target", "uniform", TARGET, 2.0)
    plain = find_weights(LinearResponse(pencil_map()), [uniform], scale_gy=2.0, largest_steps=300)
    assert np.max(np.abs(plain.dose_gy[TARGET] / 2.0 - 1.0)) < 0.05
    level = 0.7 * float(plain.dose_gy[BEFORE].mean())
    for kind in ("maximum", "mean", "volume_below"):
        organ = Goal("before", kind, BEFORE, level, weight=50.0, percent=20.0)
        spared = find_weights(LinearResponse(pencil_map()), [uniform, organ], scale_gy=2.0, largest_steps=300)
        assert spared.dose_gy[BEFORE].mean() < plain.dose_gy[BEFORE].mean()


@pytest.mark.parametrize("fractions", [1, 4])
@pytest.mark.parametrize("mapped", [False, True])
def test_effect_weighted_dose_becomes_even(rng, fractions, mapped):
    near, far = pencil_map(), pencil_map() * (pencil_map() > 0.4)
    tissue = TissueMap(np.linspace(0.15, 0.3, 60), np.linspace(3.0, 8.0, 60)) if mapped else ANY
    linear, root = 0.3 * near + 0.9 * far, 0.22 * near + 0.3 * far
    goal = Goal("target", "uniform", TARGET, 8.0)
    response = EffectResponse(linear, root, tissue, fractions=fractions)
    found = find_weights(response, [goal], scale_gy=8.0, largest_steps=400)
    assert np.max(np.abs(found.dose_gy[TARGET] / 8.0 - 1.0)) < 0.05
    # slope by differences
    weights = rng.uniform(0.1, 1.0, 20)
    dose, kept = response.dose(weights)
    slope = response.pull_back(2.0 * dose, kept)
    for place in (0, 7, 19):
        step = np.zeros(20)
        step[place] = 1e-6
        difference = np.sum(response.dose(weights + step)[0] ** 2) - np.sum(response.dose(weights - step)[0] ** 2)
        assert slope[place] == pytest.approx(difference / 2e-6, rel=1e-6)


def test_one_pass_equals_two_linear_maps(rng):
    maps = {name: rng.uniform(0.0, 1.0, (30, 8)) for name in COMPONENTS}
    let = {name: rng.uniform(0.5, 15.0, 30) for name in COMPONENTS}
    constants = EffectModel("microdosimetric", ANY).constants(let)
    linear = sum(constants[name][0][:, None] * maps[name] for name in COMPONENTS)
    root = sum(constants[name][1][:, None] * maps[name] for name in COMPONENTS)
    one = FoldEffectResponse(FoldStandIn(maps), constants, ANY, fractions=2)
    two = EffectResponse(linear, root, ANY, fractions=2)
    weights, slope = rng.uniform(0.0, 1.0, 8), rng.normal(size=30)
    dose_one, kept_one = one.dose(weights)
    dose_two, kept_two = two.dose(weights)
    np.testing.assert_allclose(dose_one, dose_two, rtol=1e-12)
    np.testing.assert_allclose(one.pull_back(slope, kept_one), two.pull_back(slope, kept_two), rtol=1e-10)


@pytest.mark.parametrize("robust", ["worst", "expectation"])
def test_robust_weights_lose_less_in_the_scenarios(robust):
    goal = (
        Goal("target", "minimum", TARGET, 2.0),
        Goal("target", "maximum", TARGET, 2.1),
        Goal("all", "mean", np.arange(60), 0.0, weight=0.01),
    )
    nominal = LinearResponse(pencil_map())
    scenarios = [LinearResponse(pencil_map(shift_mm=move)) for move in (-3.0, 3.0)]
    scenarios += [LinearResponse(pencil_map(scale=factor)) for factor in (0.97, 1.03)]
    plain = find_weights(nominal, goal, scale_gy=2.0, largest_steps=400)
    safe = find_weights(nominal, goal, scale_gy=2.0, scenarios=scenarios, robust=robust, largest_steps=400)

    def costs(found):
        return [goal_costs(goal, one.dose(found.weights)[0], scale_gy=2.0)[0] for one in [nominal, *scenarios]]

    if robust == "worst":
        assert max(costs(safe)) < max(costs(plain))
        # the joined cost lies between the largest over n^(1/8) and the largest
        assert max(costs(safe)) / 5 ** (1 / 8) <= safe.history[-1] * (1 + 1e-9)
        assert safe.history[-1] <= max(costs(safe)) * (1 + 1e-9)
    else:
        assert np.mean(costs(safe)) < np.mean(costs(plain))
        assert safe.history[-1] == pytest.approx(np.mean(costs(safe)), rel=1e-9)


@pytest.mark.parametrize("robust", ["worst", "expectation"])
def test_equal_scenarios_change_nothing(robust):
    goal = Goal("target", "uniform", TARGET, 2.0)
    nominal = LinearResponse(pencil_map())
    alone = find_weights(nominal, [goal], scale_gy=2.0, largest_steps=30)
    same = find_weights(nominal, [goal], scale_gy=2.0, scenarios=[nominal], robust=robust, largest_steps=30)
    np.testing.assert_allclose(same.weights, alone.weights, rtol=1e-6, atol=1e-8)


def test_each_field_alone_is_even():
    fields = [
        LinearResponse(pencil_map()),
        LinearResponse(pencil_map()[::-1][2:].tolist() + np.zeros((2, 20)).tolist()),
    ]
    fields[1] = LinearResponse(np.roll(pencil_map()[::-1], 2, axis=0))
    goal = Goal("target", "uniform", TARGET, 2.0)
    found = find_weights_each_field(fields, [goal], scale_gy=2.0, shares=[0.25, 0.75], largest_steps=300)
    for result, share in zip(found, (0.25, 0.75), strict=True):
        assert np.max(np.abs(result.dose_gy[TARGET] / (2.0 * share) - 1.0)) < 0.06
    total = found[0].dose_gy + found[1].dose_gy
    assert total[TARGET].mean() == pytest.approx(2.0, rel=0.01)


def test_scaling_reaches_the_mean():
    response = EffectResponse(0.3 * pencil_map(), 0.2 * pencil_map(), ANY)
    weights = scale_to_mean(response, np.ones(20), voxels=TARGET, dose_gy=5.0)
    assert response.dose(weights)[0][TARGET].mean() == pytest.approx(5.0, rel=1e-8)
    with pytest.raises(ReachError):
        scale_to_mean(response, np.zeros(20), voxels=TARGET, dose_gy=5.0)


def test_same_input_same_bytes_and_a_start_is_used():
    goal = Goal("target", "uniform", TARGET, 2.0)
    response = LinearResponse(pencil_map())
    first, second = (find_weights(response, [goal], scale_gy=2.0, largest_steps=40) for _ in range(2))
    assert first.weights.tobytes() == second.weights.tobytes()
    onward = find_weights(response, [goal], scale_gy=2.0, start=first.weights, largest_steps=5)
    assert onward.history[0] <= first.history[3]


def test_weights_that_miss_the_target_stay_zero():
    matrix = np.hstack([pencil_map(), np.zeros((60, 2))])
    matrix[50:, -1] = 1.0
    found = find_weights(LinearResponse(matrix), [Goal("target", "uniform", TARGET, 2.0)], scale_gy=2.0)
    assert found.weights[-2:].tolist() == [0.0, 0.0]


def test_running_out_of_steps_warns():
    goals = [Goal("target", "uniform", TARGET, 2.0)]
    with pytest.warns(SettingsWarning, match="still falling"):
        find_weights(LinearResponse(pencil_map()), goals, scale_gy=2.0, largest_steps=2)


def test_unfit_input_is_refused():
    response = LinearResponse(pencil_map())
    goal = Goal("target", "uniform", TARGET, 2.0)
    for goals, more in (
        ([Goal("organ", "maximum", TARGET, 2.0)], {}),
        ([goal], {"scale_gy": 0.0}),
        ([goal], {"start": np.zeros(20)}),
        ([goal], {"start": np.ones(3)}),
        ([goal], {"scenarios": [LinearResponse(np.ones((60, 3)))]}),
        ([Goal("target", "uniform", np.array([99]), 2.0)], {}),
    ):
        with pytest.raises(InputError):
            find_weights(response, goals, **({"scale_gy": 2.0} | more))
    with pytest.raises(UnknownNameError, match="worst"):
        find_weights(response, [goal], scale_gy=2.0, robust="wurst")
    with pytest.raises(ReachError):
        find_weights(LinearResponse(np.zeros((60, 3))), [goal], scale_gy=2.0)
    with pytest.raises(InputError, match="shares"):
        find_weights_each_field([response], [goal], scale_gy=2.0, shares=[0.5])
    with pytest.raises(InputError, match="shape"):
        EffectResponse(np.ones((2, 2)), np.ones((2, 3)), ANY)
