"""Real CT sets against independent readers; skipped visibly where they are not."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from dosekit.errors import GeometryError, GeometryWarning
from dosekit.grids.ct import read_ct, read_hu
from dosekit.grids.structure_sets import read_outlines

sitk = pytest.importorskip("SimpleITK")

SETS = {
    "abdomen_51/ct": (51, 512, 512, "FFS"),
    "head_phantom_28/ct": (28, 512, 512, "HFS"),
    "thigh_59_structures/ct": (59, 202, 198, "HFS"),
    "phantom_2_structures": (2, 512, 512, "HFS"),
}


def independent(folder):
    """The series as SimpleITK reads it."""
    series = sitk.ImageSeriesReader.GetGDCMSeriesIDs(str(folder))
    reader = sitk.ImageSeriesReader()
    reader.SetFileNames(sitk.ImageSeriesReader.GetGDCMSeriesFileNames(str(folder), series[0]))
    return reader.Execute()


@pytest.mark.parametrize("name", SETS)
def test_geometry_and_every_voxel_equal_an_independent_reader(ct_dir, name):
    image = independent(ct_dir / name)
    ours = read_hu(ct_dir / name)
    slices, rows, columns, place = SETS[name]
    assert ours.hu.shape == (slices, rows, columns)
    assert ours.patient_position == place
    assert image.GetDirection() == (1, 0, 0, 0, 1, 0, 0, 0, 1)
    assert ours.origin_mm == pytest.approx(image.GetOrigin(), abs=1e-4)
    assert ours.spacing_mm == pytest.approx(image.GetSpacing(), abs=1e-4)
    assert np.array_equal(ours.hu, sitk.GetArrayFromImage(image))


def test_padding_of_the_abdomen_is_air(ct_dir):
    grid = read_ct(ct_dir / "abdomen_51/ct")
    assert grid.hu.min() == -3024
    assert float(grid.density_g_cm3[grid.hu == -3024].max()) < 0.002
    body = grid.body()
    assert float(grid.density_g_cm3[body].mean()) > 0.9
    assert 12_000 < body.sum() * grid.voxel_volume_mm3 / 1000 < 25_000


def test_the_tilted_gantry_is_refused_by_its_angle(ct_dir):
    with pytest.raises(GeometryError, match=r"tilted by 16\.5 degrees"):
        read_ct(ct_dir / "head_phantom_tilted_12/ct")
    with pytest.raises(GeometryError, match="missing: 7 between"):
        read_hu(ct_dir / "head_phantom_tilted_12/ct", resample="tilt")


def test_the_tilted_gantry_resampled_equals_an_independent_resampling(ct_dir):
    import pydicom

    files = sorted((ct_dir / "head_phantom_tilted_12/ct").iterdir())
    numbers = {file: int(pydicom.dcmread(file, stop_before_pixels=True).InstanceNumber) for file in files}
    run = sorted((file for file in files if numbers[file] >= 10), key=numbers.get)  # ten slices without a gap
    with pytest.warns(GeometryWarning, match=r"tilt of 16\.5"):
        ours = read_hu(run, resample="tilt")
    # SimpleITK holds upright volumes only, so the pixels get an upright lattice of their own (column, row, slice,
    # unit steps) and a transform takes each patient point to it: solve p = start + i a + j b + k n for (i, j, k).
    first = pydicom.dcmread(run[0], stop_before_pixels=True)
    last = pydicom.dcmread(run[-1], stop_before_pixels=True)
    stack = np.stack([pydicom.dcmread(f).pixel_array.astype(np.float32) - 1024.0 for f in run])
    start = np.array(first.ImagePositionPatient, dtype=float)
    steps = np.stack(
        [
            np.array(first.ImageOrientationPatient[:3], dtype=float) * float(first.PixelSpacing[1]),
            np.array(first.ImageOrientationPatient[3:], dtype=float) * float(first.PixelSpacing[0]),
            (np.array(last.ImagePositionPatient, dtype=float) - start) / (len(run) - 1),
        ],
        axis=1,
    )
    inverse = np.linalg.inv(steps)
    transform = sitk.AffineTransform(3)
    transform.SetMatrix(inverse.ravel())
    transform.SetTranslation(-inverse @ start)
    target = sitk.Image([int(n) for n in ours.hu.shape[::-1]], sitk.sitkFloat32)
    target.SetOrigin(ours.origin_mm)
    target.SetSpacing(ours.spacing_mm)
    theirs = sitk.GetArrayFromImage(
        sitk.Resample(sitk.GetImageFromArray(stack), target, transform, sitk.sitkLinear, -1000.0)
    )
    rms = float(np.sqrt(np.mean((ours.hu.astype(float) - theirs) ** 2)))
    assert float(np.std(theirs)) > 100.0  # the check sees structure, not a plain field
    assert rms < 1.0


def test_resampling_all_of_the_tilted_set_keeps_the_field_of_view(ct_dir):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", GeometryWarning)
        grid = read_ct(ct_dir / "head_phantom_tilted_12/ct", resample=True)
    assert grid.spacing_mm == pytest.approx((0.40625, 0.40625, 2.5), abs=1e-4)
    height = 511 * 0.40625 * np.sin(np.radians(16.5)) + 45.0
    assert grid.shape[0] * 2.5 == pytest.approx(height, abs=3.0)
    assert grid.source["resampled"] == ["tilt", "spacing"]


def test_masks_equal_the_voxel_mask_beside_the_thigh(ct_dir):
    folder = ct_dir / "thigh_59_structures"
    grid = read_ct(folder / "ct", folder / "rtstruct.dcm")
    mask = sitk.GetArrayFromImage(sitk.ReadImage(str(folder / "CT_mask.nii.gz"))) > 0
    ours = grid.structure("gtv_mass_ct") >= 0.5
    assert np.count_nonzero(ours != mask) == 0
    assert ours.sum() * grid.voxel_volume_mm3 / 1000 == pytest.approx(365.318, abs=5e-4)
    assert grid.role("GTV_Mass_CT") == "target"


def test_fractional_volume_of_the_thigh_target_is_that_of_its_polygons(ct_dir):
    folder = ct_dir / "thigh_59_structures"
    outlines, _ = read_outlines(folder / "rtstruct.dcm")
    area_mm2 = 0.0
    for contour in outlines[0].contours:
        x, y = contour.points_mm.T
        area_mm2 += 0.5 * abs(float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)))
    assert len(outlines[0].contours) == 32
    grid = read_ct(folder / "ct", folder / "rtstruct.dcm")
    assert grid.volume_cm3("GTV_Mass_CT") == pytest.approx(area_mm2 * 3.27 / 1000, rel=1e-4)
    assert grid.volume_cm3("GTV_Mass_CT") == pytest.approx(365.318, rel=1e-3)  # the voxel mask's volume


def test_a_structure_set_without_frame_at_the_top_is_laid_on_its_images(ct_dir):
    folder = ct_dir / "phantom_2_structures"
    with pytest.warns(GeometryWarning, match="the images decide"):
        grid = read_ct(folder, folder / "rt.dcm")
    outlines, _ = read_outlines(folder / "rt.dcm")
    assert [outline.name for outline in outlines] == ["ROI-1"]
    # both contours lie on the first slice: a square of 24 mm and, inside it, a hole
    hole = outlines[0].contours[1].points_mm
    x, y = hole.T
    hole_mm2 = 0.5 * abs(float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)))
    assert float(grid.structures["ROI-1"][1].sum()) == 0.0
    assert grid.volume_cm3("ROI-1") == pytest.approx((24.0**2 - hole_mm2) * 5.0 / 1000, rel=2e-3)


def test_the_same_bytes_come_out_twice(ct_dir):
    first = read_ct(ct_dir / "thigh_59_structures/ct")
    second = read_ct(ct_dir / "thigh_59_structures/ct")
    assert first.density_g_cm3.tobytes() == second.density_g_cm3.tobytes()
    assert first.material_index.tobytes() == second.material_index.tobytes()
    assert first.materials == second.materials
