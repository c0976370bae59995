"""The study file: what is refused, and in which words."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dosekit.errors import DosekitError, StudyError, UnknownNameError
from dosekit.studies.model import axis_triple, parse_study, read_study
from dosekit.studies.pipeline import run
from dosekit.studies.shipped import shipped_names, study_path, write_new_study

BASE = 'title = "x"\n[volume]\nphantom = "torso"\n[target]\nstructure = "t"\n[[field]]\nname = "a"\n'


def test_the_smallest_study_is_valid():
    study = parse_study(BASE)
    assert study.field[0].gantry_deg == 0.0
    assert study.beam_of(study.field[0]) is study.beam


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", ["'title' is missing", "'volume' is missing", "'field' is missing"]),
        ("x =", ["is not TOML"]),
        (BASE + "gantri_deg = 3", ["unknown key 'field.1.gantri_deg'", "did you mean 'gantry_deg'"]),
        (BASE + "[goal]\nwieghts = 'each_field'", ["unknown key 'goal.wieghts'", "did you mean 'weights'"]),
        (BASE + "[beam]\nmomentum_mev_c = nan", ["beam.momentum_mev_c", "finite"]),
        (BASE + "[beam]\nmomentum_mev_c = -4", ["beam.momentum_mev_c", "greater than 0", "-4"]),
        (BASE + "[beam]\nmomentum_sigma = 0.01\nmomentum_fwhm = 0.02", ["not both"]),
        (BASE + "[beam]\nparticle = 'kaon'", ["'pi-'", "kaon"]),
        (BASE + "[[field]]\nname = 'A'", ["same name"]),
        (BASE + "gantry_deg = 1e9", ["field.1.gantry_deg", "360"]),
        (BASE.replace('phantom = "torso"', ""), ["either 'phantom'"]),
        (BASE.replace('phantom = "torso"', 'phantom = "torso"\nct = "f"'), ["not both"]),
        (BASE.replace('structure = "t"', ""), ["either 'structure'"]),
        (BASE + "beam = { particl = 'pi+' }", ["field.1.beam.particl", "did you mean 'particle'"]),
    ],
)
def test_each_fault_is_named(text, words):
    with pytest.raises(StudyError) as caught:
        parse_study(text)
    for word in words:
        assert word in str(caught.value)


def test_a_missing_file_says_what_to_do(tmp_path):
    with pytest.raises(StudyError, match="dosekit new"):
        read_study(tmp_path / "none.toml")


def test_a_binary_file_is_refused(tmp_path):
    path = tmp_path / "s.toml"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(StudyError, match="UTF-8"):
        read_study(path)


@pytest.mark.parametrize("name", [*shipped_names(), "starting_point"])
def test_shipped_studies_are_valid(name):
    folder = study_path(shipped_names()[0]).parent
    study, text = read_study(folder / f"{name}.toml")
    assert study.title
    assert "RESEARCH ONLY" in text


def test_a_new_study_is_valid_and_never_overwrites(tmp_path):
    path = tmp_path / "study.toml"
    write_new_study(path)
    read_study(path)
    with pytest.raises(DosekitError, match="exists"):
        write_new_study(path)


def test_a_run_by_name_suggests_the_nearest_study(tmp_path):
    with pytest.raises(UnknownNameError, match="two_fields_torso"):
        run("two_fields_toso", tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_shipped_study_is_found_by_name_or_suggested():
    assert study_path("two_fields_torso").is_file()
    with pytest.raises(UnknownNameError, match="did you mean 'two_fields_torso'"):
        study_path("two_field_torso")


def test_every_option_of_the_starting_point_is_real():
    """Switching on each commented key must still give a valid study (one at a time where they exclude each other)."""
    text = (study_path("two_fields_torso").parent / "starting_point.toml").read_text(encoding="utf-8")
    lines = text.splitlines()
    tried = 0
    for number, line in enumerate(lines):
        bare = line.removeprefix("# ")
        if not line.startswith("# ") or " = " not in bare or bare.split(" = ")[0].count(" "):
            continue
        changed = list(lines)
        changed[number] = bare
        key = bare.split(" = ")[0]
        if key in ("structures", "series", "calibration", "ct"):
            changed = [entry for entry in changed if not entry.startswith("phantom = ")]
            if key != "ct":
                changed[changed.index(bare)] = 'ct = "folder"\n' + bare
        if key == "sphere":
            changed.remove('structure = "target"')
        parse_study("\n".join(changed))
        tried += 1
    assert tried > 12


@settings(max_examples=80, deadline=None)
@given(st.text(max_size=300))
def test_any_text_gives_a_study_or_an_error_of_ours(text):
    try:
        parse_study(text)
    except DosekitError:
        pass


def test_spacings():
    assert axis_triple(2.0) == (2.0, 2.0, 2.0)
    with pytest.raises(StudyError):
        axis_triple((1.0, 0.0, 1.0))
