"""One field on its lattices: what is kept, what is symmetric, what comes out at the edges of sense."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from dosekit.errors import GeometryWarning, SizeError
from dosekit.maps.fields import Field, spot_lattice
from dosekit.maps.pencils import field_pencils
from dosekit.maps.rays import matter_of, plane_lattice, ray_spacing_mm, trace
from dosekit.maps.tables import TARGETS, step_tables

from invented_fields import BEAM, box_grid, invented_library, mixed_grid

KEYS = {
    "primary": ("core", "scattered"),
    "stops": ("core_stops", "scattered_stops"),
    "in_flight": ("in_flight_charged", "in_flight_neutral"),
    "decay": ("decay",),
    "contaminant_muon": ("contaminant_muon",),
    "contaminant_electron": ("contaminant_electron",),
}


def energies(field, grid, library):
    """Energy (MeV) or stops per voxel for each target."""
    pencils = field_pencils(field, matter_of(grid), library)
    fine, coarse = pencils.maps(field.weights)
    out = np.zeros((len(TARGETS), int(np.prod(grid.shape))))
    factor = np.full((len(TARGETS), len(grid.materials)), -float(np.prod(grid.spacing_mm)))
    reached = pencils.voxels()
    pencils.deposit(fine, coarse, reached, reached, factor=factor, rows=np.arange(len(TARGETS)), out=out)
    return out.reshape(len(TARGETS), *grid.shape)


@pytest.mark.parametrize(("gantry", "couch"), [(0, 0), (90, 0), (33, 0), (20, 60)])
@pytest.mark.parametrize("distance", [None, 1000.0])
def test_energy_arrives_in_voxels(gantry, couch, distance):
    """All that the library leaves in the depth of the box is found in its voxels, for any direction."""
    grid = box_grid((80, 80, 80), 3.0)
    library = invented_library(BEAM, [0.0, 20.0])
    field = Field("one", BEAM, (0, 0, 0), gantry, couch, [[0, 0], [6, -4]], [0, 20], [[1, 2], [0.5, 0]], distance)
    found = energies(field, grid, library).sum(axis=(1, 2, 3))
    per_step = field.weights.sum(axis=0) * 1e9
    for n, name in enumerate(TARGETS[:4]):
        wanted = sum((library.quantities[key].sum(axis=1) * per_step).sum() for key in KEYS[name])
        # the box has no room for the widest, longest tails; stops and core end inside it
        assert found[n] == pytest.approx(wanted, rel=2e-3 if name in ("primary", "stops") else 2e-2), name


@pytest.mark.parametrize(("first", "second", "flip"), [(0, 180, (1, 2)), (90, 270, (1, 2))])
def test_opposed_fields_are_mirror_images(first, second, flip, rng):
    """Turning volume and beam by half a turn about z gives the same dose, turned."""
    grid = mixed_grid((13, 30, 28), rng, spacing_mm=(2.5, 2.0, 3.0))
    turned = grid.replace(
        density_g_cm3=np.flip(grid.density_g_cm3, flip).copy(), material_index=np.flip(grid.material_index, flip).copy()
    )
    library = invented_library(BEAM, [0.0, 30.0])
    spots, weights = [[0, 0], [5, 3], [-7, 2]], rng.uniform(0, 1, (3, 2))
    make = lambda gantry: Field("f", BEAM, (0, 0, 0), gantry, 0, spots, [0, 30], weights)  # noqa: E731
    one = energies(make(first), grid, library)
    other = energies(make(second), turned, library)
    scale = one.max(axis=(1, 2, 3), keepdims=True)
    np.testing.assert_allclose(np.flip(other, (2, 3)) / scale, one / scale, atol=1e-6)
    assert np.all(scale > 0.0)


def test_whole_turns_of_volume_and_beam_together(rng):
    """A quarter turn of everything about z changes nothing."""
    grid = mixed_grid((10, 24, 24), rng, spacing_mm=(2.0, 2.0, 3.0))
    quarter = lambda a: np.rot90(a, k=-1, axes=(-2, -1)).copy()  # noqa: E731  # (x, y) -> (-y, x) in LPS
    turned = grid.replace(density_g_cm3=quarter(grid.density_g_cm3), material_index=quarter(grid.material_index))
    library = invented_library(BEAM, [10.0])
    one = energies(Field("f", BEAM, (0, 0, 0), 0, 0, [[3, 1]], [10]), grid, library)
    other = energies(Field("f", BEAM, (0, 0, 0), 90, 0, [[3, 1]], [10]), turned, library)
    np.testing.assert_allclose(other, quarter(one), atol=1e-6 * one.max())


def test_water_equivalent_path_through_slabs():
    """Sum of thickness times relative stopping power, to the sampling of a voxel."""
    grid = box_grid((5, 60, 5), 2.0)
    density = grid.density_g_cm3.copy()
    density[:, 10:25] = 0.3
    density[:, 25:30] = 1.9
    grid = grid.replace(density_g_cm3=density)
    matter = matter_of(grid)
    planes = plane_lattice(Field("f", BEAM, (0, 0, 0), 0).frame(), matter, spot_sigma_mm=4.0)
    rays = trace(planes, matter, planes.nodes(-2, 2, 0), planes.nodes(-2, 2, 1))
    wanted = 2.0 * (10 + 0.3 * 15 + 1.9 * 5 + 30)
    np.testing.assert_allclose(rays.wet_mm[-1], wanted, rtol=1e-6)
    assert np.all(np.diff(rays.wet_mm, axis=0) >= 0.0)
    oblique = Field("f", BEAM, (0, 0, 0), 3.0, source_distance_mm=2000.0).frame()
    slanted = plane_lattice(oblique, matter, spot_sigma_mm=4.0)
    path = trace(slanted, matter, np.array([0.0, 1.0]), np.array([0.0, 1.0])).wet_mm[-1, 0, 0]
    assert path == pytest.approx(wanted / np.cos(np.radians(3.0)), rel=2e-3)


def test_sigma_in_water_follows_fermi_eyges():
    """The lateral sigma of a single spot's core is the in-air size and the scattering, added in quadrature."""
    from dosekit.beams.scattering import fermi_eyges_moments

    grid = box_grid((60, 60, 60), 2.0)
    library = invented_library(BEAM, [0.0])
    for key in library.quantities:
        if not key.startswith("core"):
            library.quantities[key] = library.quantities[key] * 0.0
    field = Field("f", BEAM, (0, 0, 0), 0, 0, [[0, 0]])
    pencils = field_pencils(field, matter_of(grid), library)
    core, _ = pencils.maps(field.weights)  # the tail of single scatterings is not in it
    x = pencils.fine.u_mm
    for plane in (6, 21, 31):
        profile = core[plane, :, :, 0].sum(axis=0)
        sigma = np.sqrt((profile * x**2).sum() / profile.sum())
        depth = pencils.planes.w_mm[plane] - pencils.surface_mm
        wanted = np.sqrt(fermi_eyges_moments("pi-", "water", BEAM.kinetic_energy_mev, depth_mm=depth, sigma_mm=4.0)[2])
        assert sigma == pytest.approx(float(wanted), rel=0.01)


