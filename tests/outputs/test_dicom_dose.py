"""RT Dose: valid, at the right place, true to half a scaling step, the same bytes each time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pydicom
import pytest
import SimpleITK as sitk
from hypothesis import given
from hypothesis import strategies as st

from dosekit.effects.histograms import volume_histogram
from dosekit.errors import InputError, OutputError
from dosekit.outputs.dicom_dose import dose_integers, write_rt_dose
from dosekit.outputs.dicom_reference import invented_reference, plan_uid, structure_set_uid

from dicom_judges import RESEARCH_ONLY, check_house_rules, judge

X_MM = -71.25 + 2.5 * np.arange(7)
Y_MM = 12.0 + 1.25 * np.arange(5)
Z_MM = -402.1 + 10.0 / 3.0 * np.arange(4)
RUN = "0f" * 32


@pytest.fixture
def dose(rng):
    values = rng.random((4, 5, 7)) * 2.34
    values[3, 4, 6] = 2.5
    values[0, 0, 0] = 0.0
    return values


def write(folder, dose, *, position="HFS", **options):
    reference = invented_reference(RUN, image_z_mm=Z_MM, patient_position=position)
    usual = {"x_mm": X_MM, "y_mm": Y_MM, "z_mm": Z_MM, "reference": reference, "run_hash": RUN}
    return write_rt_dose(folder / "dose.dcm", dose, **{**usual, **options})


@pytest.mark.parametrize("position", ["HFS", "HFP", "FFS", "FFP"])
def test_judges_accept_a_plan_dose(tmp_path, dose, position):
    path = write(tmp_path, dose, position=position, created="2026-02-03T04:05:06")
    judge(path)
    check_house_rules(path)


def test_judges_accept_the_effective_dose_of_one_field(tmp_path, dose):
    path = write(
        tmp_path, dose, dose_type="EFFECTIVE", summation="BEAM", beam_number=2, label="left", comment="RBE 1.4"
    )
    judge(path)
    head = check_house_rules(path)
    group = head.ReferencedRTPlanSequence[0].ReferencedFractionGroupSequence[0]
    assert (head.DoseType, head.DoseSummationType) == ("EFFECTIVE", "BEAM")
    assert group.ReferencedBeamSequence[0].ReferencedBeamNumber == 2


def test_judges_accept_a_single_plane(tmp_path, dose):
    path = write(tmp_path, dose[:1], z_mm=Z_MM[:1])
    judge(path)
    assert pydicom.dcmread(path).pixel_array.shape == (5, 7)


@pytest.mark.parametrize("scale", [1.0, 1e-9, 3.7e4, 1e-40, 1e30])
def test_dose_reads_back_to_half_a_scaling_step(tmp_path, dose, scale):
    head = pydicom.dcmread(write(tmp_path, dose * scale))
    unit_gy = float(head.DoseGridScaling)
    assert np.abs(head.pixel_array * unit_gy - dose * scale).max() <= 0.5000001 * unit_gy
    assert head.pixel_array.max() == 65535
    assert (head.BitsAllocated, head.PixelRepresentation, head.DoseUnits) == (16, 0, "GY")
    assert len(str(head["DoseGridScaling"].value)) <= 16


def test_float32_dose_reads_back(tmp_path, dose):
    single = dose.astype(np.float32)
    head = pydicom.dcmread(write(tmp_path, single))
    unit_gy = float(head.DoseGridScaling)
    assert np.abs(head.pixel_array * unit_gy - single.astype(float)).max() <= 0.5000001 * unit_gy


@pytest.mark.parametrize("position", ["HFS", "HFP", "FFS", "FFP"])
def test_every_voxel_lands_where_another_reader_puts_it(tmp_path, dose, position):
    path = write(tmp_path, dose, position=position)
    image = sitk.ReadImage(str(path))
    unit_gy = float(image.GetMetaData("3004|000e"))
    assert image.GetDirection() == pytest.approx(np.eye(3).ravel(), abs=1e-12)
    for index in np.ndindex(7, 5, 4):
        i, j, k = index
        assert image.TransformIndexToPhysicalPoint(index) == pytest.approx((X_MM[i], Y_MM[j], Z_MM[k]), abs=1e-4)
        assert image.GetPixel(*index) * unit_gy == pytest.approx(dose[k, j, i], abs=0.51 * unit_gy)


@pytest.mark.parametrize("position", ["HFS", "FFS", "HFP", "FFP"])
def test_frame_offsets_and_orientation(tmp_path, dose, position):
    head = pydicom.dcmread(write(tmp_path, dose, position=position))
    offsets = np.array([float(value) for value in head.GridFrameOffsetVector])
    assert len(offsets) == head.NumberOfFrames == 4
    assert offsets[0] == 0.0
    assert offsets + float(head.ImagePositionPatient[2]) == pytest.approx(Z_MM, abs=1e-6)
    assert [float(value) for value in head.ImageOrientationPatient] == [1, 0, 0, 0, 1, 0]
    assert [float(value) for value in head.ImagePositionPatient] == pytest.approx([X_MM[0], Y_MM[0], Z_MM[0]])
    assert [float(value) for value in head.PixelSpacing] == [1.25, 2.5]  # between rows (y) first
    assert head.FrameIncrementPointer == 0x3004000C


def test_zero_dose_is_a_valid_map(tmp_path):
    path = write(tmp_path, np.zeros((4, 5, 7)))
    judge(path)
    head = pydicom.dcmread(path)
    assert float(head.DoseGridScaling) > 0.0
    assert not head.pixel_array.any()


def test_references_and_wording(tmp_path, dose):
    path = write(tmp_path, dose, comment="total of two fields")
    head = check_house_rules(path)
    reference = invented_reference(RUN, image_z_mm=Z_MM)
    assert head.FrameOfReferenceUID == reference.frame_of_reference_uid
    assert head.StudyInstanceUID == reference.study_instance_uid
    assert head.ReferencedRTPlanSequence[0].ReferencedSOPInstanceUID == plan_uid(RUN)
    images = [item.ReferencedSOPInstanceUID for item in head.ReferencedImageSequence]
    assert images == list(reference.image_instance_uids)
    assert head.DoseComment.startswith(RESEARCH_ONLY)
    assert RESEARCH_ONLY in head.ImageComments
    assert "total of two fields" in head.ImageComments


@pytest.mark.parametrize("scale", [1.0, 0.0])
def test_histograms_go_with_the_dose(tmp_path, dose, scale):
    dose = dose * scale
    coverage = {1: np.ones(dose.shape), 4: (np.arange(dose.size) % 3 == 0).reshape(dose.shape) * 0.5}
    found = {number: volume_histogram(dose, part, voxel_cm3=0.02) for number, part in coverage.items()}
    reference = invented_reference(RUN, image_z_mm=Z_MM).with_structure_set(structure_set_uid(RUN))
    path = write(tmp_path, dose, reference=reference, histograms=found)
    judge(path)
    head = check_house_rules(path)
    assert head.ReferencedStructureSetSequence[0].ReferencedSOPInstanceUID == structure_set_uid(RUN)
    assert [item.DVHReferencedROISequence[0].ReferencedROINumber for item in head.DVHSequence] == [1, 4]
    for item, part in zip(head.DVHSequence, coverage.values(), strict=True):
        pairs = np.array(list(map(float, item.DVHData))).reshape(-1, 2)
        assert len(pairs) == item.DVHNumberOfBins
        begins = np.concatenate([[0.0], np.cumsum(pairs[:-1, 0])])
        for begin, volume in list(zip(begins, pairs[:, 1], strict=True))[::37]:
            assert volume == pytest.approx(part[dose >= begin - 1e-12].sum() * 0.02, abs=1e-9)
        assert float(item.DVHMeanDose) == pytest.approx(np.average(dose, weights=part), rel=1e-9)


def test_histograms_without_a_structure_set_are_refused(tmp_path, dose):
    with pytest.raises(InputError, match="histograms"):
        write(tmp_path, dose, histograms={1: volume_histogram(dose, np.ones(dose.shape))})
    assert list(tmp_path.iterdir()) == []


def test_same_run_same_bytes_other_run_other_identifier(tmp_path, dose):
    first = write(tmp_path, dose).read_bytes()
    assert write(tmp_path, dose).read_bytes() == first
    reference = invented_reference("ab", image_z_mm=Z_MM)
    other = write_rt_dose(tmp_path / "b.dcm", dose, x_mm=X_MM, y_mm=Y_MM, z_mm=Z_MM, reference=reference, run_hash="ab")
    assert pydicom.dcmread(other).SOPInstanceUID != pydicom.dcmread(tmp_path / "dose.dcm").SOPInstanceUID


def test_maps_of_one_run_have_different_identifiers(tmp_path, dose):
    names = [
        pydicom.dcmread(write(tmp_path, dose, label=label, dose_type=kind)).SOPInstanceUID
        for label in ("total", "field 1")
        for kind in ("PHYSICAL", "EFFECTIVE")
    ]
    assert len(set(names)) == 4


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"dose": np.full((4, 5, 7), np.nan)}, "not a number"),
        ({"dose": np.full((4, 5, 7), np.inf)}, "infinite"),
        ({"dose": np.full((4, 5, 7), -1e-9)}, "negative"),
        ({"dose": np.ones((5, 4, 7))}, "shape"),
        ({"z_mm": Z_MM[::-1]}, "equal steps"),
        ({"x_mm": X_MM**2}, "equal steps"),
        ({"y_mm": Y_MM * np.nan}, "finite"),
        ({"dose_type": "BIOLOGICAL"}, "PHYSICAL"),
        ({"summation": "FRACTION"}, "BEAM"),
        ({"summation": "BEAM"}, "number"),
        ({"created": "yesterday"}, "YYYY"),
    ],
)
def test_what_cannot_be_stored_is_refused_and_nothing_written(tmp_path, dose, change, words):
    options = {"dose": dose, **change}
    with pytest.raises(InputError, match=words):
        write(tmp_path, options.pop("dose"), **options)
    assert list(tmp_path.iterdir()) == []


def test_one_nan_among_doses_is_refused(tmp_path, dose):
    dose[1, 2, 3] = np.nan
    with pytest.raises(InputError, match="not a number"):
        write(tmp_path, dose)


def test_a_missing_place_leaves_nothing(tmp_path, dose):
    (tmp_path / "file").write_text("x")
    with pytest.raises(OutputError):
        write(tmp_path / "file", dose)
    assert [path.name for path in tmp_path.iterdir()] == ["file"]


@given(st.lists(st.floats(0.0, 1e12, allow_subnormal=False), min_size=1, max_size=20))
def test_integers_are_within_half_a_step(values):
    integers, scaling = dose_integers(values)
    unit_gy = float(scaling)
    assert len(scaling) <= 16
    assert np.abs(integers * unit_gy - np.array(values)).max() <= 0.5 * unit_gy * (1 + 1e-9)
    if max(values) > 1e-290:
        assert integers.max() in {65534, 65535}


def test_identity_is_not_in_the_reference_text():
    reference = replace(invented_reference(RUN), patient_name="Quux^Planted", patient_id="PLANTED")
    assert "lanted" not in repr(reference).lower() + str(reference).lower()
