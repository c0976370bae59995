"""Structure sets: valid, outlines where the coverage is one half, holes kept, volumes kept."""

from __future__ import annotations

import numpy as np
import pydicom
import pytest
from matplotlib.path import Path as Polygon

from dosekit.basis.materials import material
from dosekit.errors import StructureError
from dosekit.grids.voxels import VoxelGrid
from dosekit.outputs.dicom_outlines import slice_outlines, thinned
from dosekit.outputs.dicom_reference import invented_reference, structure_set_uid
from dosekit.outputs.dicom_structures import write_structure_set

from dicom_judges import check_house_rules, judge

RUN = "2b" * 32


def volume(shape=(12, 30, 40), spacing=(2.0, 2.5, 3.0), position="HFS"):
    return VoxelGrid(
        (-40.0, -30.0, 100.0),
        spacing,
        np.ones(shape, np.float32),
        np.zeros(shape, np.uint16),
        (material("water"),),
        name="block",
        patient_position=position,
    )


@pytest.fixture
def grid():
    whole = volume()
    z, y, x = np.meshgrid(*(whole.centres_mm(axis) for axis in "zyx"), indexing="ij")
    radius = np.hypot(x, y - 5.0)
    ring = ((radius < 25.0) & (radius > 12.0) & (np.abs(z - 115.0) < 12.0)).astype(np.float32)
    body = np.zeros(whole.shape, np.float32)
    body[:, 1:-1, 1:-1] = 1.0
    grid = whole.with_structure("Body", body, role="body").with_structure("ring", ring, role="organ_at_risk")
    return grid.with_sphere("target", (2.0, 3.0, 116.0), 14.0)


def write(folder, grid, **options):
    reference = invented_reference(
        RUN, image_z_mm=grid.centres_mm("z").tolist(), patient_position=grid.patient_position
    )
    return write_structure_set(folder / "rs.dcm", grid, reference=reference, run_hash=RUN, **options)


def contours(head, number):
    item = next(item for item in head.ROIContourSequence if item.ReferencedROINumber == number)
    return [
        np.array(list(map(float, contour.ContourData))).reshape(-1, 3) for contour in item.get("ContourSequence", [])
    ]


def even_odd_volume_mm3(head, number, grid):
    """Rasterise at a tenth of a voxel with the even-odd rule, slice by slice."""
    fine = 10
    x = grid.edges_mm("x")[0] + (np.arange(grid.shape[2] * fine) + 0.5) * grid.spacing_mm[0] / fine
    y = grid.edges_mm("y")[0] + (np.arange(grid.shape[1] * fine) + 0.5) * grid.spacing_mm[1] / fine
    points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    slices = {}
    for contour in contours(head, number):
        inside = Polygon(contour[:, :2]).contains_points(points)
        z = contour[0, 2]
        slices[z] = slices.get(z, np.zeros(len(points), bool)) ^ inside
    return sum(mask.sum() for mask in slices.values()) * grid.voxel_volume_mm3 / fine**2


@pytest.mark.parametrize("moment", ["", "2026-02-03T04:05:06"])
def test_judges_accept(tmp_path, grid, moment):
    path = write(tmp_path, grid, created=moment)
    judge(path)
    head = check_house_rules(path)
    assert head.SOPInstanceUID == structure_set_uid(RUN)
    assert head.ApprovalStatus == "UNAPPROVED"
    assert [item.ROIName for item in head.StructureSetROISequence] == ["Body", "ring", "target"]
    assert [item.RTROIInterpretedType for item in head.RTROIObservationsSequence] == ["EXTERNAL", "ORGAN", "PTV"]


def test_judges_accept_an_empty_structure(tmp_path, grid):
    path = write(tmp_path, grid.with_structure("nothing", np.zeros(grid.shape, np.float32)))
    judge(path)
    assert contours(pydicom.dcmread(path), 4) == []


@pytest.mark.parametrize("name", ["Body", "ring", "target"])
def test_volumes_are_kept_within_two_per_cent(tmp_path, grid, name):
    head = pydicom.dcmread(write(tmp_path, grid))
    number = ["Body", "ring", "target"].index(name) + 1
    assert even_odd_volume_mm3(head, number, grid) == pytest.approx(grid.volume_cm3(name) * 1e3, rel=0.02)


def test_a_hole_is_a_contour_of_its_own(tmp_path, grid):
    head = pydicom.dcmread(write(tmp_path, grid, names=["RING"]))
    by_slice = {}
    for contour in contours(head, 1):
        by_slice.setdefault(contour[0, 2], []).append(contour)
    assert {len(parts) for parts in by_slice.values()} == {2}


