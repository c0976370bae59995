"""The fold as a whole: transposes, dose grids, turned volumes, and what it says about odd fields."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.errors import GeometryWarning, GridError, InputError, UnknownNameError
from dosekit.maps.fields import Field, spot_lattice
from dosekit.maps.fold import fold
from dosekit.maps.operator import FoldOperator
from dosekit.maps.regrid import DoseGrid, overlap_matrices, share_by_overlap

from invented_fields import BEAM, box_grid, invented_library, mixed_grid

SHIFTS = [0.0, 20.0]
LIBRARIES = {"f": invented_library(BEAM, SHIFTS), "g": invented_library(BEAM, SHIFTS)}


def field(name="f", gantry=0.0, **more):
    settings = {"couch_deg": 0.0, "spots_mm": [[0, 0], [6, -4]], "shift_mm": SHIFTS, "weights": [[1, 2], [0.5, 0]]}
    return Field(name, BEAM, (0, 0, 0), gantry, **{**settings, **more})


@pytest.fixture
def mixed(rng):
    return mixed_grid((12, 20, 16), rng)


def test_operator_and_fold_agree(mixed):
    fields = [field(), field("g", 70.0)]
    dose = fold(fields, mixed, libraries=LIBRARIES)
    operator = FoldOperator(fields, mixed, libraries=LIBRARIES)
    weights = np.concatenate([one.weights.ravel() for one in fields])
    total = dose["dose"].sum("component").to_numpy().ravel()
    np.testing.assert_allclose(operator.matvec(weights), total, rtol=1e-5, atol=1e-6 * total.max())
    parts = operator.components(weights)
    for name in COMPONENTS:
        apart = dose["dose"].sel(component=name).to_numpy().ravel()
        np.testing.assert_allclose(parts[name], apart, rtol=1e-5, atol=1e-6 * total.max())


@pytest.mark.parametrize("case", range(3))
def test_adjoint_identity(case):
    """<A x, y> = <x, A^T y> for random vectors on random volumes, stars included."""
    rng = np.random.default_rng(1000 + case)
    grid = mixed_grid(tuple(rng.integers(9, 15, 3)), rng, spacing_mm=tuple(rng.uniform(2.0, 4.0, 3)))
    fields = [
        field(gantry=rng.uniform(0, 360), couch_deg=rng.uniform(-90, 90)),
        field("g", gantry=rng.uniform(0, 360), source_distance_mm=1200.0),
    ]
    chosen = rng.random(grid.shape) < 0.5
    factors = {name: rng.uniform(0.5, 3.0) for name in COMPONENTS}
    factors["primary"] = rng.uniform(0.5, 2.0, int(chosen.sum()))
    operator = FoldOperator(fields, grid, voxels=chosen, factors=factors, libraries=LIBRARIES)
    x, y = rng.normal(size=operator.shape[1]), rng.normal(size=operator.shape[0])
    forward, back = operator.matvec(x), operator.rmatvec(y)
    scale = np.linalg.norm(forward) * np.linalg.norm(y)
    assert abs(forward @ y - x @ back) < 1e-9 * scale
    assert forward @ y == pytest.approx(x @ back, rel=1e-6)


@pytest.mark.parametrize("gantry", [0.0, 33.0])
def test_operator_has_the_same_bits_for_any_number_of_threads(mixed, rng, gantry):
    """There and back, stars included, for fields along the axes and others."""
    import numba

    operator = FoldOperator(field(gantry=gantry), mixed, libraries=LIBRARIES)
    x, y = rng.uniform(0, 1, operator.shape[1]), rng.uniform(0, 1, operator.shape[0])
    most = numba.get_num_threads()
    results = []
    try:
        for threads in {1, most}:
            numba.set_num_threads(threads)
            results.append((operator.matvec(x), operator.rmatvec(y)))
    finally:
        numba.set_num_threads(most)
    for other in results[1:]:
        assert all(np.array_equal(a, b) for a, b in zip(results[0], other, strict=True))


def test_influence_matrix_is_the_operator(mixed, rng):
    operator = FoldOperator(field(), mixed, libraries=LIBRARIES, factors={"primary": 1.0, "in_flight": 2.0})
    matrix = operator.influence_matrix()
    x = rng.uniform(0, 1, operator.shape[1])
    np.testing.assert_allclose(matrix @ x, operator.matvec(x), rtol=1e-10, atol=1e-12 * (matrix @ x).max())


def test_operator_refuses_what_it_cannot_know(mixed):
    with pytest.raises(UnknownNameError, match="primary"):
        FoldOperator(field(), mixed, libraries=LIBRARIES, factors={"primery": 1.0})
    with pytest.raises(InputError):
        FoldOperator(field(), mixed, libraries=LIBRARIES, voxels=[5, 3])
    with pytest.raises(UnknownNameError):
        fold(field(), mixed, libraries=LIBRARIES, dose_to="air")
    with pytest.raises(InputError):
        fold([], mixed)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_numbers_that_are_not_finite_are_refused(mixed, bad):
    operator = FoldOperator(field(), mixed, libraries=LIBRARIES)
    with pytest.raises(InputError, match="not finite"):
        operator.matvec(np.full(operator.shape[1], bad))
    with pytest.raises(InputError, match="not finite"):
        operator.rmatvec(np.full(operator.shape[0], bad))
    with pytest.raises(InputError, match="not finite"):
        field(weights=[[1, bad], [0, 0]])
    with pytest.raises(InputError, match="weight of -1"):
        fold(field(weights=[[1, -1], [0, 0]]), mixed, libraries=LIBRARIES)


@pytest.mark.parametrize("wanted", [2.0, (5.0, 3.0, 2.5), 7.0])
def test_energy_is_kept_on_another_lattice(mixed, wanted):
    """Dose times mass adds up to the same on any lattice that covers the volume."""
    own = fold(field(), mixed, libraries=LIBRARIES)
    other = fold(field(), mixed, libraries=LIBRARIES, dose_grid=wanted)
    lattice = DoseGrid(
        tuple(float(other[a][0]) for a in "xyz"),
        tuple(np.broadcast_to(np.array(wanted, float), 3).tolist()),
        other["stops"].shape,
    )
    mass = mixed.density_g_cm3 * np.prod(mixed.spacing_mm)
    new_mass = share_by_overlap(mass, overlap_matrices(lattice, mixed))
    assert new_mass.sum() == pytest.approx(mass.sum(), rel=1e-6)
    for name in COMPONENTS:
        before = float((own["dose"].sel(component=name).to_numpy().astype(float) * mass).sum())
        after = float((other["dose"].sel(component=name).to_numpy().astype(float) * new_mass).sum())
        assert after == pytest.approx(before, rel=1e-5)
    stops = float(own["stops"].to_numpy().astype(float).sum() * np.prod(mixed.spacing_mm))
    assert float(other["stops"].to_numpy().astype(float).sum() * np.prod(lattice.spacing_mm)) == pytest.approx(
        stops, rel=1e-5
    )


def test_a_part_of_the_volume_has_the_same_dose(mixed):
    own = fold(field(), mixed, libraries=LIBRARIES)
    part = DoseGrid(
        tuple(o + 2 * s for o, s in zip(mixed.origin_mm, mixed.spacing_mm, strict=True)), mixed.spacing_mm, (3, 4, 5)
    )
    inner = fold(field(), mixed, libraries=LIBRARIES, dose_grid=part)
    np.testing.assert_allclose(inner["dose"].to_numpy(), own["dose"].to_numpy()[:, 2:5, 2:6, 2:7], rtol=1e-5, atol=1e-9)


def test_dose_to_water_is_dose_to_medium_by_the_ratio_of_stopping_powers(mixed):
    from dosekit.beams.stopping import relative_stopping_power

    medium = fold(field(), mixed, libraries=LIBRARIES)["dose"].to_numpy()
    water = fold(field(), mixed, libraries=LIBRARIES, dose_to="water")["dose"].to_numpy()
    for n, stuff in enumerate(mixed.materials):
        here = mixed.material_index == n
        ratio = stuff.density_g_cm3 / relative_stopping_power(stuff)
        np.testing.assert_allclose(water[:, here], medium[:, here] * ratio, rtol=1e-4, atol=1e-12)


def test_total_only(mixed):
    apart = fold(field(), mixed, libraries=LIBRARIES)
    total = fold(field(), mixed, libraries=LIBRARIES, components=False)
    assert total["component"].to_numpy().tolist() == ["total"]
    np.testing.assert_allclose(total["dose"][0], apart["dose"].sum("component"), rtol=1e-5)
    assert total.attrs["caution"].startswith("RESEARCH ONLY")


def test_a_missing_field_gives_zero_and_says_so(mixed):
    with pytest.warns(GeometryWarning, match="meets nothing"):
        dose = fold(field().replace(isocentre_mm=(0, 500, 500)), mixed, libraries=LIBRARIES)
    assert not dose["dose"].any()


def test_bad_dose_grids_are_refused():
    with pytest.raises(GridError):
        DoseGrid((0, 0, 0), (0, 1, 1), (2, 2, 2))
    with pytest.raises(GridError):
        fold(field(), box_grid((4, 4, 4)), libraries=LIBRARIES, dose_grid=-1.0)


@pytest.mark.slow
@pytest.mark.parametrize(("gantry", "couch"), [(40.0, 0.0), (0.0, 35.0), (25.0, 50.0)])
def test_an_oblique_field_on_a_cube_is_a_straight_field_on_the_turned_cube(gantry, couch):
    """Within 2 % of the maximum or 1 mm, for beam energy and stops together with what they carry."""
    edge, half, spacing = 70.0, 30, 2.0
    straight = Field("f", BEAM, (0, 0, 0), 0.0, 0.0, spot_lattice(8, 4), [10.0])
    oblique = straight.replace(gantry_deg=gantry, couch_deg=couch)
    axes = oblique.frame().rotation  # rows: u, v, direction
    base = straight.frame().rotation
    turn = base.T @ axes  # patient points of the oblique world to those of the straight one

    def cube(rotation):
        """Cube of water with a bone block inside, turned; voxels by the share of 4 x 4 x 4 points inside."""
        from dosekit.basis.materials import material
        from dosekit.grids.voxels import VoxelGrid

        n, sub = 2 * half + 1, 4
        fine = (np.arange(n * sub) - 0.5 * (n * sub - 1)) * spacing / sub
        z, y, x = np.meshgrid(fine, fine, fine, indexing="ij")
        local = np.tensordot(rotation, np.stack([x, y, z]), axes=1)
        inside = np.all(np.abs(local) <= 0.5 * edge, axis=0)
        dense = inside & (local[1] > -20) & (local[1] < -8) & (local[0] > 0) & (local[0] < 30)
        density = np.where(dense, 1.4, np.where(inside, 1.0, 0.0)).astype(np.float32)
        share = density.reshape(n, sub, n, sub, n, sub).mean(axis=(1, 3, 5))
        origin = (-half * spacing,) * 3
        return VoxelGrid(origin, (spacing,) * 3, share, np.zeros(share.shape, np.uint16), (material("water"),))

    library = {"f": invented_library(BEAM, [10.0])}
    reference = fold(straight, cube(np.eye(3)), libraries=library, dose_to="water")["dose"].sum("component").to_numpy()
    turned = fold(oblique, cube(turn), libraries=library, dose_to="water")["dose"].sum("component").to_numpy()
    from scipy.ndimage import map_coordinates

    centres = (np.arange(2 * half + 1) - half) * spacing
    z, y, x = np.meshgrid(centres, centres, centres, indexing="ij")
    inner = np.max(np.abs([x, y, z]), axis=0) < 0.5 * edge - 4.0
    points = np.stack([x[inner], y[inner], z[inner]])
    wanted = reference[inner]
    best = np.full(len(wanted), np.inf)
    steps = np.stack(np.meshgrid(*[[-1, 0, 1]] * 3), -1).reshape(-1, 3)
    for shift in steps / np.maximum(np.linalg.norm(steps, axis=1, keepdims=True), 1.0):  # none, and 1 mm each way
        place = (turn.T @ (points + shift[:, None])) / spacing + half
        found = map_coordinates(turned, place[::-1], order=3)
        best = np.minimum(best, np.abs(found - wanted))
    assert best.max() < 0.02 * reference.max()
