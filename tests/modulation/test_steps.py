"""Range steps: flatness, recovery of known stacks, limits of devices, effect-weighted flattening."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dosekit.effects.mixed_field import EffectModel, effect_sums
from dosekit.effects.tissues import Tissue
from dosekit.errors import InputError, ReachError, SettingsWarning
from dosekit.modulation.devices import DeviceLimits
from dosekit.modulation.steps import EffectCurves, candidate_ranges_mm, range_steps

import reference_cases

FULL_RANGE_MM = 197.2  # core of the stops in the reference case, tests/reference/README.md
PEAK_OFFSET_MM = 3.7  # the peak of its depth dose lies at 193.5 mm


def reference_stack(interval_mm, step_mm, **more):
    """Shifted copies of an independent transport result: what a shifter in front of water would give."""
    columns = reference_cases.depth("w170_dp2")
    depth = columns["depth_mm"]
    ranges = candidate_ranges_mm(
        interval_mm, full_range_mm=FULL_RANGE_MM, step_mm=step_mm, peak_offset_mm=PEAK_OFFSET_MM, **more
    )
    parts = {
        name: np.array([np.interp(depth + FULL_RANGE_MM - r, depth, values, right=0.0) for r in ranges])
        for name, values in reference_cases.components(columns).items()
    }
    return depth, ranges, parts


def ideal_stack(ranges_mm, sigma_mm, depth):
    """Smooth peaks over a rising plateau: a stand-in without noise."""
    peak = 3.0 * np.exp(-0.5 * ((depth - ranges_mm[:, None]) / sigma_mm) ** 2)
    plateau = 0.5 * (1.0 - np.tanh((depth - ranges_mm[:, None]) / sigma_mm))
    return peak + plateau * (1.0 + 0.002 * depth)


@pytest.mark.parametrize("interval_mm", [(50.0, 100.0), (60.0, 180.0), (100.0, 170.0), (130.0, 190.0)])
@pytest.mark.parametrize("step_mm", [4.0, 6.0])
def test_flat_to_two_percent_less_one_step(interval_mm, step_mm, evidence):
    depth, ranges, parts = reference_stack(interval_mm, step_mm)
    settings = range_steps(sum(parts.values()), depth, interval_mm, residual_range_mm=ranges)
    inside = (depth >= interval_mm[0] + step_mm) & (depth <= interval_mm[1] - step_mm)
    part = settings.dose[inside]
    deviation = float(np.max(np.abs(part / np.mean(part) - 1.0)))
    evidence(
        what=f"flatness, {interval_mm[0]:.0f} to {interval_mm[1]:.0f} mm, steps of {step_mm:g} mm",
        source="stack of shifted independent transport results (170 MeV/c)",
        value=0.0,
        ours=deviation,
        unit="fraction",
        bar="0.02",
        kind="reference",
    )
    assert deviation <= 0.02
    assert settings.flatness == pytest.approx(deviation, rel=1e-9)


@pytest.mark.parametrize("step_mm", [4.0, 5.0, 8.0])
@pytest.mark.parametrize("interval_mm", [(50.0, 100.0), (60.0, 180.0)])
def test_recovers_a_known_stack_from_its_dose(interval_mm, step_mm):
    depth = np.arange(300) + 0.5
    ranges = candidate_ranges_mm(interval_mm, full_range_mm=200.0, step_mm=step_mm)
    curves = ideal_stack(ranges, 5.0, depth)
    known = np.exp(-0.15 * np.arange(len(ranges))) + 0.1
    known[0] *= 2.0
    settings = range_steps(curves, depth, (1.0, 250.0), residual_range_mm=ranges, profile_gy=known @ curves)
    found = np.zeros(len(ranges))
    found[settings.index] = settings.weights
    assert np.max(np.abs(found - known)) <= 1e-3 * np.max(known)


def test_recovers_a_stack_of_transport_results():
    depth, ranges, parts = reference_stack((80.0, 150.0), 6.0)
    curves = sum(parts.values())
    known = np.linspace(1.0, 0.3, len(ranges))
    settings = range_steps(curves, depth, (1.0, 250.0), residual_range_mm=ranges, profile_gy=known @ curves)
    found = np.zeros(len(ranges))
    found[settings.index] = settings.weights
    assert np.max(np.abs(found - known)) <= 1e-3


@pytest.mark.parametrize("model", ["constant", "microdosimetric"])
@pytest.mark.parametrize("dose_gy", [1.0, 4.0])
def test_effect_weighted_dose_becomes_flat(model, dose_gy):
    depth, ranges, parts = reference_stack((90.0, 160.0), 5.0)
    effect = EffectModel(model, Tissue("any", 0.3, 10.0))
    let = {"primary": 2.0, "in_flight": 20.0, "star_light": 7.0, "star_heavy": 120.0, "star_neutron": 20.0}
    linear, root = effect_sums(parts, effect.constants(let))
    settings = range_steps(
        sum(parts.values()), depth, (90.0, 160.0), residual_range_mm=ranges,
        effect=EffectCurves(linear, root, effect.tissue), dose_gy=dose_gy,
    )  # fmt: skip
    # judged by summing the components of the found stack anew
    doses = {name: settings.weights @ values[settings.index] for name, values in parts.items()}
    weighted = effect.weighted_dose_gy(doses, let)
    inside = (depth >= 95.0) & (depth <= 155.0)
    assert np.max(np.abs(weighted[inside] / dose_gy - 1.0)) <= 0.02
    np.testing.assert_allclose(settings.effect_dose, weighted, rtol=1e-10)
    assert all(
        after <= before * (1 + 1e-9) for before, after in zip(settings.history, settings.history[1:], strict=False)
    )
    assert settings.stopped_because != "40 rounds"
    # the star share grows towards the far end, so physical dose has to fall there
    assert settings.dose[152] < settings.dose[97]


def test_second_method_gives_the_same_weights(monkeypatch):
    """Where the first solver does not end, the second one takes over."""
    import scipy.optimize

    depth, ranges, parts = reference_stack((90.0, 150.0), 6.0)
    first = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges)

    def endless(*_, **__):
        raise RuntimeError("maximum number of iterations reached")

    monkeypatch.setattr(scipy.optimize, "nnls", endless)
    second = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges)
    np.testing.assert_allclose(second.dose[95:145], first.dose[95:145], rtol=2e-3)


def test_dose_scales_weights():
    depth, ranges, parts = reference_stack((90.0, 150.0), 6.0)
    once = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges, dose_gy=1.0)
    thrice = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges, dose_gy=3.0)
    np.testing.assert_allclose(thrice.weights, 3.0 * once.weights, rtol=1e-9)
    assert once.measures.mean == pytest.approx(1.0, rel=0.01)
    np.testing.assert_allclose(once.share.sum(), 1.0, rtol=1e-12)


def test_same_input_same_bytes():
    depth, ranges, parts = reference_stack((90.0, 150.0), 4.0)
    first = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges)
    second = range_steps(sum(parts.values()), depth, (90.0, 150.0), residual_range_mm=ranges)
    assert first.weights.tobytes() == second.weights.tobytes()


@pytest.mark.parametrize(
    "limits",
    [
        DeviceLimits(smallest_step_mm=7.0),
        DeviceLimits(smallest_share=0.05),
        DeviceLimits(largest_count=6),
        DeviceLimits(thickness_quantum_mm=3.0),
        DeviceLimits(smallest_step_mm=4.0, smallest_share=0.03, largest_count=9, thickness_quantum_mm=2.5),
    ],
)
@pytest.mark.filterwarnings("ignore::dosekit.errors.SettingsWarning")
def test_device_limits_are_kept(limits):
    depth, ranges, parts = reference_stack((90.0, 160.0), 3.0, limits=limits)
    settings = range_steps(
        sum(parts.values()), depth, (90.0, 160.0), residual_range_mm=ranges,
        shift_mm=FULL_RANGE_MM - ranges, limits=limits,
    )  # fmt: skip
    assert len(settings.weights) <= limits.largest_count
    assert settings.share.min() >= limits.smallest_share
    assert np.all(-np.diff(settings.residual_range_mm) >= limits.smallest_step_mm - 1e-9)
    if limits.thickness_quantum_mm:
        multiples = settings.shift_mm / limits.thickness_quantum_mm
        np.testing.assert_allclose(multiples, np.round(multiples), atol=1e-9)
    np.testing.assert_allclose(settings.shift_mm + settings.residual_range_mm, FULL_RANGE_MM, rtol=1e-12)


def test_candidates_are_thinned_to_the_smallest_step():
    depth, ranges, parts = reference_stack((100.0, 160.0), 2.0)
    limits = DeviceLimits(smallest_step_mm=5.0)
    settings = range_steps(sum(parts.values()), depth, (100.0, 160.0), residual_range_mm=ranges, limits=limits)
    assert np.all(-np.diff(settings.residual_range_mm) >= 5.0 - 1e-9)
    assert settings.residual_range_mm[0] == ranges[0]


def test_uneven_result_warns():
    depth = np.arange(200) + 0.5
    ranges = np.array([150.0, 100.0])
    with pytest.warns(SettingsWarning, match="flat to"):
        range_steps(ideal_stack(ranges, 3.0, depth), depth, (90.0, 155.0), residual_range_mm=ranges)


@given(
    near=st.floats(30.0, 150.0),
    length=st.floats(5.0, 120.0),
    step=st.floats(1.0, 20.0),
    quantum=st.sampled_from([0.0, 0.5, 3.0]),
)
def test_proposed_ranges_span_the_interval(near, length, step, quantum):
    far = near + length
    limits = DeviceLimits(thickness_quantum_mm=quantum, largest_count=1000)
    ranges = candidate_ranges_mm((near, far), full_range_mm=300.0, step_mm=step, peak_offset_mm=4.0, limits=limits)
    assert np.all(np.diff(ranges) < 0.0)
    assert abs(ranges[0] - (far + 4.0)) <= 0.5 * quantum + 1e-9
    assert ranges[-1] <= near + 4.0 + 0.5 * quantum + 1e-6
    assert np.max(-np.diff(ranges)) <= max(step, quantum) + quantum + 1e-6


def test_unfit_input_is_refused():
    depth = np.arange(100) + 0.5
    ranges = np.array([80.0, 60.0])
    curves = ideal_stack(ranges, 5.0, depth)
    for change in (
        {"depth_dose": curves[0]},
        {"depth_dose": -curves},
        {"depth_dose": curves * np.nan},
        {"residual_range_mm": ranges[:1]},
        {"interval_mm": (80.0, 40.0)},
        {"interval_mm": (300.0, 400.0)},
        {"dose_gy": 0.0},
        {"smoothing": -1.0},
        {"profile_gy": np.zeros(100)},
        {"limits": DeviceLimits(thickness_quantum_mm=7.0)},
    ):
        asked = {
            "depth_dose": curves, "depth_mm": depth, "interval_mm": (50.0, 80.0), "residual_range_mm": ranges,
        } | change  # fmt: skip
        with pytest.raises(InputError):
            range_steps(asked.pop("depth_dose"), asked.pop("depth_mm"), asked.pop("interval_mm"), **asked)
    with pytest.raises(ReachError, match="raise the momentum"):
        candidate_ranges_mm((100.0, 200.0), full_range_mm=180.0)
    with pytest.raises(ReachError):
        range_steps(np.zeros((1, 100)), depth, (50.0, 80.0), residual_range_mm=[30.0])
    for unfit in ({"smallest_step_mm": 0.0}, {"smallest_share": 1.0}, {"largest_count": 0}):
        with pytest.raises(InputError):
            DeviceLimits(**unfit)
