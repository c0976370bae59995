"""What is spread widely, divided between fixed widths: sums, variances, shapes."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.maps.parts import Contribution, divide


def rows(*values):
    return np.array([values], dtype=float)


def test_quantity_and_variance_are_kept(rng):
    """Sum and second moment of core and parts are those of the contributions, at every depth."""
    core = np.linspace(0.5, 30.0, 40)[None, :]
    contributions = [
        Contribution(0, rng.uniform(0.1, 1.0, (1, 40)), core, rng.uniform(0.0, 400.0, (1, 40)), 1.0),
        Contribution(0, rng.uniform(0.1, 1.0, (1, 40)), 4.0 * core, 0.0 * core),
    ]
    sigma, values, kept = divide(contributions, core, narrowest_mm=4.0)
    total = sum(one.quantity for one in contributions)
    second = sum(one.quantity * (one.variance + one.extra) for one in contributions)
    np.testing.assert_allclose(values.sum(axis=0) + kept, total, rtol=1e-12)
    found = (values * sigma[:, None, None] ** 2).sum(axis=0) + kept * core
    np.testing.assert_allclose(found, second, rtol=1e-10)
    assert np.all(values >= 0.0)
    assert np.all(kept >= 0.0)
    assert sigma.min() >= 4.0


def test_what_has_hardly_left_the_beam_stays_with_it():
    one = np.ones((1, 1))
    _, values, kept = divide([Contribution(0, one, one, 0.0 * one)], one, narrowest_mm=5.0)
    assert float(kept[0, 0]) == pytest.approx(1.0)
    assert not values.any()


def test_nothing_stays_where_there_is_no_core():
    one = np.ones((1, 2))
    _, values, kept = divide([Contribution(0, one, one, one)], np.array([[1.0, np.inf]]), narrowest_mm=5.0)
    assert float(kept[0, 1]) == 0.0
    assert float(values[:, 0, 1].sum()) == pytest.approx(1.0)


@pytest.mark.parametrize("power", [1.2, 2.0, 4.0])
def test_unequal_displacements_keep_two_moments_of_the_radius(power):
    """Rings with squared radius 2 u^q against the Gaussians that stand for them: mean square, and mean logarithm."""
    unequal = (power + 1.0) ** 2 / (2.0 * power + 1.0)
    each = Contribution(0, rows(1.0), rows(0.0), rows(1.0), rows(unequal)).variances()
    assert float(np.mean(each)) == pytest.approx(1.0, rel=1e-12)
    rings = np.log(2.0 * (power + 1.0)) - power
    gaussians = np.mean(np.log(2.0 * np.array(each))) - 0.5772
    # eight middles hold the logarithm of u to 0.04, times its power
    assert float(gaussians) == pytest.approx(rings, abs=0.2)


def test_rings_of_one_size_are_one_gaussian():
    each = Contribution(0, rows(1.0), rows(2.0), rows(7.0), 1.0).variances()
    assert [float(one[0, 0]) for one in each] == [9.0]
