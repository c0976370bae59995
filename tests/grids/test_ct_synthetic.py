"""CT reading on small series made here: every position, sign, scale and defect the archives hold."""

from __future__ import annotations

import numpy as np
import pydicom
import pytest
from ct_series import SERIES, odd_volume, save, slice_dataset, write_series

from dosekit.errors import (
    CalibrationWarning,
    DicomError,
    GeometryError,
    GeometryWarning,
    SeriesError,
    SizeError,
)
from dosekit.grids.ct import read_ct, read_hu

ORIGIN = (-11.0, 4.5, 30.0)
SPACING = (1.25, 1.5, 2.0)


@pytest.mark.parametrize("place", ["HFS", "FFS", "HFP", "FFP"])
def test_every_patient_position_gives_the_same_anatomy(tmp_path, place):
    volume = odd_volume()
    write_series(tmp_path, volume, origin=ORIGIN, spacing=SPACING, patient_position=place)
    grid = read_ct(tmp_path)
    assert np.array_equal(grid.hu, volume)
    assert grid.origin_mm == pytest.approx(ORIGIN, abs=1e-6)
    assert grid.spacing_mm == pytest.approx(SPACING, abs=1e-6)
    assert grid.patient_position == place


@pytest.mark.parametrize("place", ["HFS", "FFP"])
def test_geometry_equals_an_independent_reader(tmp_path, place):
    sitk = pytest.importorskip("SimpleITK")
    write_series(tmp_path, odd_volume(), origin=ORIGIN, spacing=SPACING, patient_position=place)
    names = sitk.ImageSeriesReader.GetGDCMSeriesFileNames(str(tmp_path))
    reader = sitk.ImageSeriesReader()
    reader.SetFileNames(names)
    image = reader.Execute()
    ours = read_hu(tmp_path)
    for index in [(0, 0, 0), (6, 0, 0), (0, 5, 0), (0, 0, 4), (2, 3, 1)]:
        point = image.TransformIndexToPhysicalPoint(index)
        x, y, z = (round((p - o) / s) for p, o, s in zip(point, ours.origin_mm, ours.spacing_mm, strict=True))
        back = np.array(ours.origin_mm) + np.array([x, y, z]) * np.array(ours.spacing_mm)
        assert back == pytest.approx(point, abs=1e-4)
        assert ours.hu[z, y, x] == image.GetPixel(index)


def test_sagittal_slices_are_turned(tmp_path):
    volume = odd_volume()
    for i in range(volume.shape[2]):  # rows run to the back, columns run down (feet)
        ds = slice_dataset(
            volume[::-1, :, i],
            position=(ORIGIN[0] + SPACING[0] * i, ORIGIN[1], ORIGIN[2] + SPACING[2] * (volume.shape[0] - 1)),
            orientation=(0, 1, 0, 0, 0, -1),
            spacing=(SPACING[2], SPACING[1]),
            number=i + 1,
        )
        save(ds, tmp_path / f"{i}.dcm")
    ours = read_hu(tmp_path)
    assert np.array_equal(ours.hu, volume)
    assert ours.origin_mm == pytest.approx(ORIGIN)
    assert ours.spacing_mm == pytest.approx(SPACING)


def test_order_is_by_position_not_by_name_or_number(tmp_path):
    volume = odd_volume()
    for k, name in enumerate(["e", "a", "d", "b", "c"]):
        ds = slice_dataset(volume[k], position=(0, 0, 10 + 3 * k), number=(k * 3) % 5 + 1)
        save(ds, tmp_path / name)
    assert np.array_equal(read_hu(tmp_path).hu, volume)


