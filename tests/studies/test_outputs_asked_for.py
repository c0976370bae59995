"""Outputs that a study asks for beyond the default: another dose lattice, figure pages as DICOM, other yields later."""

from __future__ import annotations

import warnings

import numpy as np
import pydicom
import pytest

from dosekit.errors import DosekitWarning
from dosekit.maps.lattices import on_lattice
from dosekit.outputs.netcdf import read_dataset
from dosekit.studies.pipeline import run
from dosekit.studies.small_volumes import reweigh_file

import dicom_judges


@pytest.fixture(scope="module")
def coarse(tmp_path_factory, study_text):
    folder = tmp_path_factory.mktemp("coarse")
    path = folder / "s.toml"
    path.write_text(
        study_text + "[outputs]\ndose_spacing_mm = 8.0\nsecondary_capture = true\nlet_by_component = true\n",
        encoding="utf-8",
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        return folder / "out", run(path, folder / "out")


def test_rt_dose_lies_on_the_lattice_asked_for(coarse):
    folder, result = coarse
    head = pydicom.dcmread(folder / "dicom" / "rt_dose_total.dcm")
    assert [float(value) for value in head.PixelSpacing] == [8.0, 8.0]
    assert float(head.GridFrameOffsetVector[1]) == 8.0
    whole = read_dataset(folder / "dose.nc")
    assert whole["dose"].sizes["x"] == result.grid.shape[2] // 2
    dicom_judges.judge(folder / "dicom" / "rt_dose_total.dcm")


def test_energy_and_stops_survive_another_lattice(coarse):
    _, result = coarse
    grid = result.grid
    new = on_lattice(result.dose, grid, 8.0)
    mass = grid.density_g_cm3.astype(np.float64)
    # 2 x 2 x 2 voxels make one: average by mass, the slow way
    z, y, x = (2 * (n // 2) for n in grid.shape)
    blocks = mass[:z, :y, :x].reshape(z // 2, 2, y // 2, 2, x // 2, 2)
    for row in range(result.dose["dose"].sizes["component"]):
        fine = result.dose["dose"].values[row].astype(np.float64)
        energy = (fine * mass)[:z, :y, :x].reshape(blocks.shape).sum(axis=(1, 3, 5))
        expected = energy / blocks.sum(axis=(1, 3, 5))
        ours = new["dose"].values[row][: z // 2, : y // 2, : x // 2]
        np.testing.assert_allclose(ours, expected, rtol=2e-4, atol=1e-6 * fine.max())
    stops = result.dose["stops"].values.astype(np.float64)
    assert float(new["stops"].sum()) * 8.0**3 == pytest.approx(stops.sum() * 4.0**3, rel=1e-3)


def test_let_of_each_component_is_averaged_over_its_dose(coarse):
    folder, result = coarse
    fine = result.dose["let_by_component"]
    assert fine.dims == result.dose["dose"].dims
    # the mean over components, weighted by their dose, is the LET of all
    dose = result.dose["dose"].values.astype(np.float64)
    total = dose.sum(axis=0)
    hot = total > 0.05 * total.max()
    mean = (dose * fine.values).sum(axis=0)[hot] / total[hot]
    np.testing.assert_allclose(mean, result.dose["let"].values[hot], rtol=1e-3)
    written = read_dataset(folder / "dose.nc")
    let, dose = written["let_by_component"].values, written["dose"].values.astype(np.float64)
    total = dose.sum(axis=0)
    hot = total > 0.05 * total.max()
    mean = (dose * let).sum(axis=0)[hot] / total[hot]
    np.testing.assert_allclose(mean, written["let"].values[hot], rtol=1e-3)


def test_figures_go_into_the_archive_as_pictures(coarse):
    folder, _ = coarse
    pages = sorted((folder / "dicom").glob("figure_*.dcm"))
    assert len(pages) >= 5
    dicom_judges.judge(pages[0], radiotherapy=False)


def test_star_yields_change_on_a_finished_run(finished, tmp_path):
    folder, result = finished
    said = reweigh_file(folder, tmp_path / "scaled.nc", star_scale=1.1)
    assert "RESEARCH ONLY" in said
    new = read_dataset(tmp_path / "scaled.nc")
    for name, factor in (("star_light", 1.1), ("star_heavy", 1.1), ("primary", 1.0)):
        old = result.dose["dose"].sel(component=name).values
        np.testing.assert_allclose(new["dose"].sel(component=name).values, factor * old, rtol=1e-5)
    assert not {"let", "effect_dose"} & set(new.data_vars)  # they belong to the old shares
    reweigh_file(folder, tmp_path / "cascade.nc", yields="cascade")
    other = read_dataset(tmp_path / "cascade.nc")
    assert float(other["dose"].sel(component="star_light").sum()) != pytest.approx(
        float(result.dose["dose"].sel(component="star_light").sum()), rel=0.01
    )
