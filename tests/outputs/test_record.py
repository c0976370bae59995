"""The record: what decides the result decides the hash; nothing else does, and no place or person is in it."""

import dataclasses
import getpass
import json
import platform
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dosekit.caution import CAUTION
from dosekit.errors import InputError
from dosekit.outputs.files import sha256_of_bytes
from dosekit.outputs.record import (
    InputFile,
    RunRecord,
    canonical_json,
    changed_outputs,
    hash_inputs,
    package_versions,
    portable_text,
    read_record,
    run_hash,
    write_record,
)

PLAIN = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**40), 2**40)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)


@pytest.fixture
def record():
    return RunRecord(
        run_hash="f00d" * 16,
        study_text='title = "one"\n',
        inputs=(InputFile("ct", 2, 10, "ab" * 32),),
        versions=package_versions(),
        sources=("A. Author 1980",),
        warnings=("outside validity",),
        energy_balance={"in_mev": 204.0},
        results={"flatness_percent": np.float64(1.5), "peaks_mm": np.array([1.0, 2.0])},
        outputs={"a.txt": sha256_of_bytes(b"a")},
    )


@given(PLAIN)
def test_canonical_json_reads_back_and_has_one_spelling(value):
    text = canonical_json(value)
    assert json.loads(text) == value
    assert canonical_json(json.loads(text)) == text
    assert text.isascii()


@given(st.dictionaries(st.text(), st.integers(), min_size=2))
def test_the_order_of_keys_does_not_matter(table):
    assert canonical_json(table) == canonical_json(dict(reversed(table.items())))


@pytest.mark.parametrize("value", [float("nan"), float("inf"), {"a": [float("nan")]}, object(), b"bytes", Path("x")])
def test_what_has_no_plain_form_is_refused(value):
    with pytest.raises(InputError):
        canonical_json(value)


def test_hash_follows_study_inputs_and_version_only():
    ct, structures = InputFile("ct", 2, 10, "ab" * 32), InputFile("structures", 1, 5, "cd" * 32)
    base = run_hash({"a": 1}, inputs=(ct, structures), program_version="1")
    assert base == run_hash({"a": 1}, inputs=(structures, ct), program_version="1")
    assert base != run_hash({"a": 2}, inputs=(ct, structures), program_version="1")
    assert base != run_hash({"a": 1}, inputs=(ct,), program_version="1")
    assert base != run_hash({"a": 1}, inputs=(ct, structures), program_version="2")
    swapped = (InputFile("ct", 1, 5, "cd" * 32), InputFile("structures", 2, 10, "ab" * 32))
    assert base != run_hash({"a": 1}, inputs=swapped, program_version="1")


def test_inputs_are_hashed_by_content_not_by_name_or_order(tmp_path):
    for name, content in (("a", b"1"), ("b", b"2"), ("z", b"1"), ("y", b"2")):
        (tmp_path / name).write_bytes(content)
    one = hash_inputs("ct", [tmp_path / "a", tmp_path / "b"])
    assert one == hash_inputs("ct", [tmp_path / "y", tmp_path / "z"])
    assert one != hash_inputs("ct", [tmp_path / "a", tmp_path / "z"])
    assert (one.files, one.size_bytes) == (2, 2)
    assert hash_inputs("one", [tmp_path / "a"]).sha256 == sha256_of_bytes(b"1")
    with pytest.raises(InputError, match="no files"):
        hash_inputs("ct", [])


def test_a_record_reads_back_as_it_was(record, tmp_path):
    path = write_record(record, tmp_path / "record.json")
    back = read_record(path)
    assert back.results == {"flatness_percent": 1.5, "peaks_mm": [1.0, 2.0]}
    assert dataclasses.replace(back, results={}) == dataclasses.replace(record, results={})
    assert json.loads(path.read_text())["caution"] == CAUTION
    assert write_record(back, tmp_path / "again.json").read_bytes() == path.read_bytes()


def test_no_machine_user_or_clock_in_the_record(record, tmp_path):
    text = write_record(record, tmp_path / "record.json").read_text()
    assert str(tmp_path) not in text
    assert platform.node() not in text
    for key in ("date", "time", "host", "user", "path", "folder"):
        assert f'"{key}"' not in text
    if len(getpass.getuser()) > 3 and getpass.getuser() != "root":
        assert getpass.getuser() not in text


@pytest.mark.parametrize(
    ("text", "gone"),
    [
        ('ct = "/home/jane_roe/scan"', "jane_roe"),
        ("ct = '~/jane_roe'", "jane_roe"),
        ('ct = "C:\\\\Users\\\\jane_roe"', "jane_roe"),
        ('ct = "file:///data/jane_roe"', "jane_roe"),
        ('ct = "\\\\\\\\server\\\\jane_roe"', "jane_roe"),
    ],
)
def test_paths_that_lead_elsewhere_are_taken_out(text, gone):
    assert gone not in portable_text(text)
    assert portable_text(text).count("path-removed") == 1


def test_the_rest_of_a_study_stays_as_it_was():
    text = 'title = "5 mm / 10 mm"\nct = "scans/one"\ntags = ["a", "b"]\n'
    assert portable_text(text) == text
    assert portable_text(text, replace={"scans/one": "ct"}) == text.replace("scans/one", "ct")


def test_changed_outputs_are_named(record, tmp_path):
    assert changed_outputs(record, tmp_path) == ["a.txt"]
    (tmp_path / "a.txt").write_bytes(b"a")
    assert changed_outputs(record, tmp_path) == []
    (tmp_path / "a.txt").write_bytes(b"b")
    assert changed_outputs(record, tmp_path) == ["a.txt"]


@pytest.mark.parametrize(
    "content", ["", "[]", "{}", '{"format": 1}', '{"format": 99}', "[" * 10000, '{"format":1,"inputs":[{}]}']
)
def test_damaged_records_are_refused(content, tmp_path):
    path = tmp_path / "record.json"
    path.write_text(content)
    with pytest.raises(InputError):
        read_record(path)
    with pytest.raises(InputError, match="no readable file"):
        read_record(tmp_path / "none.json")
