"""Phantoms: what ships, how it is drawn, and what a file may say."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dosekit.errors import GridError, InputError, MaterialError, SizeError, UnknownNameError
from dosekit.grids.phantom_file import parse_phantom
from dosekit.grids.phantoms import build_phantom, phantom, phantom_folder, phantom_names
from dosekit.grids.shapes import Box, Cylinder, Ellipsoid, Slab, coverage_of

from naive import share_inside


@pytest.mark.parametrize("name", phantom_names())
def test_every_phantom_that_ships_is_whole(name):
    grid = phantom(name)
    roles = set(grid.roles.values())
    assert {"target", "organ_at_risk", "body"} <= roles
    assert grid.name == name
    body = grid.body()
    for structure in grid.structures:
        assert grid.volume_cm3(structure) > 1.0
    target = next(s for s, role in grid.roles.items() if role == "target")
    assert np.all(body[grid.structures[target] > 0.5])
    assert 20.0 < grid.volume_cm3(target) < 300.0
    assert grid.source["sha256"]


def test_at_least_four_ship_and_the_usual_ones_are_among_them():
    assert {"water_tank", "slab_stack", "torso", "head", "bone_step"} <= set(phantom_names())


@pytest.mark.parametrize("name", ["torso", "head"])
def test_organs_keep_their_volume_at_another_spacing(name):
    fine, coarse = phantom(name, 3.0), phantom(name, 5.0)
    for structure in fine.structures:
        assert coarse.volume_cm3(structure) == pytest.approx(fine.volume_cm3(structure), rel=0.01), structure


def test_the_slab_stack_has_its_slabs():
    grid = phantom("slab_stack")
    column = grid.density_g_cm3[50, :, 50]
    depth = grid.centres_mm("y")
    for low, high, density in [(0, 50, 1.05), (50, 70, 1.92), (70, 150, 0.30), (150, 400, 1.0)]:
        inside = (depth > low) & (depth < high)
        assert column[inside] == pytest.approx(density)
        assert inside.sum() * 2 == high - low
    names = {grid.materials[i].name for i in np.unique(grid.material_index)}
    assert names == {"muscle_skeletal", "bone_cortical", "lung_tissue", "water"}


@pytest.mark.naive
@pytest.mark.parametrize(
    ("drawn", "inside"),
    [
        (Box((-1.2, 0.3, -2.0), (2.1, 2.9, 0.7)), lambda x, y, z: -1.2 < x < 2.1 and 0.3 < y < 2.9 and -2.0 < z < 0.7),
        (Slab(1, -0.4, 1.7), lambda x, y, z: -0.4 < y < 1.7),
        (
            Ellipsoid((0.2, -0.3, 0.4), (2.5, 1.9, 3.1)),
            lambda x, y, z: ((x - 0.2) / 2.5) ** 2 + ((y + 0.3) / 1.9) ** 2 + ((z - 0.4) / 3.1) ** 2 < 1,
        ),
        (
            Cylinder(0, (0.2, -0.3, 0.4), (1.9, 2.4), 3.3),
            lambda x, y, z: abs(x - 0.2) < 1.65 and ((y + 0.3) / 1.9) ** 2 + ((z - 0.4) / 2.4) ** 2 < 1,
        ),
        (
            Cylinder(1, (0.2, -0.3, 0.4), (1.9, 2.4), 3.3),
            lambda x, y, z: abs(y + 0.3) < 1.65 and ((x - 0.2) / 1.9) ** 2 + ((z - 0.4) / 2.4) ** 2 < 1,
        ),
        (
            Cylinder(2, (0.2, -0.3, 0.4), (1.9, 2.4), 3.3),
            lambda x, y, z: abs(z - 0.4) < 1.65 and ((x - 0.2) / 1.9) ** 2 + ((y + 0.3) / 2.4) ** 2 < 1,
        ),
    ],
)
def test_coverage_equals_the_share_of_points_inside(drawn, inside):
    origin, spacing, shape = (-3.0, -3.0, -4.0), (1.0, 1.2, 1.5), (6, 6, 7)
    ours = coverage_of(drawn, origin_mm=origin, spacing_mm=spacing, shape=shape).dense(shape)
    tried = share_inside(inside, origin, spacing, shape, 12)
    assert np.abs(ours - tried).max() < 0.06  # twelve points to a side see an edge to 1/12 of a voxel
    assert ours.sum() == pytest.approx(tried.sum(), rel=0.03)  # both ends of a solid are seen to 1/12 of a voxel


def test_solids_have_their_volumes():
    lattice = {"origin_mm": (-14.5, -14.5, -14.5), "spacing_mm": (1, 1, 1), "shape": (30, 30, 30)}
    cases = [
        (Box((-3.3, -2.2, -1.1), (4.4, 5.5, 6.6)), 7.7**3),
        (Ellipsoid((0.3, 0.1, -0.2), (10, 8, 6)), 4 / 3 * np.pi * 480),
        (Cylinder(2, (0.3, 0.1, -0.2), (10, 8), 11.5), np.pi * 80 * 11.5),
    ]
    for drawn, volume in cases:
        assert float(coverage_of(drawn, **lattice).values.sum(dtype=float)) == pytest.approx(volume, rel=1e-3)


def test_solids_outside_cover_nothing():
    ball = Ellipsoid((100, 0, 0), (5, 5, 5))
    box = coverage_of(ball, origin_mm=(0, 0, 0), spacing_mm=(1, 1, 1), shape=(5, 5, 5))
    assert box.values.size == 0 or box.values.max() == 0


def small(**changes):
    said = {
        "name": "try",
        "size_mm": [20, 20, 20],
        "spacing_mm": 2,
        "background": "water",
        "shape": [{"kind": "box", "lower_mm": [-5, -5, -5], "upper_mm": [5, 5, 5], "material": "bone_cortical"}],
    }
    return {**said, **changes}


def shaped(**solid):
    return small(shape=[solid])


def test_later_solids_replace_earlier_ones_and_partial_voxels_mix_by_volume():
    grid = build_phantom(parse_phantom(small()))
    middle = grid.density_g_cm3[5, 5]
    assert middle.tolist() == pytest.approx([1, 1, 1.46, 1.92, 1.92, 1.92, 1.92, 1.46, 1, 1])
    mass = grid.density_g_cm3.sum(dtype=float) * 8
    assert mass == pytest.approx(8000 + 1000 * 0.92, rel=1e-6)
    said = small()
    said["shape"].append({"kind": "slab", "axis": "z", "from_mm": -10, "to_mm": 10, "material": "air"})
    assert build_phantom(parse_phantom(said)).density_g_cm3.max() == np.float32(0.00120479)


def test_a_solid_can_be_cut_from_earlier_structures():
    said = small(
        shape=[
            {"kind": "box", "lower_mm": [-8, -8, -8], "upper_mm": [8, 8, 8], "structure": "shell"},
            {
                "kind": "box",
                "lower_mm": [-4, -4, -4],
                "upper_mm": [4, 4, 4],
                "structure": "core",
                "cut_from": ["shell"],
            },
        ]
    )
    grid = build_phantom(parse_phantom(said))
    assert grid.volume_cm3("shell") == pytest.approx((16**3 - 8**3) / 1000, rel=1e-6)
    said["shape"].reverse()
    with pytest.raises(UnknownNameError, match="cut_from"):
        parse_phantom(said)


def test_own_mixtures():
    said = small(
        materials={
            "foam": {"base": "lung_tissue", "density_g_cm3": 0.2},
            "mix": {"parts": {"water": 0.5, "bone_cortical": 0.5}, "density_g_cm3": 1.4},
            "salt": {"fractions": {"Na": 0.4, "Cl": 0.6}, "density_g_cm3": 2.1},
        },
        background="foam",
    )
    for solid, name in zip(said["shape"], ["mix"], strict=True):
        solid["material"] = name
    grid = build_phantom(parse_phantom(said))
    assert [m.name for m in grid.materials] == ["foam", "mix"]
    assert grid.density_g_cm3.min() == pytest.approx(0.2)


@pytest.mark.parametrize(
    ("said", "message"),
    [
        (small(sise_mm=[1, 2, 3]), "unknown key 'sise_mm'.*did you mean 'size_mm'"),
        ({"name": "x"}, "size_mm is missing"),
        (small(name=""), "name = ''"),
        (small(size_mm=[20, 20]), "list of 3 numbers"),
        (small(size_mm=[20, 20, -1]), "above 0"),
        (small(size_mm=[20, 20, float("nan")]), "finite"),
        (small(size_mm=[20, 20, True]), "finite number"),
        (small(spacing_mm=0), "above 0"),
        (small(background="watr"), "did you mean 'water'"),
        (small(patient_position="UP"), "patient_position"),
        (small(shape={"kind": "box"}), r"\[\[shape\]\]"),
        (small(shape=["box"]), "a table"),
        (shaped(kind="bocks", material="water"), "did you mean 'box'"),
        (shaped(kind="box", lower_mm=[0, 0, 0], upper_mm=[1, 1, 0], material="water"), "larger than lower_mm"),
        (shaped(kind="box", lower_mm=[0, 0, 0], upper_mm=[1, 1, 1]), "neither material nor structure"),
        (shaped(kind="box", radius_mm=3, material="water"), "unknown key 'radius_mm'"),
        (shaped(kind="ellipsoid", centre_mm=[0, 0, 0], material="water"), "radii_mm is missing"),
        (shaped(kind="ellipsoid", center_mm=[0, 0, 0], radius_mm=1, material="water"), "did you mean 'centre_mm'"),
        (shaped(kind="cylinder", axis="w", centre_mm=[0, 0, 0], radius_mm=1, length_mm=1, material="water"), "axis"),
        (shaped(kind="slab", axis="z", from_mm=3, to_mm=1, material="water"), "larger than from_mm"),
        (shaped(kind="slab", axis="z", from_mm=0, to_mm=1, structure="a", role="tumour"), "role"),
        (shaped(kind="slab", axis="z", from_mm=0, to_mm=1, material="water", role="body"), "role without structure"),
        (shaped(kind="slab", axis="z", from_mm=0, to_mm=1, structure="a", density_g_cm3=1), "without material"),
        (small(materials={"a": {"density_g_cm3": 1}}), "no composition"),
        (small(materials={"a": {"base": "water", "parts": {}, "density_g_cm3": 1}}), "base and parts"),
        (small(materials={"a": {"parts": {"water": 0.4}, "density_g_cm3": 1}}), "sum to"),
        (small(materials={"a": {"fractions": {"Xx": 1.0}, "density_g_cm3": 1}}), "element"),
    ],
)
def test_what_a_file_may_not_say(said, message):
    with pytest.raises((GridError, UnknownNameError, MaterialError), match=message):
        parse_phantom(said)


def test_structures_must_lie_in_the_volume():
    said = shaped(kind="ellipsoid", centre_mm=[500, 0, 0], radius_mm=3, structure="far")
    with pytest.raises(GridError, match=r"'far'.*outside the volume"):
        build_phantom(parse_phantom(said))


def test_absurd_sizes_are_refused_first():
    with pytest.raises(SizeError, match="GB"):
        phantom("water_tank", 0.05)
    for bad in (0, -1, float("inf"), (1, 2)):
        with pytest.raises(GridError):
            phantom("water_tank", bad)


def test_files_of_ones_own(tmp_path):
    file = tmp_path / "own.toml"
    file.write_text('name = "own"\nsize_mm = [10, 10, 10]\nspacing_mm = 1\nbackground = "water"\n')
    assert phantom(file).shape == (10, 10, 10)
    assert phantom(str(file), spacing_mm=(1, 2, 3)).shape == (4, 5, 10)
    file.write_text("name = [")
    with pytest.raises(GridError, match=r"own\.toml is not valid TOML"):
        phantom(file)
    file.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(GridError, match="not valid TOML"):
        phantom(file)
    with pytest.raises(GridError, match="cannot be read"):
        phantom(tmp_path / "none.toml")
    with pytest.raises(UnknownNameError, match="did you mean 'water_tank'"):
        phantom("water_tnk")


def test_the_folder_holds_nothing_but_phantoms():
    assert all(file.suffix == ".toml" for file in phantom_folder().iterdir())


json = st.recursive(
    st.none() | st.booleans() | st.integers(-10, 10) | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=8,
)
KEYS = [
    "name", "size_mm", "lower_mm", "spacing_mm", "background", "materials", "shape", "kind", "axis", "centre_mm",
    "radius_mm", "radii_mm", "material", "structure", "role", "cut_from", "description", "patient_position",
]  # fmt: skip


@settings(max_examples=150, deadline=None)
@given(st.dictionaries(st.sampled_from(KEYS), json, max_size=6), st.booleans())
def test_whatever_a_file_says_the_answer_is_a_phantom_or_an_error_of_ours(said, inside):
    whole = shaped(**said) if inside else small(**said)
    try:
        made = parse_phantom(whole)
    except InputError:
        return
    assert made.name
