"""Structures: holes, cross-sections between planes, frames of reference, names, and volumes of known solids."""

from __future__ import annotations

import numpy as np
import pytest
from ct_series import rectangle, save, structure_dataset, write_series

from dosekit.errors import GeometryWarning, StructureError, UnknownNameError
from dosekit.grids.contours import Contour, Lattice, covered_voxels
from dosekit.grids.ct import read_ct

from naive import even_odd_mask

NZ, NY, NX = 6, 30, 40
SPACING = (1.0, 1.0, 2.0)


@pytest.fixture
def scan(tmp_path):
    """A plain series and a place for its structure set."""
    write_series(tmp_path / "ct", np.full((NZ, NY, NX), 30, dtype=np.int16), spacing=SPACING)
    return tmp_path


def laid(scan, rois, only=None, **options):
    save(structure_dataset(rois, **options), scan / "rs.dcm")
    return read_ct(scan / "ct", scan / "rs.dcm", only=only)


def loop(*points):
    return np.array(points, dtype=float)


def test_a_box_on_pixel_edges_is_exact(scan):
    contours = [rectangle(4.5, 5.5, 14.5, 25.5, z) for z in (2.0, 4.0, 6.0)]
    grid = laid(scan, {"block": contours})
    assert grid.volume_cm3("block") == pytest.approx(10 * 20 * 6 / 1000, rel=1e-6)
    assert grid.centroid_mm("block") == pytest.approx((9.5, 15.5, 4.0), abs=1e-6)
    assert set(np.unique(grid.structures["block"])) == {0.0, 1.0}


def test_holes_and_islands_by_nesting(scan):
    plane = [
        rectangle(2.5, 2.5, 32.5, 22.5, 4),
        rectangle(7.5, 7.5, 27.5, 17.5, 4),
        rectangle(12.5, 9.5, 17.5, 14.5, 4),
    ]
    grid = laid(scan, {"ring": plane})
    assert grid.volume_cm3("ring") == pytest.approx((600 - 200 + 25) * 2 / 1000, rel=1e-6)
    mask = grid.structures["ring"][2]
    assert mask[12, 14] == 1.0
    assert mask[12, 20] == 0.0
    assert mask[5, 5] == 1.0


def test_the_volume_of_a_ball_is_fractional_and_right():
    angle = np.linspace(0, 2 * np.pi, 200, endpoint=False)
    contours = []
    for z in np.arange(-9.5, 10.0, 1.0):
        r = np.sqrt(100.0 - z * z)
        contours.append(Contour(float(z), np.stack([r * np.cos(angle), r * np.sin(angle)], axis=1) + 0.3))
    box = covered_voxels(contours, Lattice((-15.0, -15.0, -14.5), (2.0, 2.0, 1.0), (30, 16, 16)))
    assert box.values.sum() * 4.0 == pytest.approx(4 / 3 * np.pi * 1000, rel=2e-3)


def test_half_or_more_is_the_even_odd_rule_at_pixel_centres(rng):
    for _ in range(20):
        points = rng.uniform(1, 18, size=(int(rng.integers(3, 9)), 2))
        centre = points.mean(axis=0)
        points = points[np.argsort(np.arctan2(*(points - centre).T))]  # a star around its middle: does not cross itself
        lattice = Lattice((0.0, 0.0, 0.0), (1.0, 1.3, 2.0), (1, 16, 20))
        ours = covered_voxels([Contour(0.0, points)], lattice).dense(lattice.shape)[0] >= 0.5
        assert np.array_equal(ours, even_odd_mask([points], lattice.origin_mm, lattice.spacing_mm, (16, 20)))


def test_coverage_is_the_area_of_the_polygon(rng):
    for _ in range(10):
        points = rng.uniform(2, 17, size=(7, 2))
        points = points[np.argsort(np.arctan2(*(points - points.mean(axis=0)).T))]
        x, y = points.T
        area = 0.5 * abs(float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)))
        box = covered_voxels([Contour(0.0, points)], Lattice((0, 0, 0), (1, 1, 1), (1, 20, 20)))
        assert float(box.values.sum()) == pytest.approx(area, rel=0.01)


