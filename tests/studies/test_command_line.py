"""The command line as a process: help is quick, messages are clear, exit status is 0, 1 or 2."""

from __future__ import annotations

import subprocess
import sys

import pytest

from dosekit.caution import BANNER


def dosekit(*words, cwd=None):
    """Run the command and return the finished process."""
    return subprocess.run(
        [sys.executable, "-m", "dosekit", *map(str, words)], capture_output=True, text=True, cwd=cwd, check=False
    )


def test_help_names_every_verb_and_the_caution():
    done = dosekit("--help")
    assert done.returncode == 0
    for verb in ("run", "curve", "steps", "look", "fit", "new", "list", "export", "reweigh", "repeat"):
        assert f"\n  {verb} " in done.stdout
    assert BANNER in done.stdout


@pytest.mark.parametrize("verb", ["run", "curve", "steps", "look", "fit", "new", "list", "export", "reweigh", "repeat"])
def test_every_verb_has_help(verb):
    done = dosekit(verb, "--help")
    assert done.returncode == 0
    assert "Usage" in done.stdout


def test_version_says_research_only():
    assert BANNER in dosekit("--version").stdout


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("curve", "-m", "20"), "range of at least 2 mm"),
        (("curve", "-m", "170", "--medium", "wotter"), "did you mean 'water'"),
        (("curve", "-m", "170", "--medium", "water:x"), "name:mm"),
        (("curve", "-m", "170", "-s", "-0.1"), "momentum spread"),
        (("curve", "-m", "nan"), "finite"),
        (("curve", "-m", "170", "--muons", "2"), "0 to 1"),
        (("curve",), "Missing option"),
        (("run", "no_such_study"), "two_fields_torso"),
        (("run", "absent.toml"), "dosekit new"),
        (("look", "torzo"), "did you mean 'torso'"),
        (("steps", "--from", "120", "--to", "100"), "near"),
        (("fit", "absent.csv", "-m", "170"), "absent.csv"),
    ],
)
def test_bad_input_ends_with_status_2_and_no_traceback(words, said, tmp_path):
    done = dosekit(*words, cwd=tmp_path)
    assert done.returncode == 2, done.stderr
    assert said in done.stderr
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_a_curve_goes_to_console_and_folder(tmp_path):
    done = dosekit("curve", "-m", "150", "-s", "0.02", "-o", "c", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert BANNER in done.stdout
    assert {path.name for path in (tmp_path / "c").iterdir()} == {"curve.csv", "curve.nc", "curve.pdf", "curve.png"}


def test_steps_are_flat(tmp_path):
    done = dosekit("steps", "--from", "60", "--to", "100", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "flat to" in done.stdout
    assert BANNER in done.stdout


def test_new_writes_once_and_never_over_a_file(tmp_path):
    assert dosekit("new", "s.toml", cwd=tmp_path).returncode == 0
    again = dosekit("new", "s.toml", cwd=tmp_path)
    assert again.returncode == 1
    assert "exists" in again.stderr


def test_look_and_export_and_look_again(tmp_path):
    done = dosekit("export", "small_block", "-o", "block", "--spacing", "5", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    look = dosekit("look", "block", "--structures", "block/structures.dcm", "-o", "p", cwd=tmp_path)
    assert look.returncode == 0, look.stderr
    assert "structure" in look.stdout
    assert (tmp_path / "p" / "volume.png").is_file()