def test_converging_and_diverging_beams_have_their_size():
    """In near vacuum, sigma follows position, angle and correlation from the surface on."""
    grid = box_grid((40, 60, 40), 2.0)
    density = np.full(grid.shape, 1e-4, dtype=np.float32)
    density[:, 0] = 1.0
    grid = grid.replace(density_g_cm3=density)
    x = grid.centres_mm("x")
    for correlation in (-0.9, 0.0, 0.9):
        beam = BEAM.replace(spot_sigma_mm=(5.0, 4.0), divergence_sigma_mrad=(40.0, 0.0), correlation=correlation)
        library = invented_library(beam, [0.0])
        for key in library.quantities:
            if key != "core":
                library.quantities[key] = library.quantities[key] * 0.0
        library.kinetic_energy_mev = library.kinetic_energy_mev * 1e3  # stiff: no scattering
        core = energies(Field("f", beam, (0, 0, 0), 0, 0, [[0, 0]]), grid, library)[0]
        for row in (1, 30, 58):
            profile = core[:, row].sum(axis=0)
            z = 2.0 * row + 1.0
            wanted = np.sqrt(25.0 + 2 * correlation * 5.0 * 0.04 * z + (0.04 * z) ** 2)
            assert np.sqrt((profile * x**2).sum() / profile.sum()) == pytest.approx(wanted, rel=0.02)