def test_contours_on_every_second_slice_are_joined():
    contours = [Contour(float(z), loop((4.5, 4.5), (14.5, 4.5), (14.5, 14.5), (4.5, 14.5))) for z in (2, 6, 10)]
    box = covered_voxels(contours, Lattice((0, 0, 0), (1, 1, 2), (8, 20, 20)))
    column = box.dense((8, 20, 20))[:, 10, 10]
    assert column.tolist() == pytest.approx([0.5, 1, 1, 1, 1, 1, 0.5, 0])  # 3 planes of 4 mm: 12 mm


def test_cross_sections_between_planes_are_interpolated_by_distance():
    small = loop((8.5, 8.5), (12.5, 8.5), (12.5, 12.5), (8.5, 12.5))
    large = loop((4.5, 4.5), (16.5, 4.5), (16.5, 16.5), (4.5, 16.5))
    box = covered_voxels([Contour(0.0, small), Contour(4.0, large)], Lattice((0, 0, 0), (1, 1, 2), (3, 21, 21)))
    middle = box.dense((3, 21, 21))[1]
    assert float(middle.sum()) == pytest.approx(8.0**2, rel=0.06)  # half-way between 4 and 12 wide; corners round
    assert float(middle[10].sum()) == pytest.approx(8.0, abs=0.3)


def test_contours_off_the_slices_keep_their_volume():
    for shift in (0.5, 1.0, 1.4):
        square = loop((4.5, 4.5), (14.5, 4.5), (14.5, 14.5), (4.5, 14.5))
        contours = [Contour(4.0 + shift + 2 * k, square) for k in range(4)]
        box = covered_voxels(contours, Lattice((0, 0, 0), (1, 1, 2), (12, 20, 20)))
        assert float(box.values.sum()) * 2 == pytest.approx(100 * 8, rel=1e-6)


def test_contours_finer_than_the_slices_are_averaged():
    contours = []
    for k in range(12):
        half = 2.0 + 0.5 * k
        contours.append(Contour(0.5 + k, loop((9 - half, 4.5), (9 + half, 4.5), (9 + half, 8.5), (9 - half, 8.5))))
    box = covered_voxels(contours, Lattice((0, 0, 1.5), (1, 1, 3), (4, 12, 20)))
    exact = sum(2 * (2.0 + 0.5 * k) * 4.0 for k in range(12))
    assert float(box.values.sum()) * 3 == pytest.approx(exact, rel=1e-3)


def test_a_wide_gap_stays_a_gap():
    square = loop((4.5, 4.5), (9.5, 4.5), (9.5, 9.5), (4.5, 9.5))
    contours = [Contour(float(z), square) for z in (0, 1, 2, 7, 8, 9)]
    column = covered_voxels(contours, Lattice((0, 0, 0), (1, 1, 1), (12, 12, 12))).dense((12, 12, 12))[:, 7, 7]
    assert column.tolist() == [1, 1, 1, 0, 0, 0, 0, 1, 1, 1, 0, 0]


def test_names_are_found_without_case_and_suggested(scan):
    grid = laid(scan, {"GTV primary": [rectangle(2, 2, 9, 9, 2)]})
    assert grid.structure("gtv PRIMARY").sum() > 0
    with pytest.raises(UnknownNameError, match="did you mean 'GTV primary'"):
        grid.structure("GTV prinary")
    with pytest.raises(UnknownNameError, match="did you mean 'GTV primary'"):
        laid(scan, {"GTV primary": [rectangle(2, 2, 9, 9, 2)]}, only=["gtv primry"])


def test_roles_come_from_types_and_names(scan):
    square = [rectangle(2, 2, 9, 9, 2)]
    rois = {"a": square, "b": square, "c": square, "PTV 1": square, "d": square, "Body": square}
    grid = laid(scan, rois, types={"a": "EXTERNAL", "b": "ORGAN", "c": "CTV"})
    assert [grid.role(name) for name in rois] == ["body", "organ_at_risk", "target", "target", "other", "body"]


@pytest.mark.parametrize(
    ("top", "listed", "own"), [(True, True, True), (False, True, False), (False, False, True), (True, False, False)]
)
def test_the_frame_of_reference_is_found_wherever_it_is(scan, top, listed, own):
    rois = {"x": [rectangle(2, 2, 9, 9, 2)]}
    grid = laid(scan, rois, top_frame=top, listed_frame=listed, own_frame=own)
    assert grid.volume_cm3("x") > 0
    with pytest.raises(StructureError, match="another frame of reference"):
        laid(scan, rois, frame="2.25.77", top_frame=top, listed_frame=listed, own_frame=own)


