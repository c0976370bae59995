"""What the fold's tables add to the library: detours, tails, the lowest rung."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.maps.tables import _detours, _variance_in_water, step_tables

from invented_fields import BEAM, invented_library


@pytest.mark.parametrize("slope", [-0.01, 0.05, 0.2, 0.6])
def test_detours_narrow_the_beam_as_in_histories(slope, rng):
    """Random walks in angle, weighted by exp(-slope detour), against one over one plus the detour term.

    Constant scattering power; 3 % of the variance, 8 % where it falls to half.
    """
    bins, step, power = 150, 1.0, 1.2e-4
    depth = (np.arange(bins) + 0.5) * step
    core = np.exp(-slope * np.maximum(depth - 130.0, 0.0))[None, :]
    powers, start = np.full((1, bins), power), np.zeros((3, 1))
    variance = _variance_in_water(powers, start, gap_mm=0.0, bin_mm=step)
    late = _detours(core, powers, start, variance, gap_mm=0.0, depth_mm=depth)[0, -1]
    histories = 30_000
    x, detour = np.zeros(histories), np.zeros(histories)
    angle = np.zeros((2, histories))
    for _ in range(bins):
        before = angle.copy()
        angle += rng.normal(0.0, np.sqrt(power * step), angle.shape)
        x += 0.5 * step * (before[0] + angle[0])
        detour += 0.25 * step * (before**2 + angle**2).sum(axis=0)
    weight = np.exp(-slope * detour)
    weight /= weight.sum()
    ratio = float((weight * x**2).sum() / np.mean(x**2))
    assert 1.0 / (1.0 + late) == pytest.approx(ratio, rel=0.03 if ratio > 0.7 else 0.08)
    assert (ratio < 1.0) == (slope > 0.0)


def test_behind_the_peak_the_beam_is_narrower_and_before_it_hardly_changed():
    library = invented_library(BEAM, [0.0])
    tables = step_tables(library, BEAM)
    core = library.quantities["core"][0]
    peak = int(core.argmax())
    assert tables.survivors[5 : peak - 15, 0].min() > 0.94
    behind = peak + int(np.argmax(core[peak:] < 0.05 * core[peak]))
    assert tables.survivors[behind, 0] < tables.survivors[peak - 15, 0] - 0.1


def test_nothing_of_the_primaries_is_spread_by_less_than_the_coarse_lattice_carries():
    """The lattice adds a third of a squared step, and its step is 1.2 times the spot with the narrowest part."""
    for spot in (2.0, 4.0, 8.0):
        beam = BEAM.replace(spot_sigma_mm=spot)
        tables = step_tables(invented_library(beam, [0.0]), beam)
        narrowest = tables.part_sigma_mm[tables.part_target <= 1].min()
        step = min(8.0, 1.2 * np.hypot(spot, narrowest))
        assert narrowest**2 > 0.95 * step**2 / 3.0
