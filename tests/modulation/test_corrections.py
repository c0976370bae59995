"""A search with a quick stand-in ends at the goals of the exact dose."""

from __future__ import annotations

import numpy as np

from dosekit.modulation.corrections import CorrectedResponse, find_weights_corrected
from dosekit.modulation.goals import Goal, goal_costs
from dosekit.modulation.responses import LinearResponse
from dosekit.modulation.weights import find_weights

DEPTH = np.arange(60.0)[:, None]
PEAKS = np.linspace(20.0, 42.0, 20)[None, :]
TARGET = np.arange(22, 40)


def quick_map():
    return np.exp(-0.5 * ((DEPTH - PEAKS) / 1.8) ** 2) + 0.15 * (DEPTH < PEAKS)


def exact_map():
    """Wider peaks, a higher plateau and a background that the stand-in does not know."""
    return np.exp(-0.5 * ((DEPTH - PEAKS - 0.3) / 2.1) ** 2) + 0.18 * (DEPTH < PEAKS) + 0.02


def test_corrected_search_comes_near_the_exact_optimum():
    goals = [Goal("target", "uniform", TARGET, 2.0)]
    exact, quick = LinearResponse(exact_map()), LinearResponse(quick_map())
    plain = find_weights(quick, goals, scale_gy=2.0, largest_steps=200)
    uncorrected = goal_costs(goals, exact.dose(plain.weights)[0], scale_gy=2.0)[0]
    direct = find_weights(exact, goals, scale_gy=2.0, largest_steps=400)
    found = find_weights_corrected(exact, quick, goals, scale_gy=2.0, rounds=8, least_gain=0.01, enough=0.0)
    assert found.history[-1] < 0.05 * uncorrected
    assert found.history[-1] < direct.history[-1] + 3e-4
    assert np.all(np.diff(found.history) < 0.0)
    assert found.evaluations < 40
    np.testing.assert_array_equal(found.dose_gy, exact.dose(found.weights)[0])
    assert np.max(np.abs(found.dose_gy[TARGET] / 2.0 - 1.0)) < 0.05
    assert found.parts["target"][-1] == found.history[-1]


def test_perfect_stand_in_stops_at_once():
    goals = [Goal("target", "uniform", TARGET, 2.0)]
    same = LinearResponse(exact_map())
    found = find_weights_corrected(same, same, goals, scale_gy=2.0, rounds=5)
    assert found.steps <= 2


def test_good_enough_ends_the_search():
    goals = [Goal("target", "uniform", TARGET, 2.0)]
    exact, quick = LinearResponse(exact_map()), LinearResponse(quick_map())
    found = find_weights_corrected(exact, quick, goals, scale_gy=2.0, rounds=8, least_gain=0.0, enough=2e-3)
    assert found.history[-1] <= 2e-3 < found.history[-2]
    assert "2e-3" in found.stopped_because or "0.002" in found.stopped_because


def test_correction_is_added_and_slopes_are_the_stand_ins(rng):
    inner = LinearResponse(quick_map())
    lacking = rng.uniform(size=60)
    corrected = CorrectedResponse(inner, lacking)
    weights, slope = rng.uniform(size=20), rng.normal(size=60)
    np.testing.assert_allclose(corrected.dose(weights)[0], inner.dose(weights)[0] + lacking, rtol=1e-14)
    np.testing.assert_array_equal(corrected.pull_back(slope, None), inner.pull_back(slope, None))
    assert corrected.shape == (60, 20)


def test_scenarios_are_corrected_and_judged_each_by_its_own():
    """A target seen 1.5 bins nearer or farther: the worst cost falls below that of the plain search."""
    goals = [Goal("target", "uniform", TARGET, 2.0)]

    def shifted(by, exact):
        depth = DEPTH + by
        width, plateau, more = (2.1, 0.18, 0.02) if exact else (1.8, 0.15, 0.0)
        place = PEAKS + (0.3 if exact else 0.0)
        return LinearResponse(np.exp(-0.5 * ((depth - place) / width) ** 2) + plateau * (depth < PEAKS) + more)

    exact, quick = shifted(0.0, True), shifted(0.0, False)
    others = [(shifted(by, True), shifted(by, False)) for by in (-1.5, 1.5)]
    plain = find_weights_corrected(exact, quick, goals, scale_gy=2.0, rounds=8, least_gain=0.01, enough=0.0)
    robust = find_weights_corrected(
        exact, quick, goals, scale_gy=2.0, scenarios=others, rounds=8, least_gain=0.01, enough=0.0
    )

    def worst(weights):
        return max(goal_costs(goals, one.dose(weights)[0], scale_gy=2.0)[0] for one in (exact, *dict(others)))

    assert worst(robust.weights) < 0.8 * worst(plain.weights)
    assert np.all(np.diff(robust.history[1:]) < 0.0)
    assert robust.history[-1] >= worst(robust.weights) / 3 ** (1 / 8)
    np.testing.assert_array_equal(robust.dose_gy, exact.dose(robust.weights)[0])
