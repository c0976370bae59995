"""Saturation-corrected lineal energy and the linear constant it gives."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.effects.microdosimetry import (
    domain_energy_gy,
    dose_mean_lineal_energy,
    saturated_alpha,
    saturated_lineal_energy,
    saturated_mean,
)
from dosekit.effects.tissues import Tissue
from dosekit.errors import InputError, ValidityWarning


@pytest.mark.parametrize("let", [0.5, 3.0, 30.0, 120.0, 400.0])
def test_closed_form_equals_the_integral(let):
    """The triangular density of a sphere, integrated numerically."""
    y = (np.arange(200000) + 0.5) / 200000 * 1.5 * let
    density = 2.0 * y / (1.5 * let) ** 2
    assert saturated_lineal_energy(let) == pytest.approx(saturated_mean(y, density), rel=1e-8)


def test_limits():
    assert saturated_lineal_energy(0.01) == pytest.approx(dose_mean_lineal_energy(0.01), rel=1e-7)
    assert saturated_lineal_energy(1e5) == pytest.approx(150.0**2 / 1e5, rel=2e-6)
    assert saturated_lineal_energy(0.0) == 0.0
    # series and exact form join without a step
    join = 150.0 / 1.5 * np.sqrt(1e-3)
    pair = saturated_lineal_energy(np.array([join * (1 - 1e-9), join * (1 + 1e-9)]))
    assert pair[1] == pytest.approx(pair[0], rel=1e-8)


def test_effectiveness_peaks_near_the_known_let():
    """Overkill: alpha turns over between 80 and 200 keV/um (common knowledge for ions in mammalian cells)."""
    let = np.linspace(1.0, 400.0, 400)
    alpha = saturated_alpha(let, tissue=Tissue("any", 0.2, 4.0))
    assert 80.0 < let[int(np.argmax(alpha))] < 200.0


def test_domain_energy_from_first_principles():
    # 1 keV/um over the cross-section of a cylinder of 1 um radius in water: 1.602e-10 J/m over pi 1e-12 m2 1000 kg/m3
    assert domain_energy_gy(1.0, radius_um=1.0) == pytest.approx(1.602176634e-10 / (np.pi * 1e-9), rel=1e-9)


def test_single_event_size_of_a_spectrum():
    # two events of 10 and 20 keV/um without saturation: dose mean (100 + 400) / 30
    assert saturated_mean([10.0, 20.0], [1.0, 1.0], saturation_kev_um=1e6) == pytest.approx(500.0 / 30.0, rel=1e-6)
    with pytest.raises(InputError):
        saturated_mean([1.0], [0.0])


def test_outside_validity_warns():
    with pytest.warns(ValidityWarning, match="microdosimetric"):
        saturated_alpha(500.0, tissue=Tissue("any", 0.2, 4.0))
