"""The quick stand-in of the fold: depth, energy, and likeness to the fold itself."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.basis.materials import material
from dosekit.beams.beam import Beam
from dosekit.depths.library import depth_library
from dosekit.errors import InputError
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.fields import Field, spot_lattice
from dosekit.modulation.surrogates import Pencils, pencil_matrices, water_depth_mm

ALL = dict.fromkeys(COMPONENTS, 1.0)
NARROW = {name: 1.0 for name in COMPONENTS if name not in ("star_neutron", "star_photon", "in_flight", "decay")}


@pytest.fixture(scope="module")
def tank():
    shape = (25, 50, 25)
    return VoxelGrid(
        origin_mm=(-60.0, 2.5, -60.0),
        spacing_mm=(5.0, 5.0, 5.0),
        density_g_cm3=np.ones(shape, dtype=np.float32),
        material_index=np.zeros(shape, dtype=np.uint16),
        materials=(material("water"),),
        structures={},
        name="tank",
    )


@pytest.fixture(scope="module")
def field():
    beam = Beam("pi-", momentum_mev_c=165, momentum_sigma=0.02, spot_sigma_mm=5.0)
    return Field("one", beam, isocentre_mm=(0.0, 100.0, 0.0), gantry_deg=0.0, spots_mm=spot_lattice(12.0, 6.0),
                 shift_mm=np.array([0.0, 20.0]))  # fmt: skip


@pytest.fixture(scope="module")
def library(field):
    from dosekit.depths.library import mean_projected_range_mm

    full = mean_projected_range_mm("pi-", 165.0)
    return depth_library(field.beam, full - field.shift_mm)


def test_depth_in_water_is_the_way(tank, field):
    places = [np.ravel_multi_index((12, row, 12), tank.shape) for row in (0, 10, 40)]
    np.testing.assert_allclose(water_depth_mm(field, tank, places), [2.5, 52.5, 202.5], atol=1.1)


def test_divergent_rays_are_longer(tank, field):
    place = np.ravel_multi_index((12, 30, 24), tank.shape)
    fan = field.replace(source_distance_mm=400.0)
    straight, slanted = (float(water_depth_mm(one, tank, [place])[0]) for one in (field, fan))
    # the ray to x = 60 mm, w = 52.5 mm from 400 mm before the isocentre
    assert slanted / straight == pytest.approx(np.hypot(60.0, 452.5) / 452.5, rel=0.02)


def test_lateral_sum_is_the_depth_curve(tank, field, library):
    """A spot's dose summed over a plane is the broad-field dose of one particle."""
    row = 20
    plane = [np.ravel_multi_index((k, row, i), tank.shape) for k in range(25) for i in range(25)]
    matrix = pencil_matrices([Pencils(field, library)], tank, np.array(plane), factors=[NARROW])[0]
    middle = len(field.spots_mm) // 2
    weights = np.zeros(field.shape)
    weights[middle, 0] = 1.0
    ours = float(np.sum(matrix @ weights.ravel())) * 25.0
    curve = library.depth_dose()[0]
    wanted = sum(np.interp(102.5, library.depth_mm, curve[COMPONENTS.index(name)]) for name in NARROW)
    assert ours == pytest.approx(160.2176634 * wanted, rel=0.02)


def test_factors_act_by_component(tank, field, library):
    places = np.array([np.ravel_multi_index((12, row, 12), tank.shape) for row in (5, 20, 30)])
    parts = [pencil_matrices([Pencils(field, library)], tank, places, factors=[{name: 1.0}])[0] for name in NARROW]
    whole, doubled = pencil_matrices(
        [Pencils(field, library)], tank, places, factors=[NARROW, {name: np.array([2.0, 2.0, 2.0]) for name in NARROW}]
    )
    vector = np.ones(int(np.prod(field.shape)))
    np.testing.assert_allclose(sum(part @ vector for part in parts), whole @ vector, rtol=5e-3)
    np.testing.assert_allclose(doubled @ vector, 2.0 * (whole @ vector), rtol=1e-12)


