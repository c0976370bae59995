"""Measures of structures: what stands with the target alone, and what a perfect dose gives."""

from __future__ import annotations

import numpy as np
import pytest

import dosekit as dk
from dosekit.studies.measures import structure_histograms, structure_measures


@pytest.fixture(scope="module")
def torso():
    return dk.phantom("torso", spacing_mm=8.0)


def test_a_dose_that_fills_the_target_and_nothing_else_conforms(torso):
    target = torso.structure("target")
    dose = np.where(target > 0.5, 2.0, 0.1)
    names = ["target", "liver", "body"]
    histograms = structure_histograms(torso, dose, names)
    rows = structure_measures(torso, "target", histograms, dose, level_gy=1.9)
    whole, inside = float((target > 0.5).sum()), float(target[target > 0.5].sum())
    # treated volume: whole voxels; of the target what lies in them
    assert rows["target"]["conformity"] == pytest.approx(whole / target.sum(), rel=1e-6)
    assert rows["target"]["conformation_number"] == pytest.approx((inside / target.sum()) * inside / whole, rel=1e-6)
    assert "homogeneity" in rows["target"]
    for name in ("liver", "body"):
        assert not {"homogeneity", "conformity"} & set(rows[name])
        assert rows[name]["mean_gy"] == pytest.approx(histograms[name].mean_gy)


def test_without_a_level_there_is_no_conformity(torso):
    dose = np.ones(torso.shape)
    rows = structure_measures(torso, "target", structure_histograms(torso, dose, ["target"]), dose, level_gy=None)
    assert "conformity" not in rows["target"]
    assert rows["target"]["homogeneity"] == pytest.approx(0.0, abs=1e-12)
