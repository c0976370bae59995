"""Effect of a modulated 172 MeV/c field against published numbers: model checks, bands from the source rows.

The field: momentum spread 8 % read as full width at half maximum (the convention is not stated in the source),
muons 8 % and electrons 10 % per pion, two lengths of the flattened interval, 2 Gy per fraction, LET by component from
the depth library.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from dosekit.beams.beam import Beam
from dosekit.effects.microdosimetry import saturated_alpha
from dosekit.effects.mixed_field import EffectModel
from dosekit.effects.oxygen import mixed_oxygen_enhancement
from dosekit.effects.tissues import tissue
from dosekit.modulation.stacks import steps_for_beam

INTERVALS = [(110.0, 180.0), (130.0, 180.0)]
MODELS = ["constant", "wedenberg", "mcnamara", "microdosimetric"]

pytestmark = [pytest.mark.model, pytest.mark.filterwarnings("ignore::dosekit.errors.ValidityWarning")]


@cache
def field(interval_mm):
    beam = Beam("pi-", momentum_mev_c=172, momentum_fwhm=0.08, contaminants={"mu-": 0.08, "e-": 0.10})
    return steps_for_beam(beam, interval_mm, step_mm=6.0, dose_gy=2.0)


def mean_rbe(interval_mm, model, low, high):
    steps = field(interval_mm)
    weighted = EffectModel(model, tissue("early responding")).weighted_dose_gy(steps.dose_gy, steps.let_kev_um)
    depth = steps.settings.depth_mm
    chosen = (depth >= low) & (depth <= high)
    return float(np.sum(weighted[chosen]) / np.sum(sum(steps.dose_gy.values())[chosen]))


OF_LET = pytest.mark.xfail(
    strict=True,
    reason="measured 1.21 to 1.26: averaged over its LET spectrum the dose of star neutrons has a factor of 1.5, of "
    "light products 1.4, of helium and recoils 2.7 at low dose (recoils of 740 keV/um waste theirs), for alpha/beta 10 "
    "Gy and 2 Gy a fraction; the source names neither fraction nor reference photons",
)
BY_FACTORS = pytest.mark.xfail(
    strict=True,
    reason="measured 1.14: constant factors of 1.5 for products in flight (10 % of the plateau dose) and 2 for star "
    "neutrons (7 %); averaged over their LET spectra they are 1.4 and 1.5 at low dose",
)


def _marked(mark, *models):
    return [pytest.param(name, marks=mark) if name in models else name for name in MODELS]


@pytest.mark.parametrize("interval_mm", INTERVALS)
@pytest.mark.parametrize("model", _marked(OF_LET, "wedenberg", "mcnamara", "microdosimetric"))
def test_peak_rbe(interval_mm, model, evidence):
    ours = mean_rbe(interval_mm, model, interval_mm[0] + 10.0, interval_mm[1] - 10.0)
    evidence(
        what=f"RBE of the flattened peak, 172 MeV/c, {interval_mm[1] - interval_mm[0]:.0f} mm, model {model}",
        source="1.40-1.44, Kligerman et al., Radiology 125 (1977) 489; 1.3, hamster fibroblasts; band 1.3-1.5",
        value=1.4,
        ours=ours,
        unit="1",
        bar="1.3 to 1.5",
        kind="model",
    )
    assert 1.3 <= ours <= 1.5


@pytest.mark.parametrize("interval_mm", INTERVALS)
@pytest.mark.parametrize("model", _marked(BY_FACTORS, "constant"))
def test_plateau_rbe(interval_mm, model, evidence):
    ours = mean_rbe(interval_mm, model, 5.0, 40.0)
    evidence(
        what=f"RBE of the plateau, 172 MeV/c, {interval_mm[1] - interval_mm[0]:.0f} mm, model {model}",
        source="0.8-1.0, hamster fibroblasts through the depth profile; band 0.8-1.1",
        value=0.95,
        ours=ours,
        unit="1",
        bar="0.8 to 1.1",
        kind="model",
    )
    assert 0.8 <= ours <= 1.1


@pytest.mark.parametrize("interval_mm", INTERVALS)
def test_effect_rises_from_plateau_to_peak(interval_mm):
    """What the published profiles agree on, whatever the model."""
    for model in MODELS:
        peak = mean_rbe(interval_mm, model, interval_mm[0] + 10.0, interval_mm[1] - 10.0)
        assert peak > 1.05 * mean_rbe(interval_mm, model, 5.0, 40.0)


@pytest.mark.xfail(
    strict=True,
    reason="measured 2.37: helium and recoils of stars make 21 % of the effect with an enhancement of 1.53, light "
    "products and neutrons 30 % with 2.6; without any enhancement of the former 2.0 would be left, 1.7 needs 38 % of "
    "the effect free of it",
)
def test_oxygen_enhancement_in_the_peak(evidence):
    steps = field(INTERVALS[1])
    depth = steps.settings.depth_mm
    chosen = (depth >= 140.0) & (depth <= 170.0)
    kind = tissue("early responding")
    constants = EffectModel("microdosimetric", kind).constants(steps.let_kev_um)
    parts = {name: constants[name][0][chosen] * dose[chosen] for name, dose in steps.dose_gy.items()}
    let = {name: values[chosen] for name, values in steps.let_kev_um.items()}
    ours = float(
        np.mean(mixed_oxygen_enhancement(parts, let, effect_per_dose=lambda value: saturated_alpha(value, tissue=kind)))
    )
    evidence(
        what="oxygen enhancement ratio in the flattened peak",
        source="Li et al., Int. J. Hyperthermia 10 (1994) 361",
        value=1.7,
        ours=ours,
        unit="1",
        bar="0.1",
        kind="model",
    )
    assert ours == pytest.approx(1.7, abs=0.1)