def test_every_contour_lies_on_its_image(tmp_path, grid):
    head = pydicom.dcmread(write(tmp_path, grid))
    frame = head.ReferencedFrameOfReferenceSequence[0]
    images = frame.RTReferencedStudySequence[0].RTReferencedSeriesSequence[0].ContourImageSequence
    known = [item.ReferencedSOPInstanceUID for item in images]
    assert len(known) == grid.shape[0]
    for roi in head.ROIContourSequence:
        for contour in roi.ContourSequence:
            z = {float(value) for value in contour.ContourData[2::3]}
            assert len(z) == 1
            k = known.index(contour.ContourImageSequence[0].ReferencedSOPInstanceUID)
            assert z.pop() == pytest.approx(grid.centres_mm("z")[k], abs=1e-6)
            assert 3 * contour.NumberOfContourPoints == len(contour.ContourData)


def area(outlines):
    return abs(
        sum(0.5 * np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)) for x, y in (outline.T for outline in outlines))
    )


def test_outline_of_a_square_has_its_corners_only():
    square = np.zeros((42, 33))
    square[2:40, 3:30] = 1.0
    (outline,) = slice_outlines(square, x_mm=np.arange(33.0), y_mm=np.arange(42.0) * 2.0)
    assert len(outline) == 8  # marching squares cut each corner once
    assert outline.min(axis=0) == pytest.approx([2.5, 3.0])
    assert outline.max(axis=0) == pytest.approx([29.5, 79.0])


def test_outline_reaches_the_edge_of_the_volume():
    (outline,) = slice_outlines(np.ones((20, 30)), x_mm=np.arange(30.0), y_mm=np.arange(20.0))
    assert outline.min(axis=0) == pytest.approx([-0.5, -0.5])
    assert outline.max(axis=0) == pytest.approx([29.5, 19.5])


def test_a_small_or_partly_covered_slice_keeps_its_area(rng):
    axis = np.arange(21.0)
    x, y = np.meshgrid(axis, axis)
    for scale in (0.2, 0.4, 0.7, 1.0):
        bump = np.clip(scale * (1.3 - np.hypot(x - 10.0, y - 9.5) / 5.0), 0.0, 1.0)
        outlines = slice_outlines(bump, x_mm=axis, y_mm=axis)
        assert area(outlines) == pytest.approx(bump.sum(), rel=0.01)
    single = np.zeros((5, 5))
    single[2, 2] = 1.0
    assert area(slice_outlines(single, x_mm=axis[:5], y_mm=axis[:5])) == pytest.approx(1.0, rel=0.01)


@pytest.mark.parametrize(("share", "count"), [(0.45, 0), (0.55, 1)])
def test_a_flat_end_inside_a_slice_is_kept_from_one_half_on(share, count):
    flat = np.zeros((40, 40))
    flat[3:37, 3:37] = share
    assert len(slice_outlines(flat, x_mm=np.arange(40.0), y_mm=np.arange(40.0))) == count


def test_thinning_stays_within_its_tolerance():
    angle = np.linspace(0.0, 2.0 * np.pi, 2000, endpoint=False)
    circle = 50.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    few = thinned(circle, tolerance_mm=0.1)
    assert 3 < len(few) < 200
    middles = 0.5 * (few + np.roll(few, 1, axis=0))
    assert np.hypot(*middles.T).min() >= 49.9


@pytest.mark.slow
def test_a_long_outline_is_thinned_until_it_fits(tmp_path, rng):
    grid = volume((1, 190, 190), (0.51, 0.53, 2.0))
    rough = np.zeros(grid.shape, np.float32)
    rough[0, 1:-1:2, 1:-1] = rng.uniform(0.6, 1.0, (94, 188))
    rough[0, 1:-1, 1] = 1.0  # a comb: one outline of very many points
    (whole,) = slice_outlines(rough[0], x_mm=grid.centres_mm("x"), y_mm=grid.centres_mm("y"))
    assert len(whole) * 3 * 6 > 65534
    path = write(tmp_path, grid.with_structure("comb", rough))
    judge(path)
    (contour,) = pydicom.dcmread(path).ROIContourSequence[0].ContourSequence
    assert len("\\".join(map(str, contour.ContourData))) <= 65534
    assert contour.NumberOfContourPoints > 500


def test_same_run_same_bytes(tmp_path, grid):
    assert write(tmp_path, grid).read_bytes() == write(tmp_path, grid).read_bytes()


def test_no_structure_or_no_image_is_refused(tmp_path, grid):
    with pytest.raises(StructureError, match="0 structures"):
        write(tmp_path, volume())
    with pytest.raises(StructureError, match="0 images"):
        write_structure_set(tmp_path / "rs.dcm", grid, reference=invented_reference(RUN), run_hash=RUN)
    assert list(tmp_path.iterdir()) == []
