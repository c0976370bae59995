"""HU to matter: the stoichiometric method against its own physics and published numbers, tables, overrides."""

from __future__ import annotations

import warnings
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from ct_series import write_series

from dosekit.basis.materials import material, mixture
from dosekit.basis.tables import parse_table
from dosekit.beams.stopping import relative_stopping_power
from dosekit.errors import (
    CalibrationError,
    CalibrationWarning,
    GridError,
    InputError,
    MaterialError,
    UnknownNameError,
)
from dosekit.grids.attenuation import attenuation_per_density, fit_kappas, hounsfield_units
from dosekit.grids.calibration import read_calibration, stoichiometric_calibration
from dosekit.grids.ct import read_ct
from dosekit.grids.overrides import override_structures

TISSUES = [
    "adipose", "soft_tissue", "muscle_skeletal", "muscle_striated", "brain", "blood", "skin", "eye_lens", "testis",
    "bone_compact", "bone_cortical",
]  # fmt: skip


def test_water_is_zero_and_nothing_is_minus_thousand():
    assert hounsfield_units("water") == 0.0
    assert hounsfield_units(material("water", density_g_cm3=1e-9)) == pytest.approx(-1000.0, abs=1e-5)


def test_attenuation_adds_by_mass():
    half = mixture("half", [("water", 0.5), ("bone_cortical", 0.5)], 1.3)
    mean = 0.5 * (attenuation_per_density("water") + attenuation_per_density("bone_cortical"))
    assert attenuation_per_density(half) == pytest.approx(mean, rel=1e-12)


def test_without_coefficients_only_electrons_count():
    for name in TISSUES:
        units = hounsfield_units(name, kappa_coherent=0.0, kappa_photo=0.0)
        assert units == pytest.approx(1000.0 * (material(name).relative_electron_density - 1.0), abs=1e-9)


def test_coefficients_are_found_back_from_inserts():
    wanted = (2.0e-3, 2.5e-5)
    inserts = {
        name: hounsfield_units(name, kappa_coherent=wanted[0], kappa_photo=wanted[1])
        for name in ("adipose", "pmma", "bone_compact", "bone_cortical")
    }
    assert fit_kappas(inserts) == pytest.approx(wanted, rel=1e-6)


@pytest.mark.parametrize("inserts", [{}, {"pmma": 120.0}, {"water": 0.0, "pmma": 120.0}])
def test_too_few_inserts_are_refused(inserts):
    with pytest.raises(CalibrationError, match="do not determine"):
        fit_kappas(inserts)


PUBLISHED = list(
    parse_table(
        (Path(__file__).parents[1] / "published" / "ct_numbers.csv").read_text(encoding="utf-8"), name="ct_numbers"
    ).rows()
)


@pytest.mark.published
@pytest.mark.parametrize("row", PUBLISHED, ids=lambda row: str(row["tissue"]))
def test_hu_of_tissues_are_the_published_ones(row, evidence):
    stuff = material(str(row["tissue"]), density_g_cm3=float(row["density_g_cm3"]))
    ours = hounsfield_units(stuff)
    evidence(
        what=f"HU of {row['tissue']} at {row['density_g_cm3']} g/cm3",
        source="Schneider et al., Phys. Med. Biol. 45 (2000) 459, table 1 (memory)",
        value=row["hu"],
        ours=ours,
        unit="HU",
        bar="half a unit of the last digit",
    )
    assert ours == pytest.approx(float(row["hu"]), abs=0.5)


@pytest.mark.model
def test_spongy_bone_lies_on_the_published_line(evidence):
    """rho = 1.017 + 0.592e-3 HU above 100 HU, for mixtures of marrow and cortical bone; 1 % asked for."""
    rules = stoichiometric_calibration()
    spongy = rules.nodes_hu[[tissue.name for tissue in rules.tissues].index("spongy_bone")]
    value, ours = 1.017 + 0.592e-3 * spongy, float(rules.density_g_cm3(spongy))
    evidence(
        what=f"density of spongy bone at {spongy:.0f} HU",
        source="Schneider et al., Phys. Med. Biol. 45 (2000) 459, density line above 100 HU (memory)",
        value=value,
        ours=ours,
        unit="g/cm3",
        bar="1 %",
    )
    assert ours == pytest.approx(value, rel=0.01)


@pytest.mark.model
@pytest.mark.parametrize("name", TISSUES)
def test_stopping_power_of_tissues_is_found_back(name, evidence):
    """Schneider 1996 states 1.1 % for soft tissue and 1.8 % for bone as the precision of the method (abstract)."""
    rules = stoichiometric_calibration()
    tissue = material(name)
    units = hounsfield_units(tissue)
    found = relative_stopping_power(rules.tissue(units).replace(density_g_cm3=float(rules.density_g_cm3(units))))
    exact = relative_stopping_power(tissue)
    bar = 1.8 if name.startswith("bone") else 1.1
    evidence(
        what=f"relative stopping power of {name} from its HU",
        source="Schneider et al., Phys. Med. Biol. 41 (1996) 111, precision stated in the abstract (memory)",
        value=exact,
        ours=found,
        bar=f"{bar} %",
    )
    assert found == pytest.approx(exact, rel=bar / 100.0)


