"""References: identifiers that repeat, identity where it must be and nowhere else."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pydicom
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydicom.dataset import Dataset

from dosekit.basis.materials import material
from dosekit.beams.beam import Beam
from dosekit.errors import DicomError, DosekitWarning
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.fields import Field
from dosekit.outputs.dicom_ct import write_ct_series
from dosekit.outputs.dicom_dose import write_rt_dose
from dosekit.outputs.dicom_plan import write_ion_plan
from dosekit.outputs.dicom_reference import (
    DicomReference,
    derived_uid,
    invented_reference,
    reference_of,
    structure_set_uid,
)
from dosekit.outputs.dicom_structures import write_structure_set

from dicom_judges import all_text, judge

RUN = "5e" * 32
PLANTED = {
    "PatientName": "Planted^Quux",
    "PatientID": "PLANTED-1234",
    "PatientBirthDate": "19010203",
    "StudyDate": "20010203",
    "StudyID": "STPLANTED",
    "AccessionNumber": "ACPLANTED",
    "ReferringPhysicianName": "Refplanted^Doc",
    "StudyInstanceUID": "1.2.826.77.1",
    "SeriesInstanceUID": "1.2.826.77.2",
    "FrameOfReferenceUID": "1.2.826.77.3",
}
Z_MM = np.array([10.0, 12.5, 15.0])


def headers(**changes):
    images = []
    for k in (2, 0, 1):  # files come in any order
        image = Dataset()
        image.SOPClassUID = "1.2.840.10008.5.1.4.1.1.2"
        image.SOPInstanceUID = f"1.2.826.77.9.{k + 1}"
        image.ImagePositionPatient = [0, 0, float(Z_MM[k])]
        image.PatientPosition = "FFS"
        image.PatientSex = "F"
        for keyword, value in {**PLANTED, **changes}.items():
            setattr(image, keyword, value)
        images.append(image)
    return images


@pytest.fixture
def reference():
    return DicomReference.from_headers(headers())


def write_everything(folder, reference):
    """Write one object of each kind that refers to a patient's images."""
    density = np.ones((3, 4, 5), np.float32)
    water = np.zeros(density.shape, np.uint16)
    grid = VoxelGrid((0, 0, 10), (2, 2, 2.5), density, water, (material("water"),))
    grid = grid.with_structure("box", np.ones(grid.shape, np.float32))
    structures = write_structure_set(folder / "rs.dcm", grid, reference=reference, run_hash=RUN)
    reference = reference.with_structure_set(structure_set_uid(RUN))
    field = Field("front", Beam("pi-", momentum_mev_c=170.0), isocentre_mm=(0, 0, 0), gantry_deg=0.0)
    plan = write_ion_plan(folder / "rp.dcm", [field], reference=reference, run_hash=RUN)
    axes = {"x_mm": [0, 2, 4, 6, 8], "y_mm": [0, 2, 4, 6], "z_mm": Z_MM}
    dose = write_rt_dose(folder / "rd.dcm", density, reference=reference, run_hash=RUN, **axes)
    return structures, plan, dose


def test_names_of_the_source_are_kept_and_sorted(reference):
    assert reference.study_instance_uid == PLANTED["StudyInstanceUID"]
    assert reference.image_instance_uids == ("1.2.826.77.9.1", "1.2.826.77.9.2", "1.2.826.77.9.3")
    assert reference.image_z_mm == tuple(Z_MM)
    assert reference.patient_position == "FFS"
    assert not reference.made_by_run


def test_identity_is_where_the_images_are_referred_to(tmp_path, reference):
    for path in write_everything(tmp_path, reference):
        judge(path)
        head = pydicom.dcmread(path)
        assert str(head.PatientName) == PLANTED["PatientName"]
        assert head.PatientID == PLANTED["PatientID"]
        assert head.StudyInstanceUID == PLANTED["StudyInstanceUID"]
        assert head.FrameOfReferenceUID == PLANTED["FrameOfReferenceUID"]


def test_nothing_of_the_identity_is_left_when_anonymous(tmp_path, reference):
    anonymous = reference.anonymized(RUN)
    paths = write_everything(tmp_path, anonymous)
    sources = [*PLANTED.values(), *reference.image_instance_uids, "Planted", "Quux", "Refplanted"]
    for path in paths:
        judge(path)
        text = all_text(path).lower()
        assert not [value for value in sources if value.lower() in text]
        assert pydicom.dcmread(path).PatientIdentityRemoved == "YES"


def test_anonymous_objects_belong_together(tmp_path, reference):
    heads = [pydicom.dcmread(path) for path in write_everything(tmp_path, reference.anonymized(RUN))]
    for keyword in ("PatientName", "PatientID", "StudyInstanceUID", "FrameOfReferenceUID"):
        assert len({str(head[keyword].value) for head in heads}) == 1
    structures, plan, dose = heads
    assert plan.ReferencedStructureSetSequence[0].ReferencedSOPInstanceUID == structures.SOPInstanceUID
    assert dose.ReferencedRTPlanSequence[0].ReferencedSOPInstanceUID == plan.SOPInstanceUID
    contour = structures.ROIContourSequence[0].ContourSequence[0]
    images = {item.ReferencedSOPInstanceUID for item in dose.ReferencedImageSequence}
    assert contour.ContourImageSequence[0].ReferencedSOPInstanceUID in images


