"""Particles against a reference library, and kinematics against their inverses."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.particles import beta_gamma, kinetic_energy_mev, momentum_mev_c, particle, particle_names
from dosekit.basis.tables import read_table
from dosekit.errors import UnknownNameError


@pytest.mark.published
@pytest.mark.parametrize("name", [n for n in particle_names() if n != "photon"])
def test_masses_lives_and_charges_agree_with_the_reference_library(name, evidence):
    library = pytest.importorskip("particle", reason="the particle data library is not installed")
    ours = particle(name)
    theirs = library.Particle.from_pdgid(ours.pdg_id)
    assert ours.charge == round(theirs.charge)
    if ours.baryon_number < 2:
        bar = max(theirs.mass_upper or 0.0, 1e-5)
        evidence(what=f"rest energy of {name}", source="particle data library (PDG)", value=theirs.mass,
                 ours=ours.mass_mev, unit="MeV", bar=f"{bar:.1g} MeV", kind="library")  # fmt: skip
        assert ours.mass_mev == pytest.approx(theirs.mass, abs=bar)
    else:  # the library gives masses of neutral atoms: add the electrons
        atom = ours.mass_mev + ours.charge * particle("e-").mass_mev
        evidence(what=f"rest energy of the {name} atom", source="particle data library", value=theirs.mass,
                 ours=atom, unit="MeV", bar="0.01 MeV", kind="library")  # fmt: skip
        assert atom == pytest.approx(theirs.mass, abs=0.01)
    if ours.mean_life_ns is not None:
        assert ours.mean_life_ns == pytest.approx(theirs.lifetime, rel=2e-2 if name == "pi0" else 2e-4)


@pytest.mark.published
def test_a_172_mev_c_pion_has_82_mev(evidence):
    row = read_table("capture_and_beam_facts").where(fact="momentum of an 82 MeV pion")
    ours = float(momentum_mev_c("pi-", 82.0))
    evidence(what="momentum of an 82 MeV pion", source=row["source"][0], value=row["value"][0], ours=ours,
             unit="MeV/c", bar="0.5 MeV/c")  # fmt: skip
    assert ours == pytest.approx(row["value"][0], abs=row["sigma"][0])


@pytest.mark.published
def test_mass_and_life_of_the_charged_pion():
    facts = read_table("capture_and_beam_facts")
    assert particle("pi-").mass_mev == pytest.approx(facts.where(fact="charged pion mass")["value"][0], abs=2e-4)
    assert particle("pi-").mean_life_ns == pytest.approx(
        facts.where(fact="charged pion mean life")["value"][0], abs=5e-3
    )


@pytest.mark.parametrize("name", ["pi-", "mu-", "proton", "alpha", "e-"])
def test_momentum_and_energy_are_inverse(name):
    energy = np.geomspace(1e-6, 1e4, 50)
    np.testing.assert_allclose(kinetic_energy_mev(name, momentum_mev_c(name, energy)), energy, rtol=1e-12)


@pytest.mark.parametrize("name", ["pi-", "mu+", "proton"])
def test_speed_and_momentum_agree(name):
    energy = np.geomspace(0.01, 1e3, 40)
    beta, gamma = beta_gamma(name, energy)
    np.testing.assert_allclose(beta * gamma * particle(name).mass_mev, momentum_mev_c(name, energy), rtol=1e-12)
    np.testing.assert_allclose(gamma, 1.0 / np.sqrt(1.0 - beta**2), rtol=1e-9)


def test_an_unknown_particle_gets_a_suggestion():
    with pytest.raises(UnknownNameError, match="did you mean 'proton'"):
        particle("protn")
