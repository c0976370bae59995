"""The same study on real CT sets, through to RT Dose; skipped without DOSEKIT_CT_DIR."""

from __future__ import annotations

import warnings

import numpy as np
import pydicom
import pytest

from dosekit.errors import DosekitWarning
from dosekit.studies.pipeline import run

import dicom_judges

BASE = """title = "{title}"
[volume]
ct = "{ct}"
{more}
spacing_mm = [3.0, 3.0, 5.0]
[target]
{target}
[beam]
momentum_sigma = 0.02
contaminants = {{ "mu-" = 0.05, "e-" = 0.1 }}
[[field]]
name = "front"
spot_spacing_mm = 8
[[field]]
name = "side"
gantry_deg = {angle}
spot_spacing_mm = 8
[goal]
dose_gy = 2.0
"""


def _run(text, tmp_path):
    path = tmp_path / "study.toml"
    path.write_text(text, encoding="utf-8")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        return run(path, tmp_path / "out")


def _check(folder, result, ct_files):
    """Dose reaches the target and the DICOM objects refer to the CT and to nobody else."""
    assert result.histograms[result.target].mean_gy == pytest.approx(2.0, rel=1e-4)
    assert 0.15 < result.summary.star_share < 0.6
    dose = pydicom.dcmread(folder / "dicom" / "rt_dose_total.dcm")
    source = pydicom.dcmread(ct_files[0], stop_before_pixels=True)
    assert dose.FrameOfReferenceUID == source.FrameOfReferenceUID
    assert dose.StudyInstanceUID == source.StudyInstanceUID
    assert float(dose.DoseGridScaling) * int(dose.pixel_array.max()) == pytest.approx(
        float(result.dose["dose"].sum("component").max()), rel=1e-4
    )
    for name in ("rt_dose_total.dcm", "rt_dose_effective.dcm", "rt_ion_plan.dcm"):
        dicom_judges.judge(folder / "dicom" / name)
    for text in folder.rglob("*"):
        if text.suffix in (".csv", ".txt", ".html", ".json"):
            words = text.read_text(encoding="utf-8")
            for tag in ("PatientID", "PatientName"):
                identity = str(getattr(source, tag, ""))
                assert len(identity) < 4 or identity not in words


@pytest.mark.slow
def test_abdomen_51_with_a_sphere_as_target(ct_dir, tmp_path):
    files = sorted((ct_dir / "abdomen_51" / "ct").glob("*.dcm"))
    text = BASE.format(
        title="Sphere in an abdomen",
        ct=ct_dir / "abdomen_51" / "ct",
        more="remove_couch = true",
        target="sphere = { centre_mm = [-60, 20, -250], radius_mm = 25 }",
        angle=270,
    )
    result = _run(text, tmp_path)
    _check(tmp_path / "out", result, files)
    assert (tmp_path / "out" / "dicom" / "rt_structure_set.dcm").is_file()
    assert (tmp_path / "out" / "figures" / "calibration.pdf").is_file()
    assert str(ct_dir) not in (tmp_path / "out" / "record.json").read_text(encoding="utf-8")


@pytest.mark.slow
def test_thigh_59_structures_with_its_own_structure_as_target(ct_dir, tmp_path):
    folder = ct_dir / "thigh_59_structures"
    files = sorted((folder / "ct").iterdir())
    text = BASE.format(
        title="Structure in a thigh",
        ct=folder / "ct",
        more=f'structures = "{folder / "rtstruct.dcm"}"',
        target='structure = "gtv_mass_ct"',
        angle=90,
    )
    result = _run(text, tmp_path)
    _check(tmp_path / "out", result, files)
    assert result.grid.volume_cm3(result.target) == pytest.approx(365.318, rel=0.01)
    dose = pydicom.dcmread(tmp_path / "out" / "dicom" / "rt_dose_total.dcm")
    centre = np.array(result.grid.centroid_mm(result.target))
    offset = (centre - np.array([float(v) for v in dose.ImagePositionPatient])) / np.array([3.0, 3.0, 5.0])
    x, y, z = np.rint(offset).astype(int)
    assert dose.pixel_array[z, y, x] * float(dose.DoseGridScaling) > 1.5


@pytest.mark.slow
def test_thigh_59_structures_with_weights_found_in_three_dimensions(ct_dir):
    from dosekit.studies.model import parse_study
    from dosekit.studies.pipeline import compute

    folder = ct_dir / "thigh_59_structures"
    text = BASE.format(
        title="Three fields on a structure in a thigh",
        ct=folder / "ct",
        more=f'structures = "{folder / "rtstruct.dcm"}"',
        target='structure = "GTV_Mass_CT"',
        angle=90,
    ).replace("spacing_mm = [3.0, 3.0, 5.0]", "spacing_mm = 4.0")
    text += 'quantity = "effect"\nweights = "all_fields"\n[[field]]\nname = "back"\ngantry_deg = 180\n'
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        result = compute(parse_study(text))
    target = result.effect_histograms[result.target]
    assert target.dose_at_volume_gy(95.0) >= 0.95 * 2.0
    assert target.dose_at_volume_gy(2.0) <= 1.07 * 2.0