def test_nodes_are_the_reference_tissues_exactly():
    rules = stoichiometric_calibration()
    for units, tissue in zip(rules.nodes_hu, rules.tissues, strict=True):
        assert rules.tissue(units) == tissue
        assert float(rules.density_g_cm3(units)) == pytest.approx(tissue.density_g_cm3, rel=1e-12)


def test_a_mixture_of_neighbours_has_the_hu_it_was_made_for():
    rules = stoichiometric_calibration()
    for units in (-900.0, -400.0, -30.0, 25.0, 60.0, 400.0, 1300.0):
        assert hounsfield_units(rules.tissue(units)) == pytest.approx(units, abs=1e-6)


def test_there_are_a_few_dozen_compositions_and_they_cover_the_range():
    rules = stoichiometric_calibration()
    assert 24 <= len(rules.compositions) <= 60
    assert rules.bins_hu[0] == rules.nodes_hu[0]
    assert rules.bins_hu[-1] == rules.nodes_hu[-1]
    assert np.all(np.diff(rules.bins_hu) > 0)
    calcium = [tissue.fraction("Ca") for tissue in rules.compositions]
    assert all(b >= a - 1e-12 for a, b in pairwise(calcium))


def test_every_whole_hu_gets_the_density_of_the_chain():
    rules = stoichiometric_calibration()
    hu = np.arange(-1000, 1525, dtype=np.int16).reshape(5, 5, 101)
    density, index, materials, clamped = rules.matter(hu)
    assert clamped == 0
    assert density == pytest.approx(rules.density_g_cm3(hu).astype(np.float32))
    assert index.max() == len(materials) - 1
    where = np.clip(np.searchsorted(rules.bins_hu, hu, side="right") - 1, 0, len(rules.compositions) - 1)
    for voxel in np.ndindex(*hu.shape):
        assert materials[index[voxel]] == rules.compositions[where[voxel]]


def test_only_compositions_that_occur_are_kept():
    _, index, materials, _ = stoichiometric_calibration().matter(np.array([[[40, 41, 42]]], dtype=np.int16))
    assert len(materials) == 1
    assert index.tolist() == [[[0, 0, 0]]]


def test_float_and_whole_hu_agree():
    rules = stoichiometric_calibration()
    hu = np.arange(-1024, 1500, 7).reshape(1, 1, -1)
    whole, floating = (rules.matter(hu.astype(kind)) for kind in (np.int16, np.float32))
    assert np.array_equal(whole[0], floating[0])
    assert np.array_equal(whole[1], floating[1])


def test_hu_beyond_both_ends_are_counted(tmp_path):
    table = tmp_path / "narrow.csv"
    table.write_text("hu,density_g_cm3\n-500,0.5\n500,1.3\n")
    rules = read_calibration(table)
    hu = np.array([[[-1024, -600, 0, 501, 900]]], dtype=np.int16)
    with pytest.warns(CalibrationWarning, match="2 voxels above 500 HU .highest 900. and 2 voxels below -500"):
        density, _, _, clamped = rules.matter(hu)
    assert clamped == 4
    assert density.tolist() == [[pytest.approx([0.5, 0.5, 0.9, 1.3, 1.3])]]


def test_air_and_padding_are_no_reason_to_warn():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        density, *_ = stoichiometric_calibration().matter(np.array([[[-3024, -1500, -1024, -1000]]], dtype=np.int16))
    assert density.max() == pytest.approx(0.00120479, rel=1e-5)


def test_a_table_with_materials(tmp_path):
    table = tmp_path / "mine.csv"
    table.write_text(
        "# my scanner\nhu,density_g_cm3,material\n-1000,0.0012,air\n0,1.0,water\n1500,1.92,bone_cortical\n"
    )
    rules = read_calibration(table)
    assert rules.name == "mine"
    assert rules.tissue(0.0) == material("water")
    assert float(rules.density_g_cm3(750.0)) == pytest.approx(1.46)
    assert rules.tissue(750.0).fraction("Ca") == pytest.approx(0.225 * 0.5 * 1.92 / 1.46, rel=1e-4)


