"""A phantom as a CT series: valid, in place, numbers after the formula."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pydicom
import pytest
import SimpleITK as sitk

from dosekit.basis.materials import material
from dosekit.errors import CalibrationWarning, DicomError, InputError
from dosekit.grids.attenuation import attenuation_per_density
from dosekit.grids.voxels import VoxelGrid
from dosekit.outputs.dicom_ct import ct_numbers, write_ct_series
from dosekit.outputs.dicom_reference import invented_reference

from dicom_judges import RESEARCH_ONLY, check_house_rules, judge

RUN = "1a" * 32


@pytest.fixture
def grid(rng):
    names = ("water", "bone_cortical", "air", "muscle_skeletal")
    index = rng.integers(0, len(names), (4, 5, 7)).astype(np.uint16)
    matters = tuple(material(name) for name in names)
    density = np.array([matter.density_g_cm3 for matter in matters])[index] * rng.uniform(0.9, 1.1, index.shape)
    return VoxelGrid(
        (-10.5, 20.25, -330.0), (2.5, 1.25, 3.2), density.astype(np.float32), index, matters, name="chequered box"
    )


@pytest.mark.parametrize("position", ["HFS", "FFS", "HFP", "FFP"])
def test_judges_accept_every_slice(tmp_path, grid, position):
    paths = write_ct_series(tmp_path, replace(grid, patient_position=position), run_hash=RUN)
    assert len(paths) == 4
    for path in paths:
        judge(path, radiotherapy=False)
        head = check_house_rules(path)
        assert head.PatientPosition == position
        assert RESEARCH_ONLY in head.ImageComments


def test_another_reader_sees_the_same_volume(tmp_path, grid):
    paths = write_ct_series(tmp_path, grid, run_hash=RUN)
    image = sitk.ReadImage([str(path) for path in paths])
    assert image.GetOrigin() == pytest.approx(grid.origin_mm, abs=1e-4)
    assert image.GetSpacing() == pytest.approx(grid.spacing_mm, abs=1e-4)
    assert image.GetDirection() == pytest.approx(np.eye(3).ravel())
    assert np.array_equal(sitk.GetArrayFromImage(image), ct_numbers(grid))


def test_numbers_after_the_formula(grid):
    """Water is nought and no matter at all -1000 by definition, whatever the scanner."""
    ones = np.ones(grid.shape, dtype=np.float32)
    water = replace(grid, material_index=np.zeros(grid.shape, np.uint16), density_g_cm3=ones)
    assert np.all(ct_numbers(water) == 0)
    assert np.all(ct_numbers(replace(water, density_g_cm3=ones * np.float32(0.0))) == -1000)
    assert np.all(ct_numbers(replace(water, density_g_cm3=ones * np.float32(1.05))) == 50)


def test_attenuation_by_hand():
    """Water against polyethylene written out: sum w/A (Z + k1 Z^2.86 + k2 Z^4.62)."""
    weights = {"H": (1, 1.008), "C": (6, 12.011), "O": (8, 15.999)}

    def total(fractions):
        return sum(
            w / weights[s][1] * (weights[s][0] + 1.24e-3 * weights[s][0] ** 2.86 + 3.06e-5 * weights[s][0] ** 4.62)
            for s, w in fractions.items()
        )

    expected = total({"H": 0.143723, "C": 0.856277}) / total({"H": 0.111907, "O": 0.888093})
    assert attenuation_per_density(material("polyethylene")) == pytest.approx(expected, rel=2e-4)


@pytest.mark.model
@pytest.mark.parametrize(
    ("name", "lowest", "highest"),
    [("air", -1005, -995), ("adipose", -120, -50), ("muscle_skeletal", 20, 80), ("bone_cortical", 1100, 2000)],
)
def test_tissues_lie_where_scanners_show_them(name, lowest, highest):
    """Ranges of CT numbers at 120 kV: common radiological knowledge (memory)."""
    matter = material(name)
    assert lowest < 1000 * (attenuation_per_density(matter) * matter.density_g_cm3 - 1) < highest


def test_a_heavy_voxel_is_clamped_and_counted(grid):
    heavy = replace(
        grid,
        materials=(*grid.materials, material("bone_cortical", density_g_cm3=24.0)),
        material_index=np.full(grid.shape, 4, np.uint16),
        density_g_cm3=np.full(grid.shape, 40.0, np.float32),
    )
    with pytest.warns(CalibrationWarning, match="140 voxels"):
        assert ct_numbers(heavy).max() == 32767


def test_given_numbers_are_written_as_they_are(tmp_path, grid, rng):
    hu = rng.integers(-3000, 3000, grid.shape)
    paths = write_ct_series(tmp_path, grid, run_hash=RUN, hu=hu)
    assert np.array_equal(np.stack([pydicom.dcmread(path).pixel_array for path in paths]), hu)


def test_same_run_same_bytes(tmp_path, grid):
    once = [path.read_bytes() for path in write_ct_series(tmp_path, grid, run_hash=RUN)]
    assert [path.read_bytes() for path in write_ct_series(tmp_path, grid, run_hash=RUN)] == once
    assert len({pydicom.dcmread(path).SOPInstanceUID for path in tmp_path.iterdir()}) == 4


def test_identifiers_of_existing_images_are_not_used_twice(tmp_path, grid):
    reference = invented_reference(RUN, image_z_mm=grid.centres_mm("z"))
    with pytest.raises(DicomError, match="exist already"):
        write_ct_series(tmp_path, grid, run_hash=RUN, reference=replace(reference, made_by_run=False))
    with pytest.raises(DicomError, match="3 images"):
        write_ct_series(
            tmp_path, grid, run_hash=RUN, reference=invented_reference(RUN, image_z_mm=grid.centres_mm("z")[:3])
        )
    with pytest.raises(InputError, match="shape"):
        write_ct_series(tmp_path, grid, run_hash=RUN, hu=np.zeros((1, 2, 3)))
    assert list(tmp_path.iterdir()) == []
