"""Gamma comparison of dose maps against closed forms and the readable oracle."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.effects.agreement import gamma_index
from dosekit.errors import InputError

import naive


@pytest.mark.naive
@pytest.mark.parametrize("local", [False, True])
@pytest.mark.parametrize(
    ("shape", "spacing", "other_shape", "other_spacing"),
    [
        ((17,), (1.7,), (17,), (1.7,)),
        ((7, 6), (2.0, 1.5), (9, 5), (1.5, 2.1)),
        ((4, 3, 5), (2.0, 2.5, 3.0), (4, 3, 5), (2.0, 2.5, 3.0)),
        ((3, 4, 1), (2.0, 2.5, 3.0), (5, 4, 2), (1.0, 2.6, 3.0)),
    ],
)
def test_equals_oracle(rng, shape, spacing, other_shape, other_spacing, local):
    reference = rng.uniform(0.0, 2.0, shape)
    evaluated = rng.uniform(0.0, 2.0, other_shape)
    asked = {"distance": 3.0, "percent": 5.0, "local": local, "threshold": 20.0, "step": 1.0, "largest": 2.0}
    expected = naive.gamma(reference, evaluated, spacing, other_spacing, **asked)
    ours = gamma_index(
        reference, evaluated, spacing_mm=spacing, evaluated_spacing_mm=other_spacing,
        distance_mm=3.0, dose_percent=5.0, local=local, threshold_percent=20.0, step_mm=1.0,
    )  # fmt: skip
    np.testing.assert_allclose(ours.gamma, expected, rtol=1e-10, atol=1e-12)
    assert ours.judged == np.count_nonzero(~np.isnan(expected))
    assert ours.pass_share == np.mean(expected[~np.isnan(expected)] <= 1.0)


@pytest.mark.parametrize("local", [False, True])
def test_same_map_agrees_perfectly(rng, local):
    dose = rng.uniform(0.1, 1.0, (5, 6, 7))
    result = gamma_index(dose, dose, spacing_mm=2.0, local=local, threshold_percent=0.0)
    assert np.all(result.gamma == 0.0)
    assert result.pass_share == 1.0


def test_uniform_maps_differ_by_the_dose_alone():
    """Flat maps 2 % apart: gamma is 2/3 with a tolerance of 3 % whatever the distance."""
    reference = np.full((9, 9), 1.0)
    result = gamma_index(reference, 1.02 * reference, spacing_mm=2.0, dose_percent=3.0)
    np.testing.assert_allclose(result.gamma, 2.0 / 3.0, rtol=1e-12)


def test_shift_of_a_steep_edge_is_a_distance():
    """A step of dose shifted by 2 mm: nearest equal dose lies 2 mm away, gamma 2/3 with 3 mm."""
    x = np.arange(60) * 0.5
    reference = np.clip((x - 10.0) * 100.0, 0.0, 1000.0)
    evaluated = np.clip((x - 12.0) * 100.0, 0.0, 1000.0)
    result = gamma_index(reference, evaluated, spacing_mm=0.5, dose_percent=0.001, step_mm=0.1)
    middle = (reference > 300.0) & (reference < 700.0)
    np.testing.assert_allclose(result.gamma[middle], 2.0 / 3.0, rtol=1e-9)


@pytest.mark.parametrize("gradient", [0.0, 0.01, 0.02, 0.03, 0.07])
def test_parallel_ramps_have_the_distance_of_parallel_lines(gradient, evidence):
    """Two ramps a dose offset apart: gamma is the distance of a point from a straight line in scaled axes.

    The gradients are those whose nearest point lies on the search lattice (2 s / (1 + s^2) mm for slope s).
    """
    distance, tolerance, offset = 3.0, 0.03, 0.02
    x = np.arange(201) * 0.5
    reference = 1.0 + gradient * (x - 50.0)
    result = gamma_index(
        reference, reference + offset, spacing_mm=0.5, distance_mm=distance, dose_percent=3.0,
        normalisation_gy=1.0, threshold_percent=0.0, step_mm=0.01,
    )  # fmt: skip
    expected = (offset / tolerance) / np.sqrt(1.0 + (gradient * distance / tolerance) ** 2)
    ours = result.gamma[100]
    evidence(
        what=f"gamma of two parallel ramps, {gradient} Gy/mm",
        source="closed form: distance of a point from a line (Low et al., Med. Phys. 25 (1998) 656, definition)",
        value=expected,
        ours=float(ours),
        unit="1",
        bar="1e-9",
        kind="truth",
    )
    assert ours == pytest.approx(expected, rel=1e-9)


def test_global_and_local_differ_where_dose_is_low():
    reference = np.array([1.0, 0.5, 0.2])
    evaluated = reference + 0.02
    asked = {"spacing_mm": 1e7, "dose_percent": 3.0, "largest_gamma": 10.0}
    np.testing.assert_allclose(gamma_index(reference, evaluated, **asked).gamma, 2 / 3, rtol=1e-5)
    local = gamma_index(reference, evaluated, local=True, **asked).gamma
    # points lie so far apart that no nearer agreement can be found
    np.testing.assert_allclose(local, [2 / 3, 4 / 3, 10 / 3], rtol=1e-5)


def test_points_below_threshold_and_off_grid_get_no_index():
    reference = np.array([0.05, 1.0, 1.0, 1.0])
    result = gamma_index(reference, np.ones(4), spacing_mm=10.0, evaluated_origin_mm=[18.0], evaluated_spacing_mm=4.0)
    assert np.isnan(result.gamma).tolist() == [True, True, False, False]
    assert result.judged == 2


def test_outcome_does_not_depend_on_threads(rng):
    import numba

    reference, evaluated = rng.uniform(0, 1, (12, 11, 10)), rng.uniform(0, 1, (12, 11, 10))
    several = gamma_index(reference, evaluated, spacing_mm=2.0).gamma
    before = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        single = gamma_index(reference, evaluated, spacing_mm=2.0).gamma
    finally:
        numba.set_num_threads(before)
    assert np.array_equal(several, single, equal_nan=True)


@pytest.mark.parametrize(
    "unfit",
    [
        {"distance_mm": 0.0},
        {"dose_percent": -1.0},
        {"step_mm": 0.0},
        {"spacing_mm": 0.0},
        {"threshold_percent": 200.0},
        {"evaluated_gy": [[1.0]]},
        {"evaluated_gy": [float("nan"), 1.0]},
    ],
)
def test_unfit_input_is_refused(unfit):
    asked = {"reference_gy": [1.0, 2.0], "evaluated_gy": [1.0, 2.0], "spacing_mm": 1.0} | unfit
    with pytest.raises(InputError):
        gamma_index(asked.pop("reference_gy"), asked.pop("evaluated_gy"), **asked)
