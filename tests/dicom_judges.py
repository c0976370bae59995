"""Judges from outside for DICOM objects: dciodvfy, drtdump, and a walk over all elements.

The two programs come from Debian's dicom3tools and dcmtk.  Where they are absent
the test is skipped visibly, or fails when DOSEKIT_REQUIRE_VALIDATORS=1.  Their exit
status says nothing; their lines do.
"""

from __future__ import annotations

import os
import shutil
import subprocess

import pydicom
import pytest

RESEARCH_ONLY = "RESEARCH ONLY - NOT FOR CLINICAL USE"


def complaints(path, *, radiotherapy=True):
    """Return what dciodvfy (errors) and drtdump (errors and warnings) say about a file."""
    found = [line for line in _lines("dciodvfy", "-new", path) if line.startswith("Error")]
    if radiotherapy:
        found += [line for line in _lines("drtdump", path) if line.startswith(("E:", "W:"))]
    return found


def judge(path, *, radiotherapy=True):
    """Fail if a judge from outside complains about a file."""
    assert complaints(path, radiotherapy=radiotherapy) == []


def consistency_complaints(paths):
    """Return what dcentvfy says about files that should belong together.

    It takes the study that a structure set refers to for a missing object; that line is left out.
    """
    return [
        line
        for line in _lines("dcentvfy", *paths)
        if line.startswith("Error") and "Missing SOPInstanceUID that was referenced" not in line
    ]


def check_house_rules(path):
    """Fail if an object breaks the rules of this project; return the object."""
    head = pydicom.dcmread(path)
    assert head.file_meta.TransferSyntaxUID == pydicom.uid.ExplicitVRLittleEndian
    assert head.Manufacturer == "dosekit"
    assert head.SoftwareVersions
    assert RESEARCH_ONLY in head.SeriesDescription
    assert not [element.tag for element in head.iterall() if element.tag.is_private]
    for element in head.iterall():
        if element.VR == "DS":
            values = element.value if element.VM > 1 else [element.value]
            assert all(len(str(value)) <= 16 for value in values if value is not None), element
    return head


def all_text(path):
    """Return everything a file says, for a search of what it must not say."""
    return str(pydicom.dcmread(path)) + path.read_bytes().decode("latin-1")


def _lines(program, *arguments):
    if shutil.which(program) is None:
        message = f"{program} is not installed (Debian: dicom3tools, dcmtk)"
        if os.environ.get("DOSEKIT_REQUIRE_VALIDATORS") == "1":
            pytest.fail(message)
        pytest.skip(message)
    result = subprocess.run(
        [program, *map(str, arguments)], capture_output=True, text=True, errors="replace", timeout=60, check=False
    )
    return (result.stderr + "\n" + result.stdout).splitlines() if program == "drtdump" else result.stderr.splitlines()