def test_an_anonymous_copy_of_the_images_can_be_written(tmp_path, reference):
    density = np.ones((3, 4, 5), np.float32)
    grid = VoxelGrid((0, 0, 10), (2, 2, 2.5), density, density.astype(np.uint16) * 0, (material("water"),))
    anonymous = reference.anonymized(RUN)
    paths = write_ct_series(tmp_path, grid, run_hash=RUN, reference=anonymous)
    assert tuple(pydicom.dcmread(path).SOPInstanceUID for path in paths) == anonymous.image_instance_uids
    assert pydicom.dcmread(paths[0]).SeriesInstanceUID == anonymous.series_instance_uid


def test_replacement_repeats_within_a_run_and_differs_between_runs(reference):
    assert reference.anonymized(RUN) == reference.anonymized(RUN)
    assert reference.anonymized(RUN).patient_id != reference.anonymized("other").patient_id
    assert reference.anonymized(RUN).study_instance_uid != reference.anonymized("other").study_instance_uid


def test_identity_never_shows_by_accident(reference):
    assert "lanted" not in f"{reference!r} {reference} {[reference]}".lower()


def test_a_grid_gives_its_reference(reference):
    class Found:
        images = tuple(headers())
        structure_set = None

    density = np.ones((3, 4, 5), np.float32)
    grid = VoxelGrid((0, 0, 10), (2, 2, 2.5), density, density.astype(np.uint16) * 0, (material("water"),), name="box")
    assert reference_of(grid.replace(dicom_reference=Found()), run_hash=RUN) == reference
    assert reference_of(grid.replace(dicom_reference=Found()), run_hash=RUN, anonymous=True) == reference.anonymized(
        RUN
    )
    invented = reference_of(grid, run_hash=RUN)
    assert invented.made_by_run
    assert invented.image_z_mm == tuple(Z_MM)
    assert invented.patient_id == "PHANTOM-BOX"


@given(st.text(min_size=1), st.lists(st.text(), max_size=3))
def test_derived_identifiers_are_valid(run_hash, roles):
    uid = derived_uid(run_hash, *roles)
    assert re.fullmatch(r"2\.25\.(0|[1-9]\d*)", uid)
    assert len(uid) <= 64
    number = int(uid[5:])
    assert number < 2**128
    assert (number >> 76) & 0xF == 8  # version of a UUID made by a rule of one's own
    assert (number >> 62) & 0b11 == 0b10  # variant of RFC 9562


@pytest.mark.parametrize("uid", ["1.2.03.4", "abc", "1." + "2" * 64])
def test_identifiers_that_no_object_can_hold_are_replaced(tmp_path, uid):
    with pydicom.config.disable_value_validation():
        images = headers(StudyInstanceUID=uid)
    with pytest.warns(DosekitWarning, match="study identifier"):
        reference = DicomReference.from_headers(images)
    assert reference.study_instance_uid.startswith("2.25.")
    for path in write_everything(tmp_path, reference):
        judge(path)


@pytest.mark.parametrize("keyword", ["PatientBirthDate", "StudyDate", "PatientSex", "PatientID", "StudyID"])
def test_odd_values_in_a_source_do_not_make_an_invalid_object(tmp_path, keyword):
    with pydicom.config.disable_value_validation():
        images = headers(**{keyword: "a\tvery odd; value/" * 6})
        reference = DicomReference.from_headers(images)
    for path in write_everything(tmp_path, reference):
        judge(path)


def test_real_headers_serve_as_they_are(tmp_path, ct_dir):
    """Real archives break rules (one set has a study identifier that is too long); objects stay valid."""
    for folder in sorted(path for path in ct_dir.iterdir() if path.is_dir()):
        images = {}
        for path in sorted(folder.rglob("*")):
            if path.is_file() and pydicom.misc.is_dicom(path):
                head = pydicom.dcmread(path, stop_before_pixels=True)
                if head.SOPClassUID == "1.2.840.10008.5.1.4.1.1.2":
                    images.setdefault(head.SeriesInstanceUID, []).append(head)
        assert images
        for series in images.values():
            reference = DicomReference.from_headers(series)
            for kind in (reference, reference.anonymized(RUN)):
                for path in write_everything(tmp_path, kind):
                    judge(path)


def test_a_name_in_another_script_is_kept(tmp_path, reference):
    path = write_everything(tmp_path, replace(reference, patient_name="Åström^Žofie"))[2]
    judge(path)
    assert str(pydicom.dcmread(path).PatientName) == "Åström^Žofie"


def test_what_cannot_be_referred_to_is_refused():
    with pytest.raises(DicomError, match="no image"):
        DicomReference.from_headers([])
    with pytest.raises(DicomError, match="position"):
        DicomReference.from_headers([Dataset()])
    with pytest.raises(DicomError, match="HFS"):
        invented_reference(RUN, patient_position="SITTING")
    with pytest.raises(DicomError, match="hash"):
        derived_uid("")
