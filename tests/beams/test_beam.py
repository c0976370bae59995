"""The description of a beam and what it refuses."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dosekit.beams.beam import Beam
from dosekit.errors import BeamError, DosekitError, InputError, UnknownNameError


def test_momentum_and_energy_say_the_same():
    first = Beam("pi-", momentum_mev_c=170)
    second = Beam("pi-", kinetic_energy_mev=first.kinetic_energy_mev)
    assert second.momentum_mev_c == pytest.approx(170.0, rel=1e-12)
    assert first.kinetic_energy_mev == pytest.approx(80.384, abs=1e-3)


@pytest.mark.published
def test_kinematics_of_a_report(evidence):
    ours = Beam("pi-", kinetic_energy_mev=82.0).momentum_mev_c
    evidence(
        what="momentum of an 82 MeV pion",
        source="capture_and_beam_facts",
        value=172.0,
        ours=ours,
        unit="MeV/c",
        bar="0.5",
    )
    assert ours == pytest.approx(172.0, abs=0.5)


def test_spread_as_sigma_or_width():
    width = 2.0 * math.sqrt(2.0 * math.log(2.0))
    assert Beam("pi-", momentum_mev_c=170, momentum_fwhm=0.08).momentum_spread == pytest.approx(0.08 / width)
    assert Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02).momentum_spread == 0.02
    with pytest.raises(BeamError, match="both given"):
        Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02, momentum_fwhm=0.02)


def test_replace_keeps_the_rest():
    beam = Beam(
        "pi-", momentum_mev_c=170, momentum_fwhm=0.05, contaminants={"mu-": 0.1, "e-": 0.2}, spot_sigma_mm=(3, 4)
    )
    other = beam.replace(momentum_mev_c=180.0)
    assert other.momentum_spread == beam.momentum_spread
    assert other.contaminant_fractions == {"mu-": 0.1, "e-": 0.2}
    assert other.axis(1)[0] == 4.0
    assert beam.replace(kinetic_energy_mev=50.0).kinetic_energy_mev == 50.0
    assert beam.replace(momentum_sigma=0.01).momentum_spread == 0.01
    assert hash(beam) == hash(beam.replace())


def test_range_shifter():
    assert Beam("pi-", momentum_mev_c=170, range_shifter="polyethylene").fixed_shifter_mm == 0.0
    beam = Beam("pi-", momentum_mev_c=170, range_shifter=("pmma", 40))
    assert beam.fixed_shifter_mm == 40.0
    assert beam.shifter_material.name == "pmma"


@pytest.mark.parametrize(
    ("changes", "word"),
    [
        ({"momentum_sigma": -0.01}, "spread"),
        ({"momentum_sigma": 0.5}, "spread"),
        ({"momentum_fwhm": -0.1}, "spread"),
        ({"momentum_mev_c": float("nan")}, "nan"),
        ({"momentum_mev_c": float("inf")}, "inf"),
        ({"momentum_mev_c": -170}, "momentum"),
        ({"momentum_mev_c": 30}, "range"),
        ({"momentum_mev_c": "fast"}, "not a number"),
        ({"momentum_mev_c": True}, "not a number"),
        ({"kinetic_energy_mev": 80}, "both given"),
        ({"contaminants": {"mu-": 0.7, "e-": 0.4}}, "sum"),
        ({"contaminants": {"mu-": -0.1}}, "fraction"),
        ({"contaminants": {"e-": float("nan")}}, "nan"),
        ({"contaminants": {"proton": 0.1}}, "contaminant"),
        ({"contaminants": {"pi-": 0.1}}, "contaminant"),
        ({"spot_sigma_mm": -1}, "spot"),
        ({"spot_sigma_mm": (1, 2, 3)}, "spot"),
        ({"divergence_sigma_mrad": -1}, "divergence"),
        ({"correlation": 1.5}, "correlation"),
        ({"range_shifter": ("pmma", -3)}, "shifter"),
        ({"range_shifter_gap_mm": float("nan")}, "gap"),
    ],
)
def test_what_cannot_be_is_refused(changes, word):
    with pytest.raises(BeamError, match=word) as caught:
        Beam("pi-", **{"momentum_mev_c": 170, **changes})
    assert caught.value.allowed


def test_unknown_particles_are_named():
    with pytest.raises(UnknownNameError, match="pi-"):
        Beam("pion", momentum_mev_c=170)
    with pytest.raises(UnknownNameError):
        Beam("neutron", momentum_mev_c=170)
    with pytest.raises(UnknownNameError):
        Beam("pi-", momentum_mev_c=170, contaminants={"pi-zero": 0.1})
    with pytest.raises(InputError):
        Beam("pi-", momentum_mev_c=170, range_shifter="unobtainium")


@given(
    st.one_of(st.floats(), st.text(max_size=4), st.none()),
    st.one_of(st.floats(), st.none()),
    st.dictionaries(st.sampled_from(["mu-", "e-", "e+", "x"]), st.floats(), max_size=3),
)
def test_anything_else_is_refused_in_our_own_words(momentum, spread, contaminants):
    try:
        beam = Beam("pi-", momentum_mev_c=momentum, momentum_sigma=spread, contaminants=contaminants)
    except DosekitError:
        return
    else:
        assert beam.momentum_mev_c > 0.0
        assert sum(beam.contaminant_fractions.values()) <= 1.0
