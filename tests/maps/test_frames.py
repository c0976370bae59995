"""Angles and axes: the sentences of IEC 61217 and turns that undo themselves."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.errors import InputError
from dosekit.maps.frames import PATIENT_POSITIONS, beam_frame


@pytest.mark.parametrize(
    ("gantry", "couch", "direction", "u_axis", "v_axis"),
    [  # typed from the standard's pictures: HFS, patient axes (left, back, head)
        (0, 0, (0, 1, 0), (1, 0, 0), (0, 0, 1)),  # from above, towards the back
        (90, 0, (-1, 0, 0), (0, 1, 0), (0, 0, 1)),  # source at the patient's left
        (180, 0, (0, -1, 0), (-1, 0, 0), (0, 0, 1)),  # from below
        (270, 0, (1, 0, 0), (0, -1, 0), (0, 0, 1)),  # source at the patient's right
        # couch at 90: turned counter-clockwise seen from above, the head comes to the room's -x side
        (0, 90, (0, 1, 0), (0, 0, -1), (1, 0, 0)),
        (90, 90, (0, 0, 1), (0, 1, 0), (1, 0, 0)),  # the room's +x side is where the feet are: feet to head
        (270, 90, (0, 0, -1), (0, -1, 0), (1, 0, 0)),
    ],
)
def test_axes_at_quarter_turns(gantry, couch, direction, u_axis, v_axis):
    frame = beam_frame((1.0, 2.0, 3.0), gantry_deg=gantry, couch_deg=couch)
    np.testing.assert_array_equal(frame.direction, direction)
    np.testing.assert_array_equal(frame.u_axis, u_axis)
    np.testing.assert_array_equal(frame.v_axis, v_axis)


@pytest.mark.parametrize("position", sorted(PATIENT_POSITIONS))
def test_beam_axes_are_right_handed_and_unit(position, rng):
    for gantry, couch in rng.uniform(-360, 360, (20, 2)):
        axes = beam_frame((0, 0, 0), gantry_deg=gantry, couch_deg=couch, patient_position=position).rotation
        np.testing.assert_allclose(axes @ axes.T, np.eye(3), atol=1e-14)
        assert np.linalg.det(axes) == pytest.approx(-1.0)  # u x v points back to the source


def test_prone_patient_is_met_from_the_back_at_gantry_zero():
    assert beam_frame((0, 0, 0), gantry_deg=0, patient_position="HFP").direction == (0.0, -1.0, 0.0)
    assert beam_frame((0, 0, 0), gantry_deg=90, patient_position="FFS").direction == (1.0, 0.0, 0.0)


@pytest.mark.parametrize("distance", [None, 1500.0])
def test_there_and_back(distance, rng):
    frame = beam_frame((10, -20, 30), gantry_deg=33, couch_deg=-71, source_distance_mm=distance)
    points = rng.uniform(-200, 200, (50, 3))
    np.testing.assert_allclose(frame.to_patient(frame.to_beam(points)), points, atol=1e-10)
    assert np.allclose(frame.to_beam([10, -20, 30]), 0.0)


def test_rays_of_a_fan_meet_in_the_source():
    frame = beam_frame((0, 0, 0), gantry_deg=0, source_distance_mm=1000.0)
    np.testing.assert_allclose(frame.to_patient([50.0, -30.0, -999.999]), [0, -1000, 0], atol=1e-3)
    np.testing.assert_allclose(frame.to_patient([50.0, -30.0, 1000.0]), [100.0, 1000.0, -60.0])


@pytest.mark.parametrize(
    "wrong",
    [
        {"gantry_deg": np.nan},
        {"gantry_deg": 0, "source_distance_mm": 0.0},
        {"gantry_deg": 0, "patient_position": "XYZ"},
    ],
)
def test_nonsense_is_refused(wrong):
    with pytest.raises(InputError):
        beam_frame((0, 0, 0), **wrong)