def test_no_frame_at_all_is_a_warning(scan):
    with pytest.warns(GeometryWarning, match="names no frame"):
        laid(scan, {"x": [rectangle(2, 2, 9, 9, 2)]}, top_frame=False, listed_frame=False, own_frame=False)


def test_references_that_do_not_resolve_do_not_matter(scan):
    grid = laid(scan, {"x": [rectangle(2.5, 2.5, 9.5, 9.5, 2)]}, references=["2.25.404", "2.25.405"])
    assert grid.volume_cm3("x") == pytest.approx(49 * 2 / 1000)


def test_a_foreign_frame_is_forgiven_when_the_images_are_these(scan):
    from ct_series import SERIES

    with pytest.warns(GeometryWarning, match="the images decide"):
        laid(scan, {"x": [rectangle(2, 2, 9, 9, 2)]}, frame="2.25.77", references=[f"{SERIES}.1"])


def test_structures_without_contours_are_noted_and_refused_when_wanted(scan):
    rois = {"drawn": [rectangle(2, 2, 9, 9, 2)], "empty": [], "point": [[(1, 1, 2)]]}
    grid = laid(scan, rois)
    assert list(grid.structures) == ["drawn"]
    assert grid.source["structures"]["without contours"] == ["empty", "point"]
    with pytest.raises(StructureError, match="no closed contours"):
        laid(scan, rois, only=["Empty"])


def test_contours_outside_the_ct(scan):
    inside = [rectangle(2, 2, 9, 9, 2)]
    beyond = [rectangle(2, 2, 9, 9, 200)]
    with pytest.warns(GeometryWarning, match=r"far left out \(outside\)"):
        grid = laid(scan, {"near": inside, "far": beyond})
    assert list(grid.structures) == ["near"]
    with pytest.raises(StructureError, match="outside the CT"):
        laid(scan, {"far": beyond})
    with pytest.warns(GeometryWarning, match="cut at its edge"):
        grid = laid(scan, {"half": [rectangle(-10.5, 4.5, 9.5, 14.5, 2)]})
    assert grid.volume_cm3("half") == pytest.approx(10 * 10 * 2 / 1000, rel=1e-6)


def test_crossing_contours_are_refused(scan):
    with pytest.raises(StructureError, match=r"two contours of 'x'.*cross each other"):
        laid(scan, {"x": [rectangle(2, 2, 12, 12, 2), rectangle(7, 7, 20, 20, 2)]})
    bow = [(2, 2, 2), (20, 20, 2), (20, 2, 2), (2, 20, 2)]
    with pytest.raises(StructureError, match="crosses itself"):
        laid(scan, {"x": [bow]})


def test_touching_contours_are_not_crossing(scan):
    grid = laid(scan, {"x": [rectangle(2.5, 2.5, 10.5, 12.5, 2), rectangle(10.5, 2.5, 18.5, 12.5, 2)]})
    assert grid.volume_cm3("x") == pytest.approx(160 * 2 / 1000, rel=1e-6)


def test_slanted_contours_are_refused(scan):
    with pytest.raises(StructureError, match=r"spans 4\.0 mm in z"):
        laid(scan, {"x": [[(2, 2, 2), (9, 2, 2), (9, 9, 6)]]})


def test_doubled_names_are_kept_apart(scan):
    ds = structure_dataset({"x": [rectangle(2, 2, 9, 9, 2)], "y": [rectangle(2, 2, 5, 5, 2)]})
    ds.StructureSetROISequence[1].ROIName = "x"
    save(ds, scan / "rs.dcm")
    grid = read_ct(scan / "ct", scan / "rs.dcm")
    assert list(grid.structures) == ["x", "x (2)"]
    assert grid.volume_cm3("x") > grid.volume_cm3("x (2)")


def test_a_ct_is_no_structure_set(scan):
    image = next((scan / "ct").iterdir())
    with pytest.raises(StructureError, match="holds CT"):
        read_ct(scan / "ct", image)
