"""Ridges, dwell times and profile measures in closed form."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.errors import InputError
from dosekit.modulation.devices import dwell_program, flight_survival, ridge_profile
from dosekit.modulation.profiles import falling_depth_mm, profile_measures


def test_ridge_widths_are_the_particle_shares():
    ridge = ridge_profile([20.0, 0.0, 5.0, 10.0], [1.0, 5.0, 0.0, 4.0], pitch_mm=10.0, relative_stopping_power=1.25)
    assert ridge.thickness_mm.tolist() == [0.0, 8.0, 16.0]
    np.testing.assert_allclose(ridge.width_mm, [5.0, 4.0, 1.0], rtol=1e-14)
    np.testing.assert_allclose(ridge.half_width_mm, [5.0, 2.5, 0.5], rtol=1e-14)


def test_dwell_times():
    program = dwell_program([4e9, 1e9], particles_per_s=1e8, survival=[0.8, 0.5])
    np.testing.assert_allclose(program.time_s, [50.0, 20.0], rtol=1e-14)
    assert program.total_s == pytest.approx(70.0, rel=1e-14)


@pytest.mark.published
def test_survival_of_pions_on_their_way(evidence):
    """170 MeV/c: decay length 0.0559 m per MeV/c, capture_and_beam_facts.csv (PDG)."""
    energy = np.sqrt(170.0**2 + 139.57039**2) - 139.57039
    ours = float(flight_survival("pi-", energy, path_m=8.0))
    expected = np.exp(-8.0 / (0.0559 * 170.0))
    evidence(
        what="share of 170 MeV/c pions left after 8 m",
        source="decay length 0.0559 m per MeV/c (PDG values)",
        value=expected,
        ours=ours,
        unit="1",
        bar="0.2 %",
    )
    assert ours == pytest.approx(expected, rel=2e-3)
    assert flight_survival("proton", 100.0, path_m=50.0) == 1.0


def test_measures_of_a_trapezium():
    depth = np.arange(0.0, 101.0)
    curve = np.interp(depth, [0, 40, 60, 80, 100], [1.0, 2.0, 2.0, 0.0, 0.0])
    measures = profile_measures(depth, curve, judged_mm=(40.0, 60.0))
    assert measures.flatness == 0.0
    assert measures.distal_fall_mm == pytest.approx(12.0, rel=1e-12)
    assert (measures.entrance_share, measures.peak_to_entrance) == (0.5, 2.0)
    assert np.isnan(profile_measures(depth, np.ones(101), judged_mm=(40, 60)).distal_fall_mm)
    assert falling_depth_mm(depth, curve, level=1.0, start=60) == pytest.approx(70.0, rel=1e-12)


def test_unfit_input_is_refused():
    for shift, weights, more in (
        ([0.0], [0.0], {}),
        ([-1.0], [1.0], {}),
        ([0.0], [1.0, 2.0], {}),
        ([0.0], [1.0], {"pitch_mm": 0.0}),
        ([0.0], [1.0], {"relative_stopping_power": 0.0}),
    ):
        with pytest.raises(InputError):
            ridge_profile(shift, weights, **more)
    for number, rate, alive in (([-1.0], 1.0, 1.0), ([1.0], 0.0, 1.0), ([1.0], 1.0, 0.0), ([1.0], 1.0, 1.1)):
        with pytest.raises(InputError):
            dwell_program(number, particles_per_s=rate, survival=alive)
    with pytest.raises(InputError):
        flight_survival("pi-", 80.0, path_m=-1.0)
    with pytest.raises(InputError):
        profile_measures([0.0, 1.0], [1.0, 1.0], judged_mm=(5.0, 6.0))
    with pytest.raises(InputError):
        profile_measures([0.0, 1.0], [0.0, 0.0], judged_mm=(0.0, 1.0))
