"""Materials: closed forms, mixtures, Bragg additivity, refusals."""

from __future__ import annotations

import math

import pytest

from dosekit.basis.materials import element, element_symbols, from_fractions, material, material_names, mixture
from dosekit.errors import MaterialError, UnknownNameError


@pytest.mark.parametrize("name", material_names())
def test_fractions_sum_to_one(name):
    assert math.fsum(f for _, f in material(name).mass_fractions) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("name", material_names())
def test_bragg_additivity_lands_near_the_printed_value(name):
    printed = material(name)
    ours = from_fractions(name, dict(printed.mass_fractions), printed.density_g_cm3).mean_excitation_ev
    bar = 0.14 if name == "aluminium" else 0.05  # the compound values of ICRU 37 do not hold for an element alone
    assert ours == pytest.approx(printed.mean_excitation_ev, rel=bar)


@pytest.mark.published
def test_electron_density_of_water(evidence):
    ours = material("water").electrons_per_gram
    evidence(what="electrons per gram of water", source="ICRU Report 44 (1989), 3.343e23 per g (memory)",
             value=3.343e23, ours=ours, unit="1/g", bar="0.0005e23")  # fmt: skip
    assert ours == pytest.approx(3.343e23, abs=0.0005e23)


def test_electron_density_is_linear_in_density():
    thin = material("lung_tissue", 0.3)
    assert thin.relative_electron_density == pytest.approx(
        material("lung_tissue").relative_electron_density * 0.3 / 1.04, rel=1e-12
    )


@pytest.mark.published
@pytest.mark.parametrize("symbol", element_symbols())
def test_atomic_weights_agree_with_the_reference_library(symbol, evidence):
    library = pytest.importorskip("periodictable", reason="the element data library is not installed")
    theirs = getattr(library, symbol).mass
    ours = element(symbol).atomic_weight
    evidence(what=f"atomic weight of {symbol}", source="element data library (IUPAC)", value=theirs, ours=ours,
             unit="u", bar="0.02 %", kind="library")  # fmt: skip
    assert ours == pytest.approx(theirs, rel=2e-4)


def test_a_mixture_of_one_is_itself():
    mix = mixture("same", [("pmma", 1.0)], 1.19)
    assert dict(mix.mass_fractions) == pytest.approx(dict(material("pmma").mass_fractions))
    assert mix.mean_excitation_ev == pytest.approx(material("pmma").mean_excitation_ev)


def test_a_mixture_conserves_electrons_and_mass():
    mix = mixture("m", [("water", 0.3), ("bone_cortical", 0.7)], 1.5)
    expected = 0.3 * material("water").z_over_a + 0.7 * material("bone_cortical").z_over_a
    assert mix.z_over_a == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("call", "error"),
    [
        (lambda: material("bonne_cortical"), UnknownNameError),
        (lambda: material("water", density_g_cm3=0.0), MaterialError),
        (lambda: material("water", density_g_cm3=-1.0), MaterialError),
        (lambda: material("water", density_g_cm3=float("nan")), MaterialError),
        (lambda: from_fractions("x", {"H": 0.5}, 1.0), MaterialError),
        (lambda: from_fractions("x", {"H": 1.5, "O": -0.5}, 1.0), MaterialError),
        (lambda: from_fractions("x", {"Xx": 1.0}, 1.0), UnknownNameError),
        (lambda: mixture("x", [], 1.0), MaterialError),
        (lambda: mixture("x", [("water", 0.4)], 1.0), MaterialError),
    ],
)
def test_what_cannot_exist_is_refused(call, error):
    with pytest.raises(error):
        call()


def test_a_misspelt_name_gets_a_suggestion():
    with pytest.raises(UnknownNameError, match="did you mean 'bone_cortical'"):
        material("bonne_cortical")
