"""Published RBE models and quality factors against published and derived values, limits and validity."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.basis.tables import read_table
from dosekit.effects.rbe import component_factors, proton_model_names, quality_factor, rbe, rbe_extremes
from dosekit.errors import InputError, UnknownNameError, ValidityWarning

UNIT_VALUES = [
    (model, row["alpha_beta"], row["let_d"], row["dose"], row[model])
    for row in read_table("rbe_unit_values").rows()
    for model in ("carabe", "wedenberg", "mcnamara")
]


@pytest.mark.published
@pytest.mark.parametrize(("model", "alpha_beta", "let", "dose", "value"), UNIT_VALUES)
def test_unit_values(model, alpha_beta, let, dose, value, evidence):
    ours = float(rbe(model, let, alpha_beta_gy=alpha_beta, dose_gy=dose))
    evidence(
        what=f"RBE {model}, alpha/beta {alpha_beta:g} Gy, LET {let:g} keV/um, {dose:g} Gy",
        source="rbe_unit_values.csv (derived from the published constants)",
        value=value,
        ours=ours,
        unit="1",
        bar="1e-3",
    )
    assert ours == pytest.approx(value, abs=1e-3)


@pytest.mark.parametrize("model", proton_model_names())
def test_limits_at_small_and_large_dose(model):
    largest, smallest = rbe_extremes(model, 8.0, alpha_beta_gy=3.0)
    assert rbe(model, 8.0, alpha_beta_gy=3.0, dose_gy=0.0) == pytest.approx(largest, rel=1e-14)
    assert rbe(model, 8.0, alpha_beta_gy=3.0, dose_gy=1e-12) == pytest.approx(largest, rel=1e-10)
    with pytest.warns(ValidityWarning, match="dose"):
        assert rbe(model, 8.0, alpha_beta_gy=3.0, dose_gy=1e9) == pytest.approx(smallest, rel=1e-8)


@pytest.mark.parametrize("model", proton_model_names())
def test_equal_survival(model):
    """The photon dose RBE x D has the effect of the proton dose D with the model's alpha and beta."""
    alpha, ratio, dose, let = 0.2, 4.0, 3.0, 6.0
    beta = alpha / ratio
    largest, smallest = rbe_extremes(model, let, alpha_beta_gy=ratio)
    photon = float(rbe(model, let, alpha_beta_gy=ratio, dose_gy=dose)) * dose
    effect = alpha * largest * dose + beta * smallest**2 * dose**2
    assert alpha * photon + beta * photon**2 == pytest.approx(effect, rel=1e-12)


@pytest.mark.parametrize("model", ["wedenberg", "rorvik_linear"])
def test_no_let_is_photons(model):
    assert rbe(model, 0.0, alpha_beta_gy=5.0, dose_gy=2.0) == pytest.approx(1.0, rel=1e-14)


@pytest.mark.parametrize("model", proton_model_names())
def test_rises_with_let_and_falls_with_dose(model):
    let = np.linspace(0.0, 20.0, 21)
    assert np.all(np.diff(rbe(model, let, alpha_beta_gy=2.0, dose_gy=2.0)) > 0.0)
    assert np.all(np.diff(rbe(model, 15.0, alpha_beta_gy=2.0, dose_gy=np.linspace(0.0, 10.0, 21))) < 0.0)


@pytest.mark.parametrize(
    ("model", "let", "ratio"), [("mcnamara", 20.1, 3.0), ("wedenberg", 31.0, 3.0), ("carabe", 5.0, 0.5)]
)
def test_outside_validity_warns(model, let, ratio):
    with pytest.warns(ValidityWarning, match="extrapolation"):
        rbe_extremes(model, let, alpha_beta_gy=ratio)


@pytest.mark.published
@pytest.mark.parametrize(
    ("let", "value"),
    # ICRP Publication 60 (1991), Table A-1: 1; 0.32 L - 2.2; 300/sqrt(L)
    [(0.2, 1.0), (9.999, 1.0), (10.0, 1.0), (35.0, 9.0), (60.0, 17.0), (100.0, 29.8), (144.0, 25.0), (900.0, 10.0)],
)
def test_quality_factor(let, value, evidence):
    ours = float(quality_factor(let))
    evidence(
        what=f"Q at {let:g} keV/um",
        source="ICRP Publication 60 (1991) Table A-1",
        value=value,
        ours=ours,
        unit="1",
        bar="1e-12",
    )
    assert ours == pytest.approx(value, rel=1e-12)


def test_component_factors_cover_all_components():
    assert tuple(component_factors()) == COMPONENTS
    assert component_factors({"star_heavy": 2.0})["star_heavy"] == 2.0
    with pytest.raises(UnknownNameError, match="star_heavy"):
        component_factors({"star_hevy": 2.0})
    with pytest.raises(InputError):
        component_factors({"star_heavy": -1.0})


def test_unfit_input_is_refused():
    with pytest.raises(UnknownNameError, match="wedenberg"):
        rbe("wedenburg", 1.0, alpha_beta_gy=2.0, dose_gy=1.0)
    for let, ratio, dose in ((-1.0, 2.0, 1.0), (1.0, 0.0, 1.0), (1.0, 2.0, -1.0), (float("nan"), 2.0, 1.0)):
        with pytest.raises(InputError):
            rbe("wedenberg", let, alpha_beta_gy=ratio, dose_gy=dose)
    with pytest.raises(InputError):
        quality_factor(-1.0)
