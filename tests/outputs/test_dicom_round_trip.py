"""A phantom written as CT and structure set reads back as what it was; the objects of a run belong together."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pydicom
import pytest
import SimpleITK as sitk

from dosekit.beams.beam import Beam
from dosekit.grids.ct import read_ct
from dosekit.grids.phantoms import phantom, phantom_names
from dosekit.maps.fields import Field
from dosekit.outputs.dicom_ct import ct_numbers, write_ct_series
from dosekit.outputs.dicom_dose import write_rt_dose
from dosekit.outputs.dicom_plan import write_ion_plan
from dosekit.outputs.dicom_reference import reference_of, structure_set_uid
from dosekit.outputs.dicom_structures import write_structure_set

from dicom_judges import all_text, check_house_rules, consistency_complaints, judge

RUN = "6f" * 32
QUICK = ("small_block",)


def write_phantom(folder, grid):
    """Write a phantom as a CT series and a structure set."""
    (folder / "ct").mkdir()
    reference = reference_of(grid, run_hash=RUN)
    images = write_ct_series(folder / "ct", grid, run_hash=RUN)
    structures = write_structure_set(folder / "rs.dcm", grid, reference=reference, run_hash=RUN)
    return images, structures, reference.with_structure_set(structure_set_uid(RUN))


@pytest.mark.parametrize(
    "name", [name if name in QUICK else pytest.param(name, marks=pytest.mark.slow) for name in phantom_names()]
)
def test_every_shipped_phantom_reads_back(tmp_path, name):
    grid = phantom(name)
    images, structures, _ = write_phantom(tmp_path, grid)
    judge(structures)
    judge(images[0], radiotherapy=False)
    judge(images[-1], radiotherapy=False)
    back = read_ct(tmp_path / "ct", structures)
    assert back.same_geometry(grid)
    assert np.array_equal(back.hu, ct_numbers(grid))
    assert set(back.structures) == set(grid.structures)
    for structure in grid.structures:
        assert back.volume_cm3(structure) == pytest.approx(grid.volume_cm3(structure), rel=0.02), structure
        away_mm = np.subtract(back.centroid_mm(structure), grid.centroid_mm(structure))
        assert np.abs(away_mm).max() < 0.25 * min(grid.spacing_mm), structure
        assert back.role(structure) == grid.role(structure)


@pytest.mark.parametrize("position", ["HFS", "FFS", "HFP", "FFP"])
def test_position_and_place_are_kept(tmp_path, position):
    grid = phantom("small_block").replace(patient_position=position, origin_mm=(-31.4, 15.9, -926.5))
    images, structures, _ = write_phantom(tmp_path, grid)
    back = read_ct(tmp_path / "ct", structures)
    assert back.patient_position == position
    assert back.same_geometry(grid)
    assert back.centroid_mm("target") == pytest.approx(grid.centroid_mm("target"), abs=0.1)
    other = sitk.ReadImage([str(path) for path in images])
    assert other.GetOrigin() == pytest.approx(grid.origin_mm, abs=1e-4)


def test_objects_of_a_run_belong_together(tmp_path):
    grid = phantom("small_block")
    images, structures, reference = write_phantom(tmp_path, grid)
    x_mm, y_mm, z_mm = (grid.centres_mm(axis) for axis in "xyz")
    axes = {"x_mm": x_mm, "y_mm": y_mm, "z_mm": z_mm}
    beam = Beam("pi-", momentum_mev_c=170.0, momentum_sigma=0.02)
    fields = [
        Field(name, beam, isocentre_mm=grid.centroid_mm("target"), gantry_deg=angle)
        for name, angle in (("front", 0.0), ("left", 90.0))
    ]
    plan = write_ion_plan(tmp_path / "rp.dcm", fields, reference=reference, run_hash=RUN)
    ones = np.ones(grid.shape, np.float32)
    common = {"reference": reference, "run_hash": RUN, **axes}
    doses = [write_rt_dose(tmp_path / "rd.dcm", ones, **common)] + [
        write_rt_dose(
            tmp_path / f"rd_{number}.dcm",
            ones * number,
            summation="BEAM",
            beam_number=number,
            label=field.name,
            instance_number=number + 1,
            **common,
        )
        for number, field in enumerate(fields, start=1)
    ]
    for path in (structures, plan, *doses):
        judge(path)
    heads = [check_house_rules(path) for path in (*images, structures, plan, *doses)]
    for keyword in ("StudyInstanceUID", "FrameOfReferenceUID", "PatientID", "PatientName"):
        assert len({str(head[keyword].value) for head in heads}) == 1
    assert len({head.SOPInstanceUID for head in heads}) == len(heads)
    assert len({head.SeriesInstanceUID for head in heads}) == 4
    assert consistency_complaints([*images, structures, plan, *doses]) == []
    beams = {beam.BeamNumber: beam.BeamName for beam in pydicom.dcmread(plan).IonBeamSequence}
    assert beams == {1: "front", 2: "left"}


def test_the_consistency_judge_would_complain(tmp_path):
    grid = phantom("small_block")
    images, *_ = write_phantom(tmp_path, grid)
    stray = pydicom.dcmread(images[0])
    stray.PatientID = "SOMEBODY-ELSE"
    stray.SOPInstanceUID = stray.file_meta.MediaStorageSOPInstanceUID = "2.25.77"
    stray.save_as(tmp_path / "stray.dcm")
    assert consistency_complaints([*images, tmp_path / "stray.dcm"]) != []


def test_a_planted_identity_goes_from_images_to_objects_and_nowhere_else(tmp_path):
    """The source CT carries an identity; what is read from it does not show it, objects refer to it."""
    grid = phantom("small_block")
    planted = {
        "patient_name": "Planted^Quux",
        "patient_id": "PLANTED-77",
        "patient_birth_date": "19010203",
        "study_id": "STPLANTED",
        "accession_number": "ACPLANTED",
        "referring_physician_name": "Refplanted^Doc",
    }
    (tmp_path / "ct").mkdir()
    source = replace(reference_of(grid, run_hash="source"), identity_removed=False, **planted)
    write_ct_series(tmp_path / "ct", grid, run_hash="source", reference=source)
    back = read_ct(tmp_path / "ct")
    shown = f"{back!r} {back} {back.name} {back.source} {back.dicom_reference!r}".lower()
    assert "planted" not in shown
    assert "quux" not in shown
    assert source.study_instance_uid not in shown

    ones = np.ones(back.shape, np.float32)
    for anonymous in (False, True):
        reference = reference_of(back, run_hash=RUN, anonymous=anonymous)
        axes = {f"{axis}_mm": back.centres_mm(axis) for axis in "xyz"}
        path = write_rt_dose(tmp_path / "rd.dcm", ones, reference=reference, run_hash=RUN, **axes)
        judge(path)
        text = all_text(path)
        for value in (*planted.values(), source.study_instance_uid, source.frame_of_reference_uid):
            assert (value in text) is not anonymous
