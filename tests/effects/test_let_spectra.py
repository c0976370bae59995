"""Dose over LET of star and reaction products: means, limits, what a bent curve makes of them."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.beams.ranges import range_table
from dosekit.depths.quality import star_let_kev_um
from dosekit.effects.let_spectra import SPREAD, component_spectra, spectral_mean
from dosekit.effects.microdosimetry import saturated_alpha, saturated_lineal_energy
from dosekit.effects.mixed_field import EffectModel
from dosekit.effects.rbe import quality_factor
from dosekit.effects.tissues import Tissue

ANY = Tissue("any", 0.2, 4.0)


@pytest.mark.parametrize("component", SPREAD)
@pytest.mark.parametrize("beam", ["pi-", "pi+", "proton"])
def test_shares_sum_to_one_and_let_is_positive(component, beam):
    for spectrum in component_spectra(component, beam_particle=beam):
        assert spectrum.dose_share.sum() == pytest.approx(1.0, rel=1e-12)
        assert np.all(spectrum.dose_share >= 0.0)
        assert np.all(spectrum.let_kev_um > 0.0)


@pytest.mark.parametrize("component", ["star_light", "star_heavy"])
def test_mean_is_that_of_the_depth_curves(component):
    """Two ways to the same integral over slowing down."""
    (spectrum,) = component_spectra(component)
    assert spectrum.mean_kev_um == pytest.approx(star_let_kev_um("water")[component], rel=2e-3)


@pytest.mark.parametrize("component", [*SPREAD, "primary", "decay"])
def test_mean_of_the_let_is_the_let_given(component):
    let = np.array([0.0, 1.0, 5.0, 30.0, 57.0, 289.0, 900.0])
    np.testing.assert_allclose(spectral_mean(lambda value: value, component, let), let, rtol=1e-9)
    np.testing.assert_allclose(spectral_mean(np.ones_like, component, let[1:]), 1.0, rtol=1e-9)


@pytest.mark.parametrize("component", SPREAD)
def test_many_values_are_interpolated_finely(component):
    """A map of many values against each value on its own."""
    let = np.geomspace(1.0, 400.0, 60)
    together = spectral_mean(saturated_lineal_energy, component, let)
    alone = [float(spectral_mean(saturated_lineal_energy, component, value)) for value in let]
    np.testing.assert_allclose(together, alone, rtol=2e-3)


@pytest.mark.parametrize("component", SPREAD)
def test_no_jump_where_parts_end(component):
    for spectrum in component_spectra(component):
        pair = spectral_mean(saturated_lineal_energy, component, spectrum.mean_kev_um * np.array([1 - 1e-9, 1 + 1e-9]))
        assert pair[1] == pytest.approx(pair[0], rel=1e-7)


def test_one_species_slows_down_by_hand():
    """Protons of 10 MeV: dose over LET against sums over thin slices of their path."""
    from dosekit.effects.let_spectra import _joined, _slowing_down

    water = material("water")
    spectrum = _joined([_slowing_down("proton", water, np.array([10.0]), np.array([1.0]))])
    table = range_table("proton", water)
    energy = (np.arange(20000) + 0.5) / 20000 * 10.0
    stopping = table.stopping_mev_mm(energy)
    for function in (np.sqrt, saturated_lineal_energy):
        assert spectrum.mean_of(function) == pytest.approx(float(np.mean(function(stopping))), rel=3e-3)


def test_a_saturating_curve_gives_less_than_at_the_mean():
    """Jensen: alpha bends downwards over the LET of in-flight products and recoils."""
    for component, let in (("in_flight", 60.0), ("star_neutron", 36.0), ("star_heavy", 289.0)):
        spread = saturated_alpha(let, tissue=ANY, component=component)
        assert float(spread) < float(saturated_alpha(let, tissue=ANY))


def test_quality_factor_is_averaged():
    light, heavy = component_spectra("star_neutron")
    let = 0.7 * light.mean_kev_um + 0.3 * heavy.mean_kev_um
    ours = float(EffectModel("icrp60", ANY).constants({"star_neutron": let})["star_neutron"][0]) / ANY.alpha_per_gy
    by_hand = 0.7 * np.dot(light.dose_share, quality_factor(light.let_kev_um))
    by_hand += 0.3 * np.dot(heavy.dose_share, quality_factor(heavy.let_kev_um))
    assert ours == pytest.approx(by_hand, rel=1e-9)


def test_ions_of_one_let_are_not_spread():
    one = EffectModel("microdosimetric", ANY, spread_let=False).constants({"star_heavy": 80.0})["star_heavy"][0]
    assert float(one) == pytest.approx(float(saturated_alpha(80.0, tissue=ANY)), rel=1e-12)
