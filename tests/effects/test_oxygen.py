"""Oxygen enhancement: limits, the published curve, mixtures."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.effects.oxygen import (
    TURNING_LET_KEV_UM,
    largest_enhancement,
    mixed_oxygen_enhancement,
    oxygen_enhancement,
)
from dosekit.errors import InputError, ValidityWarning


def test_limits_of_the_curve():
    assert oxygen_enhancement(0.0) == 3.0
    # half of the gain in sensitivity at 3 mmHg: S = (3 x 3 + 3) / 6 = 2, OER = 3 / 2 (Alper & Howard-Flanders 1956)
    assert oxygen_enhancement(3.0) == pytest.approx(1.5, rel=1e-14)
    assert oxygen_enhancement(150.0) == pytest.approx(1.0, abs=0.015)


def test_monotonous_in_pressure_and_let():
    assert np.all(np.diff(oxygen_enhancement(np.linspace(0, 150, 50), 20.0)) < 0.0)
    assert np.all(np.diff(largest_enhancement(np.linspace(0, 400, 50))) < 0.0)
    assert largest_enhancement(TURNING_LET_KEV_UM) == pytest.approx(2.0, rel=1e-12)
    assert largest_enhancement(490.0) == pytest.approx(1.0, abs=0.02)


def test_mixture():
    same = mixed_oxygen_enhancement({"primary": 1.0, "decay": 2.0}, {})
    assert same == pytest.approx(3.0, rel=1e-14)
    # equal parts of OER 3 and OER 2: harmonic mean 2.4
    mixed = mixed_oxygen_enhancement({"primary": 1.0, "decay": 1.0}, {"decay": TURNING_LET_KEV_UM})
    assert mixed == pytest.approx(2.4, rel=1e-12)
    assert mixed_oxygen_enhancement({"primary": [0.0, 1.0]}, {}).tolist() == [1.0, 3.0]


def test_outside_validity_warns_or_is_refused():
    with pytest.warns(ValidityWarning, match="pressure"):
        oxygen_enhancement(200.0)
    with pytest.warns(ValidityWarning, match="LET"):
        largest_enhancement(600.0)
    for pressure, let in ((-1.0, 0.0), (float("nan"), 0.0), (1.0, -1.0)):
        with pytest.raises(InputError):
            oxygen_enhancement(pressure, let)


def test_spread_of_let_is_averaged_over_effect():
    """Two lines of a spectrum, by hand: helium at 109 and recoils at 739 keV/um are no ions of 289 keV/um."""
    from dosekit.effects.let_spectra import component_spectra

    (spectrum,) = component_spectra("star_heavy")
    mean = spectrum.mean_kev_um
    ours = float(mixed_oxygen_enhancement({"star_heavy": 1.0}, {"star_heavy": mean}))
    by_hand = 1.0 / float(np.dot(spectrum.dose_share, 1.0 / (1.0 + 2.0 / (1.0 + spectrum.let_kev_um**3 / 8.27e5))))
    assert ours == pytest.approx(by_hand, rel=1e-12)
    assert ours > largest_enhancement(mean) + 0.2
    weighted = float(
        mixed_oxygen_enhancement({"star_heavy": 1.0}, {"star_heavy": mean}, effect_per_dose=lambda let: 1.0 / let)
    )
    assert weighted > ours  # more of the effect at low LET
    assert float(mixed_oxygen_enhancement({"star_heavy": 1.0}, {"star_heavy": mean}, pressure_mmhg=1e-9)) < ours
    assert float(
        mixed_oxygen_enhancement({"star_heavy": 1.0}, {"star_heavy": mean}, pressure_mmhg=150.0)
    ) == pytest.approx(1.0, abs=0.015)