@pytest.mark.parametrize(
    ("isocentre", "gantry", "distance", "warns"),
    [
        ((0, 500, 0), 90, None, True),  # misses
        ((60, 0, 0), 0, None, False),  # grazes the edge
        ((0, 0, 0), 45, None, False),  # through the edges of the box
        ((0, 0, 0), 0, 30.0, True),  # the source lies inside
        ((0, -500, 0), 180, 400.0, True),  # the volume lies behind the source
    ],
)
def test_edges_of_sense(isocentre, gantry, distance, warns):
    grid = box_grid((20, 40, 60), 2.0)
    field = Field("edge", BEAM, isocentre, gantry, 0, [[0, 0]], [0.0], source_distance_mm=distance)
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        found = energies(field, grid, invented_library(BEAM, [0.0]))
    assert np.all(np.isfinite(found))
    assert np.all(found >= 0.0)
    assert any(issubclass(one.category, GeometryWarning) for one in caught) == warns
    if isocentre == (0, 500, 0):
        assert not found.any()


def test_a_beam_that_stops_in_air_or_leaves_is_finite():
    grid = box_grid((20, 40, 20), 2.0)
    density = grid.density_g_cm3.copy()
    density[:, 30:] = 0.0
    grid = grid.replace(density_g_cm3=density)
    found = energies(Field("f", BEAM, (0, 0, 0), 0), grid, invented_library(BEAM, [0.0]))
    assert np.all(np.isfinite(found))
    assert found[0].sum() > 0.0
    assert not found[:, :, 30:].any()


def test_linear_in_the_weights(rng):
    grid = mixed_grid((8, 20, 12), rng)
    library = invented_library(BEAM, [0.0, 15.0])
    make = lambda weights: Field("f", BEAM, (1, 2, 3), 25, 0, [[0, 0], [8, 0]], [0, 15], weights)  # noqa: E731
    a, b = rng.uniform(0, 1, (2, 2, 2))
    whole = energies(make(2 * a + b), grid, library)
    parts = 2 * energies(make(a), grid, library) + energies(make(b), grid, library)
    np.testing.assert_allclose(whole, parts, atol=1e-10 * whole.max())


def test_same_bits_for_any_number_of_threads(rng):
    import numba

    grid = mixed_grid((8, 20, 12), rng)
    library = invented_library(BEAM, [0.0, 15.0])
    field = Field("f", BEAM, (1, 2, 3), 25, 10, spot_lattice(10, 5), [0, 15])
    most = numba.get_num_threads()
    results = []
    try:
        for threads in {1, most}:
            numba.set_num_threads(threads)
            results.append(energies(field, grid, library))
    finally:
        numba.set_num_threads(most)
    assert all(np.array_equal(results[0], other) for other in results)


def test_maps_have_an_exact_transpose(rng):
    grid = mixed_grid((9, 22, 14), rng)
    beam = BEAM.replace(range_shifter="water", range_shifter_gap_mm=40.0, divergence_sigma_mrad=5.0)
    field = Field("f", beam, (1, 2, 3), 35, 20, [[0, 0], [6, 1], [-9, 4]], [0, 12, 30], source_distance_mm=700.0)
    pencils = field_pencils(field, matter_of(grid), invented_library(beam, [0, 12, 30]))
    weights = rng.normal(size=field.shape)
    fine, coarse = pencils.maps(weights)
    back_fine, back_coarse = rng.normal(size=fine.shape), rng.normal(size=coarse.shape)
    left = (fine * back_fine).sum() + (coarse * back_coarse).sum()
    right = (weights * pencils.weights_of(back_fine, back_coarse)).sum()
    assert left == pytest.approx(right, rel=1e-10)
    voxels = pencils.voxels()
    rows, factor = np.arange(len(TARGETS)), rng.uniform(-1, 1, (len(TARGETS), len(grid.materials)))
    out = np.zeros((len(TARGETS), int(np.prod(grid.shape))))
    pencils.deposit(fine, coarse, voxels, voxels, factor=factor, rows=rows, out=out)
    values = rng.normal(size=out.shape)
    to_fine, to_coarse = pencils.gather(values, voxels, voxels, factor=factor, rows=rows)
    right = (to_fine * fine).sum() + (to_coarse * coarse).sum()
    assert (values * out).sum() == pytest.approx(right, rel=1e-10)