@pytest.mark.parametrize(
    ("signed", "slope", "intercept"), [(False, 1, -1024), (True, 1, 0), (True, 2, -100), (False, 0.5, -1000)]
)
def test_signs_slopes_and_intercepts(tmp_path, signed, slope, intercept):
    volume = 2 * (odd_volume() // 2)
    write_series(tmp_path, volume, signed=signed, slope=slope, intercept=intercept)
    assert np.array_equal(read_hu(tmp_path).hu, volume)


def test_slope_of_each_slice_is_its_own(tmp_path):
    volume = 4 * (odd_volume() // 4)
    for k, slope in enumerate([1, 2, 4, 1, 2]):
        save(slice_dataset(volume[k], position=(0, 0, 2 * k), slope=slope, number=k + 1), tmp_path / f"{k}.dcm")
    assert np.array_equal(read_hu(tmp_path).hu, volume)


def test_unused_high_bits_carry_no_meaning(tmp_path):
    volume = np.clip(odd_volume(), -1000, 2000)
    for k, ds in enumerate(write_series(tmp_path, volume, shuffle=False)):
        stored = np.frombuffer(ds.PixelData, dtype=np.uint16) | np.uint16(0xA000)
        ds.BitsStored, ds.HighBit = 12, 11
        ds.PixelData = stored.tobytes()
        save(ds, tmp_path / f"{k:04d}.dcm")
    assert np.array_equal(read_hu(tmp_path).hu, volume)


@pytest.mark.parametrize("padding_hu", [-3024, -1500, -2000])
def test_padding_without_attribute_counts_as_air(tmp_path, padding_hu):
    volume = np.full((4, 8, 8), 40, dtype=np.int16)
    volume[:, :, :2] = padding_hu
    write_series(tmp_path, volume, signed=True)
    grid = read_ct(tmp_path)
    assert np.array_equal(grid.hu, volume)
    assert float(grid.density_g_cm3[:, :, :2].max()) < 0.002
    assert float(grid.density_g_cm3[:, :, 2:].min()) > 1.0


def test_padding_value_at_tissue_hu_is_air_at_the_border_only(tmp_path):
    volume = np.full((4, 8, 8), 40, dtype=np.int16)
    volume[:, :, :2] = 0
    volume[:, 4, 5] = 0
    write_series(tmp_path, volume, signed=True, intercept=0, padding=0)
    grid = read_ct(tmp_path)
    assert float(grid.density_g_cm3[:, :, :2].max()) < 0.002
    assert float(grid.density_g_cm3[:, 4, 5].min()) > 0.9


def test_small_jitter_is_tolerated_and_large_is_not(tmp_path):
    volume = odd_volume()
    even = 2.0 * np.arange(5)
    write_series(tmp_path / "small", volume, z=even + np.array([0, 0.03, -0.03, 0.02, 0]))
    assert read_hu(tmp_path / "small").spacing_mm[2] == pytest.approx(2.0)
    write_series(tmp_path / "large", volume, z=even + np.array([0, 0.2, -0.1, 0.2, 0]))
    with pytest.raises(GeometryError, match=r"uneven slice spacing: 1\.7"):
        read_hu(tmp_path / "large")


def test_missing_slices_are_counted_and_placed(tmp_path):
    volume = odd_volume(6)
    write_series(tmp_path, volume, z=[0, 2, 4, 10, 12, 14])
    with pytest.raises(GeometryError, match=r"missing: 2 between 4\.00 and 10\.00 mm"):
        read_hu(tmp_path)


def test_uneven_spacing_is_resampled_on_request_only(tmp_path):
    z = np.array([0.0, 2.0, 4.0, 10.0, 12.0, 14.0])
    volume = np.broadcast_to((10 * z)[:, None, None], (6, 5, 5)).astype(np.int16)
    write_series(tmp_path, volume, z=z)
    with pytest.warns(GeometryWarning, match="resampled"):
        ours = read_hu(tmp_path, resample="spacing")
    assert ours.hu.shape == (8, 5, 5)
    assert ours.hu[:, 2, 2] == pytest.approx(10 * (0 + 2.0 * np.arange(8)), abs=1e-3)
    with pytest.raises(GeometryError, match="missing"):
        read_hu(tmp_path, resample="tilt")


def test_doubled_slices_are_named(tmp_path):
    volume = odd_volume()
    write_series(tmp_path, volume, z=[0, 2, 4, 4, 6], shuffle=False)
    with pytest.raises(GeometryError, match=r"doubled slice: 0002\.dcm and 0003\.dcm at 4\.00 mm"):
        read_hu(tmp_path)


def tilted(folder, angle_deg, *, count=8, field=None):
    """Slices tilted about x by an angle and stacked along z; HU from a field over patient points."""
    folder.mkdir(parents=True, exist_ok=True)
    angle = np.radians(angle_deg)
    rows, columns, pixel, step = 24, 20, 1.5, 2.0
    down = np.array([0.0, np.cos(angle), np.sin(angle)])
    for k in range(count):
        start = np.array([-10.0, 5.0, 100.0 + step * k])
        points = (
            start
            + np.arange(rows)[:, None, None] * pixel * down
            + np.arange(columns)[None, :, None] * pixel * np.array([1.0, 0, 0])
        )
        hu = field(points)
        ds = slice_dataset(hu, position=start, orientation=(1, 0, 0, *down), spacing=(pixel, pixel), number=k + 1)
        save(ds, folder / f"{k}.dcm")


@pytest.mark.parametrize("angle_deg", [16.5, -9.0])
def test_a_tilted_gantry_is_refused_and_resampled_with_the_right_shear(tmp_path, angle_deg):
    def field(p):
        return np.rint(3.0 * p[..., 0] + 7.0 * p[..., 1] - 5.0 * (p[..., 2] - 100.0))

    tilted(tmp_path, angle_deg, field=field)
    with pytest.raises(GeometryError, match=rf"tilted by {abs(angle_deg):.1f} degrees"):
        read_hu(tmp_path)
    with pytest.warns(GeometryWarning, match="tilt of"):
        ours = read_hu(tmp_path, resample=True)
    z, y, x = np.indices(ours.hu.shape)
    points = np.stack([x, y, z], axis=-1) * np.array(ours.spacing_mm) + np.array(ours.origin_mm)
    along = points[..., 1] - 5.0
    height = points[..., 2] - 100.0 - along * np.tan(np.radians(angle_deg))
    inside = (height > 0) & (height < 14.0) & (along < 23 * 1.5 * np.cos(np.radians(angle_deg)))
    assert inside.sum() > 500
    assert np.abs(ours.hu - field(points))[inside].max() <= 1.0  # half a step of rounding at each corner


def test_an_oblique_orientation_names_its_angle(tmp_path):
    angle = np.radians(8.0)
    across = (np.cos(angle), np.sin(angle), 0)
    down = (-np.sin(angle), np.cos(angle), 0)
    for k in range(4):
        ds = slice_dataset(odd_volume()[k], position=(0, 0, 2 * k), orientation=(*across, *down), number=k + 1)
        save(ds, tmp_path / f"{k}.dcm")
    with pytest.raises(GeometryError, match=r"rotated by 8\.0 degrees"):
        read_hu(tmp_path)


def test_a_tilt_named_but_not_there_is_a_warning(tmp_path):
    write_series(tmp_path, odd_volume(), GantryDetectorTilt="12.0")
    with pytest.warns(GeometryWarning, match=r"12\.0 degrees"):
        read_hu(tmp_path)


def test_a_header_that_contradicts_the_positions_is_a_warning(tmp_path):
    write_series(tmp_path / "a", odd_volume(), SpacingBetweenSlices="1.0")
    with pytest.warns(GeometryWarning, match="1 mm between slices, the positions say 2 mm"):
        read_hu(tmp_path / "a")
    write_series(tmp_path / "b", odd_volume(), SliceThickness="1.0")
    with pytest.warns(GeometryWarning, match="1 mm lie 2 mm apart"):
        read_hu(tmp_path / "b")


@pytest.mark.parametrize("unit", ["ED", "Z_EFF", "MGML"])
def test_maps_of_other_quantities_are_not_taken_for_hu(tmp_path, unit):
    write_series(tmp_path, odd_volume(), RescaleType=unit)
    with pytest.raises(DicomError, match="not CT numbers"):
        read_hu(tmp_path)


def test_several_series_ask_for_a_choice(tmp_path):
    first, second = odd_volume(), odd_volume(4, 5, 6)
    write_series(tmp_path / "a", first)
    for k in range(4):
        ds = slice_dataset(second[k], position=(0, 0, k), series="2.25.9999", number=k + 1)
        ds.SeriesNumber = 12
        save(ds, tmp_path / f"b{k}.dcm")
    with pytest.raises(SeriesError, match=r"2 CT series.*number 12, 4 slices.*series=") as caught:
        read_hu(tmp_path)
    assert "Planted" not in str(caught.value)
    assert "PLANTED" not in str(caught.value)
    assert np.array_equal(read_hu(tmp_path, series=12).hu, second)
    assert np.array_equal(read_hu(tmp_path, series=SERIES).hu, first)
    with pytest.raises(SeriesError, match="called '55'"):
        read_hu(tmp_path, series="55")


def test_a_list_of_files_and_strangers_beside_them(tmp_path):
    volume = odd_volume()
    write_series(tmp_path, volume)
    (tmp_path / "NOTE.txt").write_text("not an image")
    (tmp_path / "LICENSE").write_text("free")
    grid = read_ct(sorted(tmp_path.iterdir(), reverse=True))
    assert np.array_equal(grid.hu, volume)
    assert grid.source["files that are not DICOM"] == 2


def test_localizers_are_left_out(tmp_path):
    volume = odd_volume()
    write_series(tmp_path, volume)
    ds = slice_dataset(volume[0], position=(0, 0, 0), orientation=(1, 0, 0, 0, 0, -1), number=99)
    ds.ImageType = ["ORIGINAL", "PRIMARY", "LOCALIZER"]
    save(ds, tmp_path / "scout.dcm")
    assert np.array_equal(read_hu(tmp_path).hu, volume)


def test_other_modalities_are_named(tmp_path):
    for k, ds in enumerate(write_series(tmp_path, odd_volume(), shuffle=False)):
        ds.Modality = "MR"
        save(ds, tmp_path / f"{k:04d}.dcm")
    with pytest.raises(SeriesError, match=r"no CT slices.*5 x MR"):
        read_hu(tmp_path)


def test_run_length_encoded_slices_are_unpacked(tmp_path):
    from pydicom.uid import RLELossless

    volume = odd_volume()
    for k, ds in enumerate(write_series(tmp_path, volume, shuffle=False)):
        ds.compress(RLELossless, generate_instance_uid=False)
        save(ds, tmp_path / f"{k:04d}.dcm")
    assert np.array_equal(read_hu(tmp_path).hu, volume)


def test_a_compression_without_decoder_is_named(tmp_path):
    from pydicom.encaps import encapsulate
    from pydicom.uid import JPEGLSLossless

    for k, ds in enumerate(write_series(tmp_path, odd_volume(), shuffle=False)):
        ds.file_meta.TransferSyntaxUID = JPEGLSLossless
        ds.PixelData = encapsulate([b"\xff\xd8\xff\xf7" + b"\0" * 60])
        ds["PixelData"].is_undefined_length = True
        save(ds, tmp_path / f"{k:04d}.dcm")
    with pytest.raises(DicomError, match="JPEG-LS Lossless"):
        read_hu(tmp_path)


@pytest.mark.parametrize("syntax", ["1.2.840.10008.1.2.2", "1.2.840.10008.1.2", "1.2.840.10008.1.2.1.99"])
def test_other_plain_transfer_syntaxes(tmp_path, syntax):
    volume = odd_volume()
    for k, ds in enumerate(write_series(tmp_path, volume, shuffle=False)):
        if syntax.endswith("1.2.2"):
            ds.PixelData = np.frombuffer(ds.PixelData, dtype="<u2").astype(">u2").tobytes()
        ds.file_meta.TransferSyntaxUID = syntax
        pydicom.dcmwrite(
            tmp_path / f"{k:04d}.dcm",
            ds,
            implicit_vr=syntax == "1.2.840.10008.1.2",
            little_endian=not syntax.endswith("1.2.2"),
            force_encoding=True,
        )
    assert np.array_equal(read_hu(tmp_path).hu, volume)


def test_memory_is_checked_before_it_is_taken(tmp_path, monkeypatch):
    write_series(tmp_path, odd_volume())
    monkeypatch.setattr("dosekit.grids.memory.LARGEST_GB", 1e-6)
    with pytest.raises(SizeError, match=r"5 x 6 x 7 voxels"):
        read_hu(tmp_path)


def test_progress_reaches_the_end(tmp_path):
    write_series(tmp_path, odd_volume())
    told = []
    read_hu(tmp_path, progress=lambda done, total: told.append((done, total)))
    assert told[-1] == (10, 10)
    assert told == sorted(told)


def test_hu_beyond_the_table_are_clamped_and_counted(tmp_path):
    volume = np.full((3, 6, 6), 40, dtype=np.int16)
    volume[1, 2, 2:5] = 3000
    write_series(tmp_path, volume)
    with pytest.warns(CalibrationWarning, match=r"3 voxels above 15\d\d HU \(highest 3000\)"):
        grid = read_ct(tmp_path)
    assert float(grid.density_g_cm3.max()) == pytest.approx(1.92)


def test_the_couch_goes_on_request(tmp_path):
    _, y, x = np.indices((4, 60, 60))
    volume = np.full((4, 60, 60), -1000, dtype=np.int16)
    body = (x - 30) ** 2 + (y - 25) ** 2 < 18**2
    volume[body] = 40
    volume[(x - 30) ** 2 + (y - 22) ** 2 < 25] = -800  # air inside the body stays
    couch = (y >= 44) & (y < 48)
    volume[couch] = 0
    write_series(tmp_path, volume, spacing=(2.0, 2.0, 3.0))
    kept = read_ct(tmp_path)
    grid = read_ct(tmp_path, remove_couch=True)
    assert float(kept.density_g_cm3[couch].min()) > 0.9
    assert float(grid.density_g_cm3[couch].max()) < 0.002
    assert np.array_equal(grid.density_g_cm3[body], kept.density_g_cm3[body])
    assert np.count_nonzero(grid.body() != body) < 0.02 * body.sum()


def test_identity_stays_inside_the_reference(tmp_path):
    write_series(tmp_path, odd_volume())
    grid = read_ct(tmp_path)
    for text in (repr(grid), str(grid.source), repr(grid.dicom_reference), grid.name):
        assert "Planted" not in text
        assert "PLANTED" not in text
        assert "2.25." not in text
    assert str(grid.dicom_reference.images[0].PatientName) == "Planted^Name"
    positions = [float(image.ImagePositionPatient[2]) for image in grid.dicom_reference.images]
    assert positions == sorted(positions)
