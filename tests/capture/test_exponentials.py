"""Sums of exponentials against the profiles they stand for."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.capture.exponentials import cone_kernel, material_kernel, neutron_scale, proton_kernel
from dosekit.capture.profiles import element_profile, star_profile
from dosekit.errors import InputError

WATER = material("water")


@pytest.mark.parametrize("symbol", ["C", "N", "O", "P", "Ca"])
@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
def test_light_products_follow_the_profile(symbol, yields):
    kernel, profile = (
        cone_kernel("star_light", yields, symbol),
        element_profile(symbol, WATER, "star_light", yields=yields),
    )
    edges = np.arange(0.0, 81.0)
    ours, exact = kernel.shells_mev(edges), -np.diff(profile.beyond(edges))
    large = exact > 0.05 * exact.max()
    assert np.abs(ours[large] / exact[large] - 1.0).max() < (0.06 if symbol in ("N", "P") else 0.04)
    far = (exact > 0.005 * exact.max()) & ~large
    assert np.abs(ours[far] / exact[far] - 1.0).max() < 0.30
    assert kernel.shells_mev(np.arange(0.0, 300.0)).min() >= 0.0
    assert kernel.energy_mev == pytest.approx(profile.energy_mev, rel=1e-9)


@pytest.mark.parametrize("component", ["star_neutron", "star_photon"])
@pytest.mark.parametrize("symbol", ["C", "O", "Ca"])
def test_neutral_products_follow_the_profile(component, symbol):
    kernel = cone_kernel(component, "evaluated", symbol)
    profile = element_profile(symbol, WATER, component, yields="evaluated")
    edges = np.concatenate([np.arange(0.0, 60.0, 5.0), np.arange(60.0, 401.0, 20.0)])
    ours, exact = kernel.shells_mev(edges), -np.diff(profile.beyond(edges))
    assert np.abs(ours / exact - 1.0).max() < 0.05


def test_heavy_products_stay():
    kernel = cone_kernel("star_heavy", "evaluated", "O")
    assert len(kernel.rates_per_mm) == 0
    assert kernel.local_mev == pytest.approx(element_profile("O", WATER, "star_heavy", yields="evaluated").energy_mev)


def test_materials_mix_their_elements():
    mixed = material_kernel("star_light", "evaluated", material("bone_cortical"))
    assert mixed.energy_mev == pytest.approx(star_profile("bone_cortical", "star_light").energy_mev, rel=1e-6)


def test_protons_of_reactions():
    kernel = proton_kernel(25.0)
    assert kernel.energy_mev == pytest.approx(1.0, rel=1e-9)
    near = proton_kernel(10.0).shells_mev(np.array([0.0, 5.0]))
    assert near[0] > kernel.shells_mev(np.array([0.0, 5.0]))[0]
    with pytest.raises(InputError):
        proton_kernel(2.0)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["polyethylene", "bone_cortical", "adipose", "graphite", "aluminium"])
def test_one_factor_describes_neutrons_in_a_material(name):
    """Energy inside 30 to 150 mm from histories in the material, against water with scaled distance: 6 %."""
    medium = material(name, 1.0)
    own = element_profile("O", medium, "star_neutron", yields="evaluated")
    water = element_profile("O", WATER, "star_neutron", yields="evaluated")
    for radius in (30.0, 60.0, 100.0, 150.0):
        inside = own.energy_mev - float(own.beyond(radius))
        scaled = water.energy_mev - float(water.beyond(radius * neutron_scale(medium)))
        assert scaled == pytest.approx(inside, rel=0.06)