def test_tables_keep_every_quantity():
    """What the library leaves at a depth is in the core or in one of the broad parts, and nothing else is."""
    library = invented_library(BEAM, [0.0, 25.0])
    tables = step_tables(library, BEAM)
    assert np.all(np.diff(tables.part_sigma_mm) <= 0.0)
    place = np.clip((np.arange(4 * len(library.depth_mm)) + 0.5) / 4.0 - 0.5, 0.0, len(library.depth_mm) - 1.0)
    for n, name in enumerate(TARGETS):
        broad = tables.broad[:-1, :, tables.part_target == n].sum(axis=2)
        for k in range(2):
            narrow = tables.narrow[:-1, n, k] if n < 2 else 0.0 * library.depth_mm
            wanted = sum(library.quantities[key][k] for key in KEYS[name])
            found = np.interp(place, np.arange(len(narrow)), narrow) + broad[:, k]
            read = np.interp(place, np.arange(len(wanted)), wanted)
            np.testing.assert_allclose(found, read, rtol=1e-9, atol=1e-9 * max(wanted.max(), 1e-30))
            assert narrow.min() >= 0.0


def test_ray_spacing_divides_or_multiplies_the_voxel():
    for sigma in (0.5, 2.0, 5.0, 20.0):
        for voxel in (0.7, 1.0, 2.0, 3.0, 5.0):
            spacing = ray_spacing_mm(sigma, voxel)
            ratio = max(spacing / voxel, voxel / spacing)
            assert ratio == pytest.approx(round(ratio))
            assert spacing <= max(2.5, 0.8)


def test_absurd_fields_are_refused_before_memory_is_taken():
    grid = box_grid((200, 200, 200), 2.0)
    spots = np.stack(np.meshgrid(np.linspace(-20000, 20000, 30), np.linspace(-20000, 20000, 30)), -1).reshape(-1, 2)
    with pytest.raises(SizeError):
        field_pencils(Field("wide", BEAM, (0, 0, 0), 0, 0, spots), matter_of(grid), invented_library(BEAM, [0.0]))


def test_memory_is_what_the_formula_says(rng):
    """No more than stated, and not far less, for a field of some size."""
    import tracemalloc

    import numba

    from dosekit.maps.loops import field_bytes

    grid = box_grid((30, 60, 30), 2.0)
    field = Field("f", BEAM, (0, 0, 0), 30, 0, spot_lattice(15, 5), np.linspace(0, 40, 12))
    pencils = field_pencils(field, matter_of(grid), invented_library(BEAM, field.shift_mm))
    pencils.maps(field.weights)  # nothing is compiled while memory is counted
    work = pencils.loops
    stated = field_bytes(
        planes=len(pencils.planes.w_mm), rays=work.slant.size, nodes=pencils.fine.nodes,
        coarse_nodes=pencils.coarse.nodes, steps=field.shape[1], parts=work.broad.shape[2], rungs=work.rungs,
        gathered=len(work.row) * work.coarse_size[1], threads=numba.get_num_threads(),
    )  # fmt: skip
    fine, coarse = pencils.maps(field.weights)
    pencils.weights_of(fine, coarse)
    del fine, coarse
    rays = 8.0 * 2.0 * work.wet.size  # these are there already
    for run in (lambda: pencils.maps(field.weights), lambda: pencils.weights_of(*pencils._empty_maps())):
        tracemalloc.start()
        run()
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert 0.3 * stated < peak + rays <= stated
