"""Reactions in flight: cross sections, products, closure."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.basis.tables import read_table
from dosekit.beams.reactions import (
    CHANNELS,
    ENERGY_GRID_MEV,
    elastic_mean_cosine,
    element_cross_sections_mb,
    macroscopic_cross_sections_mm,
    reactions,
)
from dosekit.errors import UnknownNameError

POINTS = list(read_table("pion_cross_section_measurements").rows())
TABLE = list(read_table("pion_minus_cross_sections").rows())


def total(sections):
    return sum(float(sections[channel]) for channel in CHANNELS[:3])


@pytest.mark.published
@pytest.mark.parametrize("row", TABLE, ids=lambda r: f"{r['element']}-{r['kinetic_energy_mev']:g}")
def test_evaluated_set_is_the_table(row):
    ours = element_cross_sections_mb("pi-", row["element"], row["kinetic_energy_mev"], yields="evaluated")
    assert total(ours) == pytest.approx(row["reaction_mb"], rel=1e-9)
    assert total(ours) + float(ours["elastic"]) == pytest.approx(row["total_mb"], rel=1e-9)


@pytest.mark.published
@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
@pytest.mark.parametrize("row", TABLE, ids=lambda r: f"{r['element']}-{r['kinetic_energy_mev']:g}")
def test_both_sets_agree_on_how_often(row, yields):
    # both go back to Barashenkov: 12 % covers reading and interpolation
    ours = total(element_cross_sections_mb("pi-", row["element"], row["kinetic_energy_mev"], yields=yields))
    assert ours == pytest.approx(row["reaction_mb"], rel=0.12)


@pytest.mark.model
@pytest.mark.parametrize(
    "row", POINTS, ids=lambda r: f"{r['projectile']}-{r['target']}-{r['kinetic_energy_mev']:g}-{r['channel']}"
)
def test_measured_points(row, evidence):
    sections = element_cross_sections_mb(
        row["projectile"], row["target"], row["kinetic_energy_mev"], yields="evaluated"
    )
    ours = total(sections) if row["channel"] == "reaction" else float(sections[row["channel"]])
    evidence(what=f"{row['channel']}, {row['projectile']} {row['target']} {row['kinetic_energy_mev']:g} MeV", source=row["source"],  # noqa: E501
             value=row["value_mb"], ours=ours, unit="mb", bar="3 sigma + 10 %", kind="model")  # fmt: skip
    bar = 3.0 * row["sigma_mb"] + 0.10 * row["value_mb"]
    assert ours == pytest.approx(row["value_mb"], abs=bar)


@pytest.mark.parametrize("projectile", ["pi-", "pi+", "proton"])
@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
@pytest.mark.parametrize("name", ["water", "bone_cortical", "adipose", "ptfe", "concrete"])
def test_energy_closes(projectile, yields, name):
    table = reactions(projectile, name, yields=yields)
    rest = 139.57039 if projectile != "proton" else 0.0
    gone = (table.per_mm["absorption"] + table.per_mm["charge_exchange"]) / np.maximum(table.reaction_per_mm, 1e-30)
    spent = sum(table.number[s] * (table.mean_energy_mev[s] + (134.9768 if s == "pi0" else 0.0)) for s in table.number)
    keep = table.reaction_per_mm > 0.0
    np.testing.assert_allclose((spent + table.binding_mev)[keep], (ENERGY_GRID_MEV + rest * gone)[keep], rtol=1e-9)
    for species in table.number:
        assert np.all(table.number[species] >= 0.0)
        assert np.all(table.rms_energy_mev[species] >= table.mean_energy_mev[species] * (1.0 - 1e-9))
    assert np.all(table.binding_mev[keep] > -25.0)


@pytest.mark.published
def test_proton_loss_in_water(evidence):
    ours = 10.0 * float(macroscopic_cross_sections_mm("proton", "water", 100.0)["inelastic"])
    evidence(
        what="proton fluence loss in water",
        source="Bortfeld (1997), beta",
        value=0.012,
        ours=ours,
        unit="1/cm",
        bar="0.002",
    )
    assert ours == pytest.approx(0.012, abs=0.0025)


def test_density_and_mixture_scale():
    half = material("water").replace(density_g_cm3=0.5)
    full = macroscopic_cross_sections_mm("pi-", "water", 60.0)
    for channel, value in macroscopic_cross_sections_mm("pi-", half, 60.0).items():
        assert float(value) == pytest.approx(0.5 * float(full[channel]), rel=1e-12)


def test_leptons_do_not_react():
    assert all(float(v) == 0.0 for v in macroscopic_cross_sections_mm("mu-", "water", 60.0).values())


def test_elastic_scattering_turns_forward_with_momentum_and_size():
    cosine = elastic_mean_cosine("O", "pi-", np.array([5.0, 20.0, 80.0, 150.0]), yields="cascade")
    assert np.all(np.diff(cosine) > 0.0)
    # s and p waves cancel ahead at low energy and add there above 50 MeV
    waves = elastic_mean_cosine("O", "pi-", np.array([20.0, 80.0]))
    assert waves[0] < 0.0 < waves[1]
    assert float(elastic_mean_cosine("Ca", "pi-", 80.0)) > float(elastic_mean_cosine("C", "pi-", 80.0))


def test_unknown_yields():
    with pytest.raises(UnknownNameError, match="evaluated"):
        reactions("pi-", "water", yields="best")
