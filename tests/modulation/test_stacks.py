"""Range steps of whole beams: flat intervals at many depths, limits, times, consistency with the library."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.beams.beam import Beam
from dosekit.depths.library import depth_library, mean_projected_range_mm
from dosekit.effects.mixed_field import EffectModel
from dosekit.effects.tissues import Tissue
from dosekit.errors import ReachError
from dosekit.modulation.devices import DeviceLimits
from dosekit.modulation.stacks import beam_for_depth, library_curves, steps_for_beam

PION = Beam("pi-", momentum_mev_c=172, momentum_sigma=0.02)
#: 5 to 12 cm long, between 5 and 25 cm deep
INTERVALS = [(50.0, 100.0), (50.0, 170.0), (100.0, 170.0), (150.0, 250.0), (200.0, 250.0), (130.0, 250.0)]


def deviation(values, depth, low, high):
    part = values[(depth >= low) & (depth <= high)]
    return float(np.max(np.abs(part / np.mean(part) - 1.0)))


@pytest.mark.parametrize("interval_mm", INTERVALS)
@pytest.mark.parametrize("spread", [0.01, 0.03])
def test_flat_to_two_percent_at_every_depth(interval_mm, spread, evidence):
    beam = beam_for_depth(PION.replace(momentum_sigma=spread), interval_mm[1], spare=0.1)
    steps = steps_for_beam(beam, interval_mm, step_mm=6.0)
    total = sum(steps.dose_gy.values())
    ours = deviation(total, steps.settings.depth_mm, interval_mm[0] + 6.0, interval_mm[1] - 6.0)
    evidence(
        what=f"flatness {interval_mm[0]:.0f} to {interval_mm[1]:.0f} mm, pions, spread {100 * spread:g} %",
        source="the interval less one step of 6 mm at each end, by definition",
        value=0.0,
        ours=ours,
        unit="fraction",
        bar="0.02",
        kind="truth",
    )
    assert ours <= 0.02
    inside = (steps.settings.depth_mm >= interval_mm[0]) & (steps.settings.depth_mm <= interval_mm[1])
    assert np.mean(total[inside]) == pytest.approx(2.0, rel=0.01)


@pytest.mark.parametrize("particle", ["pi+", "proton"])
def test_flat_for_other_particles(particle):
    beam = beam_for_depth(Beam(particle, momentum_mev_c=500, momentum_sigma=0.01), 150.0, spare=0.1)
    steps = steps_for_beam(beam, (90.0, 150.0), step_mm=4.0)
    assert deviation(sum(steps.dose_gy.values()), steps.settings.depth_mm, 94.0, 146.0) <= 0.02


@pytest.mark.parametrize("model", ["constant", "microdosimetric"])
def test_effect_weighted_dose_flat(model):
    effect = EffectModel(model, Tissue("any", 0.3, 10.0))
    steps = steps_for_beam(PION, (110.0, 180.0), step_mm=6.0, effect=effect)
    depth = steps.settings.depth_mm
    # LET of components is made anew from the whole stack, so this is an independent sum
    weighted = effect.weighted_dose_gy(steps.dose_gy, steps.let_kev_um)
    assert deviation(weighted, depth, 116.0, 174.0) <= 0.02
    total = sum(steps.dose_gy.values())
    assert total[np.argmin(np.abs(depth - 172.0))] < total[np.argmin(np.abs(depth - 118.0))]


def test_weights_recover_a_known_stack():
    from dosekit.modulation.steps import range_steps

    ranges = np.arange(190.0, 100.0, -6.0)
    library = depth_library(PION, ranges)
    dose, _ = library_curves(library)
    curves = sum(dose.values())
    known = 0.2 + np.exp(-0.2 * np.arange(len(ranges)))
    found = range_steps(curves, library.depth_mm, (1.0, 240.0), residual_range_mm=ranges, profile_gy=known @ curves)
    weights = np.zeros(len(ranges))
    weights[found.index] = found.weights
    assert np.max(np.abs(weights - known)) <= 1e-3 * np.max(known)


def test_momentum_steps_agree_with_shifter_steps_on_flatness():
    steps = steps_for_beam(PION, (120.0, 170.0), step_mm=6.0, mode="momentum")
    assert deviation(sum(steps.dose_gy.values()), steps.settings.depth_mm, 126.0, 164.0) <= 0.02
    assert np.all(np.diff(steps.momentum_mev_c) < 0.0)
    assert np.all(steps.settings.shift_mm >= 0.0)


def test_device_limits_reach_the_library():
    limits = DeviceLimits(thickness_quantum_mm=2.5, smallest_share=0.02, largest_count=10)
    steps = steps_for_beam(PION, (120.0, 180.0), step_mm=5.0, limits=limits)
    multiples = steps.settings.shift_mm / 2.5
    np.testing.assert_allclose(multiples, np.round(multiples), atol=1e-6)
    assert len(steps.settings.weights) <= 10
    assert steps.settings.share.min() >= 0.02


def test_times_follow_from_particles_and_decay():
    steps = steps_for_beam(PION, (140.0, 180.0))
    plain = steps.dwell(area_cm2=100.0, particles_per_s=1e8)
    assert plain.total_s == pytest.approx(1e9 * 100.0 * steps.settings.weights.sum() / 1e8, rel=1e-12)
    decayed = steps.dwell(area_cm2=100.0, particles_per_s=1e8, path_m=8.0)
    # 172 MeV/c: decay length 0.0559 m per MeV/c (capture_and_beam_facts.csv)
    assert decayed.total_s / plain.total_s == pytest.approx(np.exp(8.0 / (0.0559 * 172.0)), rel=3e-3)


@pytest.mark.parametrize("particle", ["pi-", "mu-", "proton"])
@pytest.mark.parametrize("depth_mm", [40.0, 180.0])
def test_beam_for_depth_reaches_it(particle, depth_mm):
    beam = beam_for_depth(Beam(particle, momentum_mev_c=600), depth_mm, spare=0.05)
    assert mean_projected_range_mm(particle, beam.momentum_mev_c) == pytest.approx(1.05 * depth_mm, rel=1e-3)


def test_too_deep_is_refused():
    with pytest.raises(ReachError, match="raise the momentum"):
        steps_for_beam(PION, (150.0, 300.0))
