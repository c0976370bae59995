"""Marks of a depth dose against closed forms, and files that appear whole or not at all."""

import math

import numpy as np
import pytest

from dosekit.errors import InputError, OutputError
from dosekit.outputs.files import sha256_of_bytes, sha256_of_file, write_bytes, write_text
from dosekit.outputs.marks import curve_marks, distal_depth_mm


def test_a_triangle_has_its_marks_where_they_are_drawn():
    depth = np.array([0.0, 100.0, 150.0])
    marks = curve_marks(depth, [0.0, 1.0, 0.0])
    assert marks.peak_depth_mm == 100.0
    assert marks.distal_80_mm == pytest.approx(110.0)
    assert marks.distal_20_mm == pytest.approx(140.0)
    assert marks.distal_fall_mm == pytest.approx(30.0)


def test_a_gaussian_falls_where_its_formula_says():
    depth = np.arange(0.0, 200.0, 0.1)  # straight lines between points this close err by less than 0.001 mm
    marks = curve_marks(depth, 3.0 * np.exp(-0.5 * ((depth - 120.0) / 8.0) ** 2))
    assert marks.peak == pytest.approx(3.0)
    assert marks.distal_80_mm == pytest.approx(120.0 + 8.0 * math.sqrt(-2 * math.log(0.8)), abs=1e-3)
    assert marks.distal_20_mm == pytest.approx(120.0 + 8.0 * math.sqrt(-2 * math.log(0.2)), abs=1e-3)


def test_peak_to_entrance_is_over_the_first_centimetre():
    depth = np.arange(0.5, 150.0)
    dose = np.where(depth < 10.6, 2.0, 1.0)
    dose[100] = 6.0
    assert curve_marks(depth, dose).peak_to_entrance == pytest.approx(3.0)


def test_scale_does_not_move_the_marks():
    depth = np.linspace(0.0, 100.0, 57)
    dose = 0.2 + np.exp(-(((depth - 60) / 9) ** 2))
    one, two = curve_marks(depth, dose), curve_marks(depth, 1e6 * dose)
    assert (one.peak_depth_mm, one.distal_80_mm) == pytest.approx((two.peak_depth_mm, two.distal_80_mm), rel=1e-12)
    assert one.peak_to_entrance == pytest.approx(two.peak_to_entrance, rel=1e-12)


def test_a_curve_that_ends_before_it_falls_has_no_distal_depth():
    assert math.isnan(distal_depth_mm([0.0, 1.0], [1.0, 2.0], fraction=0.8))


@pytest.mark.parametrize(
    ("depth", "dose"),
    [([0, 1], [0, 0]), ([0, 1], [1]), ([1, 0], [1, 2]), ([0, 0], [1, 2]), ([0, 1], [1, math.nan]), ([0], [1])],
)
def test_what_is_no_depth_dose_is_refused(depth, dose):
    with pytest.raises(InputError):
        curve_marks(depth, dose)


def test_a_failed_write_leaves_what_was_there(tmp_path, monkeypatch):
    path = write_bytes(tmp_path / "a" / "file", b"old")

    def refuse(self, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("pathlib.Path.replace", refuse)
    with pytest.raises(OutputError, match="No space left"):
        write_bytes(path, b"new")
    assert path.read_bytes() == b"old"
    assert [entry.name for entry in path.parent.iterdir()] == ["file"]


def test_a_place_in_the_way_is_said_plainly(tmp_path):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(OutputError, match="could not be written"):
        write_bytes(tmp_path / "file" / "inner", b"x")


def test_text_has_plain_newlines_and_hashes_agree(tmp_path):
    path = write_text(tmp_path / "t", "a\r\nµ\n")
    assert path.read_bytes() == "a\nµ\n".encode()
    assert sha256_of_file(path) == sha256_of_bytes(path.read_bytes())
