"""Effect of mixed fields: equal effect, slopes, limits, and the models by name."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.effects.mixed_field import (
    EffectModel,
    effect_model_names,
    effect_sums,
    weighted_dose_gy,
    weighted_dose_slopes,
)
from dosekit.effects.rbe import component_factors, rbe
from dosekit.effects.tissues import Tissue, tissue, tissue_names, tissue_of_structure
from dosekit.errors import InputError, UnknownNameError, ValidityWarning

import naive

ANY = Tissue("any", 0.2, 4.0)
LET = dict.fromkeys(COMPONENTS, 2.0) | {"star_heavy": 110.0, "star_light": 6.0, "in_flight": 20.0}


@pytest.mark.naive
@pytest.mark.parametrize("fractions", [1, 7])
def test_equals_oracle(rng, fractions):
    doses = rng.uniform(0.0, 3.0, (4, 3))
    alphas, betas = rng.uniform(0.1, 1.0, 3), rng.uniform(0.01, 0.1, 3)
    names = COMPONENTS[:3]
    constants = {name: (np.asarray(a), np.sqrt(b)) for name, a, b in zip(names, alphas, betas, strict=True)}
    linear, root = effect_sums(dict(zip(names, doses.T, strict=True)), constants)
    ours = weighted_dose_gy(linear, root, tissue=ANY, fractions=fractions)
    for row, value in zip(doses, ours, strict=True):
        expected = naive.photon_dose_of_equal_effect(
            row, alphas, betas, alpha=ANY.alpha_per_gy, beta=ANY.beta_per_gy2, fractions=fractions
        )
        assert value == pytest.approx(expected, rel=1e-10)


def test_photons_alone_are_themselves():
    for name in COMPONENTS:
        assert EffectModel("physical", ANY).weighted_dose_gy({name: 2.5}, fractions=3) == pytest.approx(2.5, rel=1e-14)


@pytest.mark.parametrize("fractions", [1, 5, 30])
def test_constant_factors_are_exact_at_any_dose_and_fractionation(rng, fractions):
    doses = {name: rng.uniform(0.0, 5.0, 6) for name in COMPONENTS}
    expected = sum(component_factors()[name] * doses[name] for name in COMPONENTS)
    ours = EffectModel("constant", ANY).weighted_dose_gy(doses, fractions=fractions)
    np.testing.assert_allclose(ours, expected, rtol=1e-13)


@pytest.mark.parametrize("model", ["carabe", "wedenberg", "mcnamara", "rorvik_linear"])
def test_one_component_gives_the_published_model(model):
    """A proton field alone: RBE x D of the published formula."""
    effect = EffectModel(model, ANY, beam_particle="proton")
    ours = effect.weighted_dose_gy({"primary": 2.0}, {"primary": 7.0})
    assert ours == pytest.approx(2.0 * rbe(model, 7.0, alpha_beta_gy=4.0, dose_gy=2.0), rel=1e-13)


def test_splitting_a_component_changes_nothing(rng):
    """Dose given half as one component and half as another of the same constants acts as one."""
    constants = {"primary": (np.asarray(0.4), np.asarray(0.2)), "decay": (np.asarray(0.4), np.asarray(0.2))}
    whole = effect_sums({"primary": 2.0}, constants)
    halves = effect_sums({"primary": 1.0, "decay": 1.0}, constants)
    assert np.allclose(whole, halves, rtol=1e-15)


def test_mixture_lies_between_separate_fractions_and_shows_synergy():
    """Together, two radiations do at least as much as one after the other far apart (cross term of B^2)."""
    constants = {"primary": (np.asarray(0.2), np.asarray(0.2)), "star_heavy": (np.asarray(0.9), np.asarray(0.25))}

    def effect(doses):
        linear, root = effect_sums(doses, constants)
        return linear + root**2

    together = effect({"primary": 1.0, "star_heavy": 0.5})
    apart = effect({"primary": 1.0}) + effect({"star_heavy": 0.5})
    assert together - apart == pytest.approx(2 * 0.2 * 1.0 * 0.25 * 0.5, rel=1e-12)


def test_slopes_are_differences(rng):
    linear, root = rng.uniform(0.1, 2.0, 20), rng.uniform(0.1, 2.0, 20)
    by_linear, by_root = weighted_dose_slopes(linear, root, tissue=ANY, fractions=3)
    h = 1e-6
    for slope, (da, db) in ((by_linear, (h, 0.0)), (by_root, (0.0, h))):
        up = weighted_dose_gy(linear + da, root + db, tissue=ANY, fractions=3)
        down = weighted_dose_gy(linear - da, root - db, tissue=ANY, fractions=3)
        np.testing.assert_allclose(slope, (up - down) / (2 * h), rtol=1e-8)


@pytest.mark.parametrize("name", effect_model_names())
@pytest.mark.filterwarnings("ignore::dosekit.errors.ValidityWarning")
def test_every_model_has_constants_for_every_component(name):
    constants = EffectModel(name, ANY).constants(LET)
    assert tuple(constants) == COMPONENTS
    for component, (alpha, root) in constants.items():
        assert alpha > 0.0, component
        assert root > 0.0, component
    if name not in ("physical", "constant"):
        assert constants["star_heavy"][0] > constants["star_light"][0] >= 0.8 * ANY.alpha_per_gy
        assert constants["star_photon"][0] == pytest.approx(ANY.alpha_per_gy, rel=1e-14)


def test_small_dose_tends_to_ratio_of_alphas():
    effect = EffectModel("microdosimetric", ANY)
    alpha, _ = effect.constants(LET)["star_heavy"]
    small = effect.weighted_dose_gy({"star_heavy": 1e-9}, LET) / 1e-9
    assert small == pytest.approx(alpha / ANY.alpha_per_gy, rel=1e-6)


def test_proton_models_warn_for_pions_and_not_for_protons(recwarn):
    EffectModel("wedenberg", ANY, beam_particle="proton").constants({"primary": 5.0})
    assert not recwarn.list
    with pytest.warns(ValidityWarning, match="made for protons"):
        EffectModel("wedenberg", ANY).constants({"primary": 5.0})


def test_unfit_input_is_refused():
    with pytest.raises(UnknownNameError, match="constant"):
        EffectModel("constand")
    with pytest.raises(InputError, match="factors"):
        EffectModel("wedenberg", factors={"primary": 2.0})
    with pytest.raises(InputError, match="LET"):
        EffectModel("microdosimetric").constants()
    with pytest.raises(UnknownNameError):
        EffectModel("microdosimetric").constants({"prime": 1.0})
    with pytest.raises(UnknownNameError):
        effect_sums({"prime": 1.0}, EffectModel().constants())
    with pytest.raises(InputError):
        effect_sums({}, EffectModel().constants())
    with pytest.raises(InputError):
        weighted_dose_gy(1.0, 1.0, tissue=ANY, fractions=0)


def test_tissues():
    assert all(tissue(name).beta_per_gy2 > 0.0 for name in tissue_names())
    assert tissue_of_structure("TARGET").alpha_beta_gy == 10.0
    assert tissue_of_structure("Spinal cord").name == "nervous"
    assert tissue_of_structure("something else").name == "late responding"
    with pytest.raises(UnknownNameError, match="nervous"):
        tissue("nervus")
    with pytest.raises(InputError):
        Tissue("none", 0.3, 0.0)