@pytest.mark.slow
def test_like_the_fold(tank, field, library):
    from dosekit.maps.operator import FoldOperator

    z, y, x = (tank.centres_mm(axis) for axis in "zyx")
    near = (np.abs(z)[:, None, None] < 25) & (y[None, :, None] < 190) & (np.abs(x)[None, None, :] < 25)
    places = np.flatnonzero(np.broadcast_to(near, tank.shape))
    operator = FoldOperator([field], tank, voxels=places, libraries={"one": library})
    vector = np.ones(operator.shape[1])
    exact = operator @ vector
    quick = pencil_matrices([Pencils(field, library)], tank, places, factors=[ALL])[0] @ vector
    assert np.corrcoef(exact, quick)[0, 1] > 0.97
    high = exact > 0.5 * exact.max()
    assert np.mean(quick[high]) == pytest.approx(np.mean(exact[high]), rel=0.15)


def test_other_library_is_refused(tank, field, library):
    with pytest.raises(InputError, match="steps"):
        Pencils(field.replace(shift_mm=np.zeros(1), weights=None), library)


def test_an_error_of_range_is_a_longer_way(tank, field, library):
    """Depths times 1.1 everywhere are the depths 1.1 times as far down the axis."""
    near = np.array([np.ravel_multi_index((12, row, 12), tank.shape) for row in (4, 14, 24)])
    depth = water_depth_mm(field, tank, near)
    pencils = Pencils(field, library, depth)
    other = Pencils(field, library, depth * 1.1)
    vector = np.ones(int(np.prod(field.shape)))
    longer = pencil_matrices([pencils], tank, near, factors=[NARROW], range_factor=1.1)[0] @ vector
    np.testing.assert_allclose(longer, pencil_matrices([other], tank, near, factors=[NARROW])[0] @ vector, rtol=1e-12)
    assert not np.allclose(longer, pencil_matrices([pencils], tank, near, factors=[NARROW])[0] @ vector, rtol=1e-3)


def test_an_error_of_position_moves_the_dose(tank, field, library):
    """The isocentre one voxel to +x: the dose one voxel to +x, in a uniform medium."""
    near = np.array([np.ravel_multi_index((12, row, 12), tank.shape) for row in (4, 14, 24)])
    vector = np.zeros(field.shape)
    vector[3, 0] = 1.0
    here = pencil_matrices([Pencils(field, library)], tank, near, factors=[NARROW])[0] @ vector.ravel()
    moved = pencil_matrices([Pencils(field, library)], tank, near + 1, factors=[NARROW], moved_mm=(5.0, 0.0, 0.0))[0]
    np.testing.assert_allclose(moved @ vector.ravel(), here, rtol=1e-6)


def test_fields_follow_one_another_in_the_columns(tank, field, library):
    near = np.array([np.ravel_multi_index((12, row, 12), tank.shape) for row in (4, 14, 24)])
    side = field.replace(name="two", gantry_deg=90.0)
    both = pencil_matrices([Pencils(field, library), Pencils(side, library)], tank, near, factors=[NARROW])[0]
    count = int(np.prod(field.shape))
    for place, one in enumerate((field, side)):
        vector = np.zeros(2 * count)
        vector[place * count : (place + 1) * count] = 1.0
        alone = pencil_matrices([Pencils(one, library)], tank, near, factors=[NARROW])[0]
        np.testing.assert_allclose(both @ vector, alone @ np.ones(count), rtol=1e-12)


def test_more_than_fits_into_memory_is_refused(tank, field, library, monkeypatch):
    from dosekit.errors import SizeError
    from dosekit.grids import memory

    monkeypatch.setattr(memory, "allowed_gb", lambda: 1e-6)
    near = np.array([np.ravel_multi_index((12, row, 12), tank.shape) for row in range(30)])
    with pytest.raises(SizeError, match="stand-in"):
        pencil_matrices([Pencils(field, library)], tank, near, factors=[NARROW])
