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


SATURATED = pytest.param(
    "microdosimetric",
    marks=pytest.mark.xfail(
        strict=True,
        reason="measured 1.28 and 1.29: helium and recoils share one LET of 288 keV/um from their slowing-down "
        "spectra, which the saturation correction counts for little; alphas alone would count for more",
    ),
)


@pytest.mark.parametrize("interval_mm", INTERVALS)
@pytest.mark.parametrize("model", ["constant", "wedenberg", "mcnamara", SATURATED])
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
@pytest.mark.parametrize("model", MODELS)
@pytest.mark.xfail(
    strict=True,
    reason="measured 1.17 to 1.25: products of reactions in flight (12 % of the plateau dose at 57 keV/um) and star "
    "neutrons (9 % at 36 keV/um) weigh more than in the published plateau (0.8-1.1)",
)
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
    reason="measured 2.38: the enhancement falls only above some 90 keV/um in this form, and star protons and neutrons "
    "stand with 12 and 30 keV/um; published 1.7 +- 0.1",
)
def test_oxygen_enhancement_in_the_peak(evidence):
    steps = field(INTERVALS[1])
    depth = steps.settings.depth_mm
    chosen = (depth >= 140.0) & (depth <= 170.0)
    constants = EffectModel("microdosimetric", tissue("early responding")).constants(steps.let_kev_um)
    parts = {name: constants[name][0][chosen] * dose[chosen] for name, dose in steps.dose_gy.items()}
    let = {name: values[chosen] for name, values in steps.let_kev_um.items()}
    ours = float(np.mean(mixed_oxygen_enhancement(parts, let)))
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
