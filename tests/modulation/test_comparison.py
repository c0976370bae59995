"""Comparison of particles: same goal for each, rows, imported curves."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.beams.beam import Beam
from dosekit.effects.histograms import volume_histogram
from dosekit.effects.tissues import Tissue
from dosekit.errors import DosekitError, InputError, ReachError, TableError, UnknownNameError
from dosekit.modulation.comparison import compare_in_depth, depth_row, map_row
from dosekit.modulation.imported import ImportedCurve, read_curve

TISSUE = Tissue("any", 0.3, 10.0)
BEAMS = {
    "negative pions": Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02),
    "positive pions": Beam("pi+", momentum_mev_c=170, momentum_sigma=0.02),
    "protons": Beam("proton", momentum_mev_c=500, momentum_sigma=0.01),
}
PROTON_FACTORS = {"protons": {"primary": 1.1, "in_flight": 1.1}}

CURVE = """# source: invented for this test
# units: depth mm, dose arbitrary, LET keV/um
# treat_as: star_heavy
depth_mm,dose,let_kev_um
0,1,12
100,1.3,15
170,2,25
178,4,60
180,6,90
181,1,60
182,0.2,30
300,0.1,20
"""


@pytest.fixture(scope="module")
def compared():
    return compare_in_depth(BEAMS, (90.0, 150.0), tissue=TISSUE, factors=PROTON_FACTORS, dose_gy=2.0)


def test_every_particle_reaches_the_same_goal(compared):
    assert [entry.name for entry in compared] == list(BEAMS)
    for entry in compared:
        row = depth_row(entry)
        assert row["mean_effect_gy"] == pytest.approx(2.0, rel=0.01)
        assert row["flatness"] <= 0.02
        inside = (entry.depth_mm >= 95.0) & (entry.depth_mm <= 145.0)
        assert np.mean(entry.effect_gy[inside]) == pytest.approx(2.0, rel=0.01)


def test_rows_order_the_particles_as_physics_does(compared):
    pi_minus, pi_plus, protons = (depth_row(entry) for entry in compared)
    # stars make the difference between the pions: RBE and LET in the peak, and what leaves behind it
    assert pi_minus["rbe_interval"] > pi_plus["rbe_interval"]
    assert pi_minus["let_interval_kev_um"] > pi_plus["let_interval_kev_um"]
    assert pi_minus["particles_per_cm2"] < pi_plus["particles_per_cm2"]
    assert protons["distal_fall_mm"] < pi_minus["distal_fall_mm"]
    assert protons["exit_50_mm_effect_share"] < pi_minus["exit_50_mm_effect_share"]
    assert protons["rbe_interval"] == pytest.approx(1.1, rel=0.01)


def test_imported_curve_is_flattened_too(tmp_path):
    file = tmp_path / "some ions.csv"
    file.write_text(CURVE, encoding="utf-8")
    curve = read_curve(file)
    assert (curve.name, curve.source, curve.treat_as) == ("some ions", "invented for this test", "star_heavy")
    assert curve.peak_mm == 180.0
    entries = compare_in_depth(
        {}, (120.0, 170.0), effect="microdosimetric", tissue=TISSUE, dose_gy=2.0, step_mm=2.0, imported=[curve]
    )
    row = depth_row(entries[0], step_mm=5.0)
    assert row["source"] == "invented for this test"
    assert row["mean_effect_gy"] == pytest.approx(2.0, rel=0.02)
    assert row["rbe_interval"] > 1.0
    assert np.isnan(row["momentum_mev_c"])


def test_shifting_a_curve():
    curve = ImportedCurve("a", "b", np.array([0.0, 10.0, 20.0]), np.array([1.0, 2.0, 0.0]))
    dose, let = curve.shifted([0.0, 5.0], depth_mm=[0.0, 5.0, 10.0, 30.0])
    assert dose.tolist() == [[1.0, 1.5, 2.0, 0.0], [1.5, 2.0, 1.0, 0.0]]
    assert let is None


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("# source: invented for this test\n", ""),
        ("# treat_as: star_heavy", "# treat_as: star_hevy"),
        ("depth_mm,dose", "depth_mm,amount"),
        ("100,1.3,15", "100,,15"),
        ("100,1.3,15", "100,-1,15"),
        ("170,2,25", "90,2,25"),
        ("170,2,25", "170,2"),
        ("170,2,25", "170,two,25"),
    ],
)
def test_damaged_files_are_refused(tmp_path, old, new):
    file = tmp_path / "curve.csv"
    file.write_text(CURVE.replace(old, new), encoding="utf-8")
    with pytest.raises(DosekitError):
        read_curve(file)


def test_map_row_is_made_of_histograms(rng):
    shape = (4, 5, 6)
    dose = {name: rng.uniform(0.0, 1.0, shape) for name in COMPONENTS}
    effect = 1.2 * sum(dose.values())
    target, organ = rng.uniform(0, 1, shape), rng.uniform(0, 1, shape)
    row = map_row(
        "one", dose_gy=dose, effect_gy=effect, structures={"target": target, "cord": organ}, target="target",
        body=np.ones(shape), density_g_cm3=np.ones(shape), voxel_cm3=0.5, prescription_gy=4.0,
        let_kev_um={"star_heavy": 100.0}, time_s=12.0,
    )  # fmt: skip
    assert row["target_d95_share"] == volume_histogram(effect, target).dose_at_volume_gy(95) / 4.0
    assert row["cord_mean_gy"] == pytest.approx(np.average(effect, weights=organ))
    assert row["target_rbe"] == pytest.approx(1.2)
    assert row["integral_dose_j"] == pytest.approx(sum(values.sum() for values in dose.values()) * 0.5 / 1000.0)
    expected = np.sum(100.0 * dose["star_heavy"] * target) / np.sum(sum(dose.values()) * target)
    assert row["target_let_kev_um"] == pytest.approx(expected)
    assert row["time_s"] == 12.0


def test_unfit_input_is_refused():
    with pytest.raises(InputError, match="nothing to compare"):
        compare_in_depth({}, (50.0, 100.0), tissue=TISSUE)
    curve = ImportedCurve("a", "b", np.array([0.0, 10.0, 20.0]), np.array([1.0, 2.0, 0.0]))
    with pytest.raises(ReachError, match="peaks at"):
        compare_in_depth({}, (50.0, 100.0), tissue=TISSUE, imported=[curve])
    with pytest.raises(InputError, match="no LET"):
        compare_in_depth({}, (2.0, 8.0), tissue=TISSUE, effect="microdosimetric", imported=[curve])
    with pytest.raises(InputError, match="source"):
        ImportedCurve("a", " ", curve.depth_mm, curve.dose)
    with pytest.raises(UnknownNameError):
        ImportedCurve("a", "b", curve.depth_mm, curve.dose, treat_as="ions")
    with pytest.raises(InputError):
        map_row(
            "one", dose_gy={"primary": [1.0]}, effect_gy=[1.0], structures={}, target="target",
            body=[1.0], density_g_cm3=[1.0], voxel_cm3=1.0, prescription_gy=1.0,
        )  # fmt: skip


def test_missing_column_is_named(tmp_path):
    file = tmp_path / "curve.csv"
    file.write_text(CURVE.replace("dose,", "amount,"), encoding="utf-8")
    with pytest.raises(TableError, match="dose"):
        read_curve(file)