def test_a_table_without_materials_takes_the_usual_tissues(tmp_path):
    table = tmp_path / "mine.csv"
    table.write_text("hu,density_g_cm3\n-1000,0.0012\n42.6,1.07\n1500,1.9\n")
    rules = read_calibration(table)
    assert rules.tissues[1].density_g_cm3 == 1.07
    assert rules.tissues[1].fraction("O") == pytest.approx(material("muscle_skeletal").fraction("O"), abs=0.01)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "0 lines"),
        ("hu,density\n0,1\n1,2\n", "columns hu, density"),
        ("hu,density_g_cm3\n0,1.0\n", "at least two rows"),
        ("hu,density_g_cm3\n0,1.0\n0,1.1\n", "strictly increasing"),
        ("hu,density_g_cm3\n100,1.0\n0,1.1\n", "strictly increasing"),
        ("hu,density_g_cm3\n0,1.2\n100,1.1\n", "do not fall"),
        ("hu,density_g_cm3\n0,one\n100,1.1\n", "line 2"),
        ("hu,density_g_cm3\n0,nan\n100,1.1\n", "line 2"),
        ("hu,density_g_cm3\n0,-1\n100,1.1\n", "line 2"),
        ("hu,density_g_cm3\ninf,1\n100,1.1\n", "line 2"),
        ("hu,density_g_cm3\n0,1,2\n100,1.1\n", "3 cells"),
        ("hu,density_g_cm3,material\n0,1,watr\n100,1.1,water\n", "did you mean 'water'"),
        ("hu,density_g_cm3\n-99999,1\n100,1.1\n", "-1100 to 40000"),
        ('hu,density_g_cm3\n"0,1\n100,1.1\n', "line 2"),
    ],
)
def test_bad_tables_are_refused_with_the_place(tmp_path, text, message):
    table = tmp_path / "bad.csv"
    table.write_text(text)
    with pytest.raises(InputError, match=message):
        read_calibration(table)


def test_a_table_that_is_not_there_or_not_text(tmp_path):
    with pytest.raises(CalibrationError, match="cannot be read"):
        read_calibration(tmp_path / "none.csv")
    (tmp_path / "raw.csv").write_bytes(bytes(range(128, 256)) * 10)
    with pytest.raises(CalibrationError, match="cannot be read"):
        read_calibration(tmp_path / "raw.csv")


@pytest.mark.parametrize("kappas", [(-1e-3, 3e-5), (1e-3, float("nan")), (1.0, 3e-5)])
def test_impossible_coefficients_are_refused(kappas):
    with pytest.raises(CalibrationError, match="coefficients"):
        stoichiometric_calibration(*kappas)


def test_the_curve_for_figures_ties_density_stopping_and_stars():
    rules = stoichiometric_calibration()
    curve = rules.curve(step_hu=20.0)
    assert np.all(np.diff(curve.hu) > 0)
    assert np.all(np.diff(curve.density_g_cm3) >= 0)
    assert set(curve.tissues) == {tissue.name for tissue in rules.tissues}
    at_zero = int(np.abs(curve.hu).argmin())
    assert 0.97 < curve.relative_stopping_power[at_zero] < 1.04
    assert np.all((curve.star_energy_mev > 15.0) & (curve.star_energy_mev < 40.0))


def test_overrides_by_name_by_material_and_with_density(tmp_path):
    write_series(tmp_path, np.full((4, 10, 10), 40, dtype=np.int16))
    grid = read_ct(tmp_path)
    cavity, implant = np.zeros(grid.shape, dtype=bool), np.zeros(grid.shape, dtype=bool)
    cavity[1, 2:4, 2:4] = True
    implant[2, 6:8, 6:8] = True
    grid = grid.with_structure("Cavity", cavity).with_structure("implant", implant)
    alloy = mixture("alloy", [("aluminium", 1.0)], 4.4)
    changed = override_structures(grid, {"cavity": "air", "implant": alloy})
    assert np.all(changed.density_g_cm3[cavity] == np.float32(0.00120479))
    assert np.all(changed.density_g_cm3[implant] == np.float32(4.4))
    assert changed.materials[changed.material_index[2, 6, 6]] == alloy
    rest = ~(cavity | implant)
    assert np.array_equal(changed.density_g_cm3[rest], grid.density_g_cm3[rest])
    dense = override_structures(grid, {"implant": ("bone_cortical", 2.1)})
    assert float(dense.density_g_cm3[2, 6, 6]) == pytest.approx(2.1)
    assert changed.source["overrides"] == {"cavity": "air", "implant": "alloy"}


@pytest.mark.parametrize(
    ("overrides", "error"),
    [
        ({"nowhere": "air"}, UnknownNameError),
        ({"x": "unobtainium"}, UnknownNameError),
        ({"x": 7}, GridError),
        ({"x": ("air", -1.0)}, MaterialError),
    ],
)
def test_bad_overrides_are_refused(tmp_path, overrides, error):
    write_series(tmp_path, np.full((3, 6, 6), 40, dtype=np.int16))
    grid = read_ct(tmp_path).with_structure("x", np.ones((3, 6, 6), dtype=bool))
    with pytest.raises(error):
        override_structures(grid, overrides)
