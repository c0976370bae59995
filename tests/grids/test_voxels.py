"""The voxel volume: geometry, structures, cropping and resampling."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.beams.stopping import relative_stopping_power
from dosekit.errors import GridError, SizeError, UnknownNameError
from dosekit.grids.coverages import BoxedCoverage, Coverages
from dosekit.grids.outlines import outline_from_density
from dosekit.grids.voxels import VoxelGrid

from naive import averaged_by_overlap, largest_share

MATTER = (material("water"), material("bone_cortical"), material("lung_tissue"))


@pytest.fixture
def grid(rng):
    shape = (5, 7, 6)
    density = rng.uniform(0.2, 1.9, shape).astype(np.float32)
    index = rng.integers(0, 3, shape)
    blob = np.zeros(shape, dtype=np.float32)
    blob[1:4, 2:5, 1:3] = rng.uniform(0.1, 1.0, (3, 3, 2))
    return VoxelGrid(
        (-10.0, 5.0, 2.0), (1.0, 1.5, 2.0), density, index, MATTER, {"Blob": blob}, {"Blob": "target"}, name="odd"
    )


def test_centres_edges_and_corners(grid):
    assert grid.shape == (5, 7, 6)
    assert grid.centres_mm("y").tolist() == pytest.approx([5 + 1.5 * k for k in range(7)])
    assert grid.edges_mm("z").tolist() == pytest.approx([1, 3, 5, 7, 9, 11])
    assert grid.lower_mm == pytest.approx((-10.5, 4.25, 1.0))
    assert grid.upper_mm == pytest.approx((-4.5, 14.75, 11.0))
    with pytest.raises(UnknownNameError):
        grid.centres_mm("w")


def test_arrays_cannot_be_written(grid):
    for array in (grid.density_g_cm3, grid.material_index):
        with pytest.raises(ValueError, match="read-only"):
            array[0, 0, 0] = 1


def test_structures_without_case_with_suggestion(grid):
    assert grid.structure("bLOB").sum() > 0
    assert grid.role("blob") == "target"
    with pytest.raises(UnknownNameError, match="did you mean 'Blob'"):
        grid.structure("blod")


def test_volume_and_centroid(grid):
    coverage = grid.structures["Blob"].astype(float)
    assert grid.volume_cm3("Blob") == pytest.approx(coverage.sum() * 3.0 / 1000, rel=1e-6)
    z, y, x = np.indices(coverage.shape)
    centre = [float((coverage * axis).sum() / coverage.sum()) for axis in (x, y, z)]
    wanted = [o + s * c for o, s, c in zip(grid.origin_mm, grid.spacing_mm, centre, strict=True)]
    assert grid.centroid_mm("Blob") == pytest.approx(wanted, abs=1e-5)
    low, high = grid.bounds_mm("Blob")
    assert low == pytest.approx((-9.5, 7.25, 3.0))
    assert high == pytest.approx((-7.5, 11.75, 9.0))


def test_stopping_power_follows_density_and_composition(grid):
    found = grid.relative_stopping_power()
    for voxel in [(0, 0, 0), (2, 3, 4), (4, 6, 5)]:
        stuff = grid.materials[grid.material_index[voxel]].replace(density_g_cm3=float(grid.density_g_cm3[voxel]))
        assert float(found[voxel]) == pytest.approx(relative_stopping_power(stuff), rel=1e-5)


def test_cropping_keeps_voxels_and_lattice(grid):
    part = grid.crop((-9.2, 6.4, 4.0), (-6.0, 11.0, 8.0))
    offset = part.offset_in(grid)
    assert offset == (1, 1, 1)
    whole = grid.density_g_cm3[tuple(slice(a, a + n) for a, n in zip(offset, part.shape, strict=True))]
    assert np.array_equal(part.density_g_cm3, whole)
    tight = grid.crop(structure="blob")
    assert tight.shape == (3, 3, 2)
    assert tight.volume_cm3("Blob") == pytest.approx(grid.volume_cm3("Blob"))
    wide = grid.crop(structure="blob", margin_mm=100.0)
    assert wide.same_geometry(grid)
    with pytest.raises(GridError, match="holds no voxel centre"):
        grid.crop((50, 50, 50), (60, 60, 60))


def test_lattices_are_compared(grid):
    assert grid.same_geometry(grid.replace(origin_mm=(-10.0, 5.0, 2.00005)))
    assert not grid.same_geometry(grid.replace(origin_mm=(-10.0, 5.0, 2.001)))
    assert not grid.same_geometry(grid.crop(structure="blob"))
    with pytest.raises(GridError, match="different lattices"):
        grid.replace(origin_mm=(-9.6, 5.0, 2.0)).offset_in(grid)


@pytest.mark.naive
@pytest.mark.parametrize("spacing", [(2.0, 3.0, 4.0), (0.7, 1.1, 3.3), (1.3, 0.5, 2.0)])
def test_resampling_equals_the_readable_version(grid, spacing):
    ours = grid.resample(spacing)
    old, new = grid.spacing_mm[::-1], spacing[::-1]
    assert ours.density_g_cm3 == pytest.approx(averaged_by_overlap(grid.density_g_cm3, old, new), rel=1e-5)
    assert np.array_equal(ours.material_index, largest_share(grid.material_index, old, new, 3))
    assert ours.structures["Blob"] == pytest.approx(
        averaged_by_overlap(grid.structures["Blob"], old, new), rel=1e-5, abs=1e-7
    )


@pytest.mark.parametrize("spacing", [(2.0, 3.0, 4.0), (0.7, 1.1, 3.3), 1.0, 50.0])
def test_resampling_keeps_mass_volume_and_corner(grid, spacing):
    ours = grid.resample(spacing)
    mass = grid.density_g_cm3.sum(dtype=float) * grid.voxel_volume_mm3
    assert ours.density_g_cm3.sum(dtype=float) * ours.voxel_volume_mm3 == pytest.approx(mass, rel=1e-6)
    assert ours.volume_cm3("Blob") == pytest.approx(grid.volume_cm3("Blob"), rel=1e-6)
    assert ours.lower_mm == pytest.approx(grid.lower_mm)


def test_resampling_to_the_same_spacing_changes_nothing(grid):
    ours = grid.resample(grid.spacing_mm)
    assert ours.same_geometry(grid)
    assert np.array_equal(ours.density_g_cm3, grid.density_g_cm3)
    assert np.array_equal(ours.material_index, grid.material_index)


def test_absurd_sizes_are_refused_before_memory_is_taken(grid):
    with pytest.raises(SizeError, match="GB"):
        grid.resample(0.0005)
    for bad in (0.0, -1.0, float("nan"), (1, 2)):
        with pytest.raises(GridError):
            grid.resample(bad)


def test_the_body_is_the_largest_part_with_its_cavities_filled():
    density = np.zeros((6, 30, 30), dtype=np.float32)
    density[:, 5:25, 5:20] = 1.0
    density[1:5, 10:15, 8:12] = 0.2  # a lung
    density[:, 5:10, 25:29] = 1.0  # something beside
    body = np.zeros_like(density, dtype=bool)
    body[:, 5:25, 5:20] = True
    assert np.array_equal(outline_from_density(density), body)
    assert not outline_from_density(np.zeros((3, 3, 3))).any()


def test_the_opening_cuts_thin_bridges():
    density = np.zeros((3, 40, 40))
    density[:, 5:25, 5:35] = 1.0
    density[:, 25:30, 19:21] = 1.0  # a bridge two voxels wide
    density[:, 30:34, :] = 1.0  # a couch
    assert outline_from_density(density)[:, 31].any()
    assert not outline_from_density(density, opening_voxels=2)[:, 31].any()


def test_a_body_structure_wins_over_density(grid):
    mask = np.zeros(grid.shape, dtype=bool)
    mask[1:3] = True
    assert np.array_equal(grid.with_structure("hull", mask, role="body").body(), mask)
    assert np.array_equal(grid.with_structure("BODY", mask).body(), mask)


def test_spheres_are_added_and_must_touch_the_volume(grid):
    with_ball = grid.with_sphere("ball", (-7.5, 9.5, 6.0), 2.0)
    assert with_ball.volume_cm3("ball") == pytest.approx(4 / 3 * np.pi * 8 / 1000, rel=1e-2)  # 3 voxels across
    assert with_ball.role("ball") == "target"
    with pytest.raises(GridError, match="outside the volume"):
        grid.with_sphere("ball", (500, 0, 0), 2.0)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"spacing_mm": (1.0, 0.0, 1.0)}, "spacing"),
        ({"spacing_mm": (1.0, 1.0)}, "spacing"),
        ({"origin_mm": (0.0, float("nan"), 0.0)}, "origin"),
        ({"density_g_cm3": np.full((5, 7, 6), np.nan)}, "not a number"),
        ({"density_g_cm3": np.full((5, 7, 6), -1.0)}, "negative"),
        ({"density_g_cm3": np.ones((5, 7))}, "shape"),
        ({"material_index": np.full((5, 7, 6), 9)}, "indices"),
        ({"material_index": np.zeros((5, 7, 7), dtype=int)}, "indices"),
        ({"structures": {"x": np.ones((5, 7, 7))}}, "'x' has shape"),
        ({"structures": {"x": np.full((5, 7, 6), 2.0)}}, "0 to 1"),
        ({"structures": {"x": np.full((5, 7, 6), np.nan)}}, "0 to 1"),
        ({"roles": {"Blob": "tumour"}}, "role"),
        ({"hu": np.zeros((1, 1, 1), dtype=np.int16)}, "HU"),
    ],
)
def test_parts_that_do_not_fit_are_refused(grid, change, message):
    with pytest.raises((GridError, UnknownNameError), match=message):
        grid.replace(**change)


def test_empty_structures_have_no_centre(grid):
    empty = grid.with_structure("none", np.zeros(grid.shape))
    assert empty.volume_cm3("none") == 0.0
    for ask in (empty.centroid_mm, empty.bounds_mm):
        with pytest.raises(GridError, match="covers no voxel"):
            ask("none")


def test_coverages_store_boxes_and_give_arrays(rng):
    dense = np.zeros((4, 5, 6), dtype=np.float32)
    dense[1:3, 2:4, 0:5] = rng.uniform(0.1, 1, (2, 2, 5))
    stored = Coverages((4, 5, 6), {"a": dense, "b": dense > 0.5})
    assert stored.boxed("a").values.shape == (2, 2, 5)
    assert np.array_equal(stored["a"], dense)
    assert stored["b"].dtype == np.float32
    assert list(stored) == ["a", "b"]
    with pytest.raises(GridError, match="spans voxels"):
        Coverages((4, 5, 6), {"c": BoxedCoverage((3, 0, 0), np.ones((2, 1, 1), dtype=np.float32))})


def test_printing_shows_no_arrays_and_no_identifiers(grid):
    text = repr(grid.replace(frame_of_reference_uid="2.25.5", dicom_reference=("secret",)))
    assert len(text) < 300
    assert "2.25.5" not in text
    assert "secret" not in text
