"""A planted identity reaches only the DICOM objects that must refer to their CT, and not even those when anonymous."""

from __future__ import annotations

import warnings

import pydicom
import pytest

from dosekit.errors import DosekitWarning
from dosekit.studies.pipeline import run
from dosekit.studies.small_volumes import export_phantom

NAME, NUMBER = "QUILLFEATHER^ZEBEDEE", "ZQ-7741-PLANTED"


@pytest.fixture(scope="module")
def planted(tmp_path_factory):
    """A CT of a phantom with an invented identity in its headers."""
    folder = tmp_path_factory.mktemp("planted")
    export_phantom("small_block", folder / "ct", spacing_mm=5.0)
    for path in (folder / "ct").glob("*.dcm"):
        head = pydicom.dcmread(path)
        head.PatientName, head.PatientID = NAME, NUMBER
        head.save_as(path)
    (folder / "ct" / "structures.dcm").rename(folder / "structures.dcm")
    (folder / "study.toml").write_text(
        'title = "planted"\n[volume]\nct = "ct"\nstructures = "structures.dcm"\n[target]\n'
        "sphere = { centre_mm = [0, 60, 0], radius_mm = 10 }\n[beam]\nmomentum_sigma = 0.02\n"
        '[[field]]\nname = "one"\nspot_spacing_mm = 10\nstep_mm = 10\n',
        encoding="utf-8",
    )
    return folder


@pytest.mark.parametrize("anonymous", [False, True])
def test_a_planted_identity_stays_where_it_must(planted, tmp_path, anonymous):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        run(planted / "study.toml", tmp_path / "out", anonymous=anonymous)
    holding = []
    for path in (tmp_path / "out").rglob("*"):
        if path.is_file():
            data = path.read_bytes()
            if any(word.encode() in data for word in (NAME, NAME.split("^")[0], NUMBER)):
                holding.append(path.relative_to(tmp_path / "out"))
    if anonymous:
        assert holding == []
    else:
        assert holding
        assert all(path.parts[0] == "dicom" for path in holding)
