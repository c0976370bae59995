"""Penalties of goals: closed forms, slopes, volume goals."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.errors import InputError, UnknownNameError
from dosekit.modulation.goals import GOAL_KINDS, Goal, goal_costs


@pytest.mark.parametrize("kind", GOAL_KINDS)
def test_slope_is_the_difference(rng, kind):
    dose = rng.uniform(0.5, 3.0, 40)
    level = 1.0 if kind == "mean" else 1.7
    percent = 85.0 if kind == "volume_above" else 35.0
    share = rng.uniform(0.1, 1.0, 30)
    goal = Goal("one", kind, np.arange(5, 35), level, coverage=share, weight=2.0, percent=percent)
    total, _, slope = goal_costs([goal], dose, scale_gy=2.0)
    assert total > 0.0
    for place in range(40):
        step = np.zeros(40)
        step[place] = 1e-6
        up = goal_costs([goal], dose + step, scale_gy=2.0)[0]
        down = goal_costs([goal], dose - step, scale_gy=2.0)[0]
        assert slope[place] == pytest.approx((up - down) / 2e-6, abs=1e-8)


def test_closed_forms():
    dose = np.array([1.0, 2.0, 3.0, 4.0])
    places = np.arange(4)

    def cost(kind, level, **more):
        return goal_costs([Goal("g", kind, places, level, **more)], dose, scale_gy=2.0)[0]

    assert cost("uniform", 2.0) == pytest.approx((1 + 0 + 1 + 4) / 4 / 4)
    assert cost("minimum", 2.5) == pytest.approx((1.5**2 + 0.5**2) / 4 / 4)
    assert cost("maximum", 2.5) == pytest.approx((0.5**2 + 1.5**2) / 4 / 4)
    assert cost("mean", 2.0) == pytest.approx(0.25 / 4)
    assert cost("mean", 2.6) == 0.0
    # at most a quarter above 1.5 Gy: the hottest voxel is allowed, 2 and 3 Gy are not
    assert cost("volume_below", 1.5, percent=25.0) == pytest.approx((0.5**2 + 1.5**2) / 4 / 4)
    assert cost("volume_below", 3.5, percent=25.0) == 0.0
    # no volume above: as a maximum
    assert cost("volume_below", 2.5, percent=0.0) == pytest.approx(cost("maximum", 2.5))
    # three quarters with 3 Gy or more: the coldest voxel may stay cold, 2 Gy is too little
    assert cost("volume_above", 3.0, percent=75.0) == pytest.approx(1.0 / 4 / 4)
    assert cost("volume_above", 3.0, percent=50.0) == 0.0
    assert cost("volume_above", 2.5, percent=100.0) == pytest.approx(cost("minimum", 2.5))


def test_costs_add_and_shares_are_brought_to_one():
    dose = np.array([1.0, 3.0])
    first = Goal("a", "uniform", np.array([0]), 2.0, coverage=np.array([0.1]))
    second = Goal("b", "maximum", np.array([0, 1]), 2.0, coverage=np.array([1.0, 3.0]), weight=4.0)
    total, parts, slope = goal_costs([first, second], dose, scale_gy=1.0)
    assert parts == pytest.approx({"a": 1.0, "b": 3.0})
    assert total == pytest.approx(4.0)
    assert slope.tolist() == pytest.approx([-2.0, 6.0])


def test_unfit_goals_are_refused():
    with pytest.raises(UnknownNameError, match="uniform"):
        Goal("a", "unifrom", np.array([0]), 1.0)
    for voxels, level, more in (
        ([], 1.0, {}),
        ([0], -1.0, {}),
        ([0], 1.0, {"weight": 0.0}),
        ([0], 1.0, {"percent": 101.0}),
        ([0, 1], 1.0, {"coverage": [1.0]}),
        ([0], 1.0, {"coverage": [0.0]}),
    ):
        with pytest.raises(InputError):
            Goal("a", "uniform", np.array(voxels, dtype=int), level, **more)
