"""Straggling, scattering and decay."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.basis.tables import read_table
from dosekit.beams.decay import (
    MICHEL_MEAN_ENERGY_MEV,
    MUON_ENERGY_AT_REST_MEV,
    decay_per_mm,
    michel_spectrum,
    muon_from_pion,
)
from dosekit.beams.ranges import csda_range_mm, range_table
from dosekit.beams.scattering import (
    fermi_eyges_moments,
    scattering_length_g_cm2,
    scattering_power_rad2_mm,
    scattering_power_ratio,
)
from dosekit.beams.straggling import (
    energy_variance_mev2_mm,
    mean_range_excess_mm,
    range_shape,
    range_sigma_mm,
    range_variance_mm2,
)

PIONS = list(read_table("pion_ranges_water").rows())


@pytest.mark.published
@pytest.mark.parametrize("row", PIONS, ids=lambda r: f"{r['momentum_mev_c']:g}")
def test_range_straggling_of_pions(row, evidence):
    ours = float(range_sigma_mm("pi-", "water", row["kinetic_energy_mev"])) / 10.0
    evidence(what=f"sigma of range, pi- {row['momentum_mev_c']:g} MeV/c", source="Bohr, derived table",
             value=row["sigma_range_cm"], ours=ours, unit="cm", bar="5 %")  # fmt: skip
    assert ours == pytest.approx(row["sigma_range_cm"], rel=0.05)


@pytest.mark.published
@pytest.mark.parametrize("row", PIONS, ids=lambda r: f"{r['momentum_mev_c']:g}")
def test_lateral_sigma_at_the_range(row, evidence):
    variance = fermi_eyges_moments("pi-", "water", row["kinetic_energy_mev"], depth_mm=[1e4])[2]
    ours = float(np.sqrt(variance[0])) / 10.0
    evidence(what=f"lateral sigma at the range, pi- {row['momentum_mev_c']:g} MeV/c", source="Gottschalk T_dM, derived table",  # noqa: E501
             value=row["sigma_lateral_at_range_cm"], ours=ours, unit="cm", bar="5 %")  # fmt: skip
    assert ours == pytest.approx(row["sigma_lateral_at_range_cm"], rel=0.05)


# CATIMA 1.7 in water with I = 75 eV, g/cm2
CATIMA = {"proton": {50: 0.0263, 100: 0.0860, 150: 0.1695, 200: 0.2712}, "pi+": {20: 0.0545, 50: 0.2366, 100: 0.6482}}


@pytest.mark.published
@pytest.mark.parametrize(("name", "energy"), [(n, e) for n, rows in CATIMA.items() for e in rows])
def test_range_straggling_against_a_library(name, energy, evidence):
    ours = float(range_sigma_mm(name, material("water").replace(mean_excitation_ev=75.0), energy)) / 10.0
    value = CATIMA[name][energy]
    evidence(
        what=f"sigma of range, {name} {energy} MeV",
        source="CATIMA 1.7",
        value=value,
        ours=ours,
        unit="g/cm2",
        bar="5 %",
    )
    assert ours == pytest.approx(value, rel=0.05)


def test_variance_adds_along_the_path():
    whole = float(range_variance_mm2("pi-", "water", 80.0))
    parts = range_variance_mm2("pi-", "water", np.array([80.0, 40.0]))
    table = range_table("pi-", "water")
    energy = np.linspace(40.0, 80.0, 4001)
    between = np.trapezoid(energy_variance_mev2_mm("pi-", "water", energy) / table.stopping_mev_mm(energy) ** 3, energy)
    assert whole == pytest.approx(float(parts[1]) + float(between), rel=1e-3)


@pytest.mark.parametrize(("name", "energy"), [("pi-", 80.0), ("mu-", 94.0), ("proton", 150.0)])
def test_shape_of_the_range_distribution(name, energy):
    x, density = range_shape(name, "water", energy)
    dx = x[1] - x[0]
    moments = [float(np.sum(x**n * density) * dx) for n in range(4)]
    assert moments[0] == pytest.approx(1.0, abs=1e-6)
    assert moments[1] == pytest.approx(0.0, abs=1e-6)
    assert moments[2] == pytest.approx(1.0, abs=1e-6)
    # third cumulant of independent collisions, integrated by itself
    from dosekit.basis.particles import beta_gamma, particle

    table = range_table(name, "water")
    t = np.linspace(0.01 * energy, energy, 4000)
    beta, gamma = beta_gamma(name, t)
    r = 0.51099895 / particle(name).mass_mev
    w = 2 * 0.51099895 * (beta * gamma) ** 2 / (1 + 2 * gamma * r + r * r)
    xi = 0.05 * 0.307075 * material("water").z_over_a / beta**2
    s = table.stopping_mev_mm(t)
    k2 = np.trapezoid(xi * w * (1 - beta**2 / 2) / s**3, t)
    k3 = np.trapezoid(xi * w**2 * (0.5 - beta**2 / 3) / s**4, t)
    assert moments[3] == pytest.approx(-k3 / k2**1.5, rel=0.05)


def test_mean_range_exceeds_the_csda_range_a_little():
    excess = mean_range_excess_mm("pi-", "water", 80.0)
    assert 0.0 < excess < 1e-3 * float(csda_range_mm("pi-", "water", 80.0))


def test_scattering_length():
    assert scattering_length_g_cm2("water") == pytest.approx(46.88, rel=0.002)  # Gottschalk 2010, table
    assert scattering_power_ratio("water") == 1.0
    assert scattering_power_ratio("bone_cortical") > 1.2
    assert scattering_power_ratio("polyethylene") < 1.0
    thin = material("water").replace(density_g_cm3=0.3)
    assert scattering_power_ratio(thin) == pytest.approx(1.0, rel=0.01)


def test_moments_agree_with_direct_integrals():
    table = range_table("pi-", "water")
    total = float(table.range_mm(80.0))
    z = np.linspace(0.0, 120.0, 6001)
    power = scattering_power_rad2_mm("pi-", "water", table.energy_mev(total - z), start_energy_mev=80.0)
    a0, a1, a2 = fermi_eyges_moments("pi-", "water", 80.0, depth_mm=[120.0], steps=4000)
    assert a0[0] == pytest.approx(np.trapezoid(power, z), rel=3e-3)
    assert a1[0] == pytest.approx(np.trapezoid(power * (120.0 - z), z), rel=3e-3)
    assert a2[0] == pytest.approx(np.trapezoid(power * (120.0 - z) ** 2, z), rel=3e-3)


def test_start_values_drift_as_in_vacuum():
    bare = fermi_eyges_moments("pi-", "water", 80.0, depth_mm=[50.0])
    wide = fermi_eyges_moments(
        "pi-", "water", 80.0, depth_mm=[50.0], sigma_mm=4.0, divergence_sigma_rad=0.01, correlation=-0.5
    )
    drift = 4.0**2 + 2 * 50.0 * (-0.5 * 4.0 * 0.01) + (0.01 * 50.0) ** 2
    assert wide[2][0] - bare[2][0] == pytest.approx(drift, rel=1e-9)


@pytest.mark.published
@pytest.mark.parametrize("row", PIONS, ids=lambda r: f"{r['momentum_mev_c']:g}")
def test_decay_before_the_stop(row, evidence):
    table = range_table("pi-", "water")
    total = float(table.range_mm(row["kinetic_energy_mev"]))
    r = np.linspace(1e-3, total, 20001)
    ours = 100.0 * (1.0 - np.exp(-np.trapezoid(decay_per_mm("pi-", table.energy_mev(r)), r)))
    evidence(what=f"decay before the stop, pi- {row['momentum_mev_c']:g} MeV/c", source="derived table",
             value=row["decay_before_stop_percent"], ours=ours, unit="%", bar="2 %")  # fmt: skip
    assert ours == pytest.approx(row["decay_before_stop_percent"], rel=0.02)


@pytest.mark.published
def test_decay_length(evidence):
    ours = 1e-3 / float(decay_per_mm("pi-", 1.0)) / float(np.sqrt(1.0 * (1.0 + 2 * 139.57039)))
    evidence(what="decay length per momentum", source="PDG", value=0.0559, ours=ours, unit="m per MeV/c", bar="0.0001")
    assert ours == pytest.approx(0.0559, abs=1e-4)


def test_muons_conserve_energy_and_momentum():
    for pion in (1e-6, 20.0, 80.0):
        energy, cosine, neutrino = muon_from_pion([pion], samples=2000)
        total = pion + 139.57039
        assert float(np.mean(energy)) + 105.6583755 + neutrino * total == pytest.approx(total, rel=1e-9)
        muon = np.sqrt(energy * (energy + 2 * 105.6583755))
        assert float(np.mean(muon * cosine)) < np.sqrt(pion * (pion + 2 * 139.57039)) + 1e-6
    at_rest = muon_from_pion([1e-9])[0]
    np.testing.assert_allclose(at_rest, MUON_ENERGY_AT_REST_MEV, rtol=1e-3)


def test_michel_spectrum():
    energy, probability = michel_spectrum(400)
    assert float(np.sum(probability)) == pytest.approx(1.0)
    assert float(np.sum(energy * probability)) == pytest.approx(MICHEL_MEAN_ENERGY_MEV, abs=0.02)
    assert pytest.approx(4.12, abs=0.005) == MUON_ENERGY_AT_REST_MEV
