"""The folder of a run: whole or not at all, nothing of anybody's lost."""

from __future__ import annotations

from pathlib import Path

import pytest

from dosekit.errors import InputError, OutputError
from dosekit.outputs.files import sha256_of_file
from dosekit.outputs.folder import RECORD_NAME, files_at_risk, output_folder
from dosekit.outputs.record import RunRecord, write_record


def fill(folder, text="1 Gy"):
    """Write results and their record, as a run does."""
    (folder / "tables").mkdir()
    (folder / "tables" / "dose.csv").write_text(text)
    outputs = {"tables/dose.csv": sha256_of_file(folder / "tables" / "dose.csv")}
    write_record(RunRecord(run_hash="ab", study_text="", outputs=outputs), folder / RECORD_NAME)


def run(place, text="1 Gy", then=lambda: None):
    """Fill the folder, and let something happen before it is in place."""
    with output_folder(place) as folder:
        fill(folder, text)
        then()


def raiser(problem):
    def happen():
        raise problem

    return happen


def names(folder):
    return sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*"))


@pytest.fixture
def place(tmp_path):
    return tmp_path / "results" / "run"


def test_nothing_is_there_until_all_is_there(place):
    with output_folder(place) as folder:
        fill(folder)
        assert not place.exists()
    assert names(place) == ["record.json", "tables", "tables/dose.csv"]
    assert names(place.parent) == ["run", *(f"run/{name}" for name in names(place))]


@pytest.mark.parametrize("problem", [ValueError, KeyboardInterrupt, SystemExit, OSError])
def test_a_failure_leaves_nothing(tmp_path, place, problem):
    with pytest.raises(problem):
        run(place, then=raiser(problem))
    assert list(tmp_path.iterdir()) == []


def test_a_failure_leaves_the_earlier_run(place):
    run(place, "first")
    with pytest.raises(ZeroDivisionError):
        run(place, "second", then=raiser(ZeroDivisionError))
    assert (place / "tables" / "dose.csv").read_text() == "first"
    assert [path.name for path in place.parent.iterdir()] == ["run"]


def test_an_unchanged_run_and_an_empty_folder_are_replaced(place):
    place.mkdir(parents=True)
    for text in ("first", "second"):
        run(place, text)
        assert (place / "tables" / "dose.csv").read_text() == text
    assert [path.name for path in place.parent.iterdir()] == ["run"]


def test_what_a_file_browser_leaves_is_no_hindrance(place):
    run(place)
    (place / ".DS_Store").write_bytes(b"x")
    run(place)
    assert ".DS_Store" not in names(place)


def add_notes(place):
    (place / "notes.txt").write_text("mine")
    return "notes.txt"


def change_a_table(place):
    (place / "tables" / "dose.csv").write_text("2 Gy")
    return "dose.csv"


def remove_the_record(place):
    (place / RECORD_NAME).unlink()
    return "dose.csv"


def damage_the_record(place):
    (place / RECORD_NAME).write_text("{")
    return "record.json"


def link_elsewhere(place):
    (place / "link").symlink_to(place.parent)
    return "link"


@pytest.mark.parametrize("change", [add_notes, change_a_table, remove_the_record, damage_the_record, link_elsewhere])
def test_a_folder_with_anything_else_in_it_is_refused_before_work(place, change):
    run(place)
    word = change(place)
    before = names(place)
    with pytest.raises(InputError, match=word), output_folder(place):
        pytest.fail("work has begun")
    assert names(place) == before
    assert files_at_risk(place)
    assert [path.name for path in place.parent.iterdir()] == ["run"]


def test_files_that_came_in_meanwhile_are_kept(place):
    def somebody_comes_in():
        place.mkdir()
        (place / "late.txt").write_text("mine")

    with pytest.raises(InputError, match="late"):
        run(place, then=somebody_comes_in)
    assert names(place.parent) == ["run", "run/late.txt"]


def test_a_file_is_refused(tmp_path):
    (tmp_path / "run").write_text("mine")
    with pytest.raises(InputError, match="is a file"), output_folder(tmp_path / "run"):
        pytest.fail("work has begun")
    assert (tmp_path / "run").read_text() == "mine"


def test_a_place_under_a_file_is_an_output_error(tmp_path):
    (tmp_path / "file").write_text("mine")
    with pytest.raises(OutputError), output_folder(tmp_path / "file" / "run"):
        pytest.fail("work has begun")


def test_the_working_folder_is_refused(tmp_path, monkeypatch):
    (tmp_path / "inner").mkdir()
    monkeypatch.chdir(tmp_path / "inner")
    for place in (".", ".."):
        with pytest.raises(InputError, match="work in"), output_folder(place):
            pytest.fail("work has begun")


def test_a_move_that_fails_brings_the_earlier_run_back(place, monkeypatch):
    run(place, "first")
    rename = Path.rename

    def refuse(self, target):
        if ".partial-" in self.name:
            raise PermissionError(13, "Permission denied")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", refuse)
    with pytest.raises(OutputError, match="put in place"):
        run(place, "second")
    assert (place / "tables" / "dose.csv").read_text() == "first"
    assert [path.name for path in place.parent.iterdir()] == ["run"]


def test_others_may_read_the_folder_as_the_umask_says(place):
    plain = place.parent / "plain"
    plain.mkdir(parents=True)
    run(place)
    assert place.stat().st_mode == plain.stat().st_mode
