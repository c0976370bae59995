"""Stars in a volume: energy, interfaces, transposes, blocks, ray artefacts, re-weighting, reactions."""

from __future__ import annotations

import numba
import numpy as np
import pytest
import xarray as xr
from scipy.signal import fftconvolve

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM, PION_REST_ENERGY_MEV
from dosekit.basis.materials import material
from dosekit.capture.exponentials import material_kernel
from dosekit.capture.stars import star_energy_mev
from dosekit.errors import GridError, InputError, UnknownNameError
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.stars import carry_stars, carry_stars_transposed, star_balance
from dosekit.maps.stars_reactions import REACTION_CHANNELS, carry_reactions, forward_bias
from dosekit.maps.stars_reweight import reweight

import reference_cases

MATERIALS = (material("water"), material("bone_cortical"), material("lung_tissue", 0.30), material("air"))


def uniform(shape, spacing_mm, medium):
    """A volume of one material."""
    density = np.full(shape, medium.density_g_cm3, dtype=np.float32)
    return VoxelGrid((0, 0, 0), (spacing_mm,) * 3, density, np.zeros(shape, dtype=np.uint16), (medium,))


def mixed(rng, shape=(9, 11, 10), spacing=(2.0, 3.0, 2.5)):
    """A volume of four materials at random."""
    index = rng.integers(0, 4, shape).astype(np.uint16)
    density = np.array([m.density_g_cm3 for m in MATERIALS], dtype=np.float32)[index]
    return VoxelGrid((0, 0, 0), spacing, density, index, MATERIALS)


def gaussian(shape, spacing_mm, sigmas_mm):
    """One stop spread over a Gaussian in the middle."""
    parts = [
        np.exp(-0.5 * ((np.arange(n) - n // 2) * spacing_mm / s) ** 2) for n, s in zip(shape, sigmas_mm, strict=True)
    ]
    stops = parts[0][:, None, None] * parts[1][None, :, None] * parts[2][None, None, :]
    stops[stops < 1e-12 * stops.max()] = 0.0
    return stops / stops.sum()


def test_energy_of_every_component_is_accounted_for(rng):
    grid = mixed(rng)
    stops = rng.uniform(size=grid.shape)
    carried = carry_stars(stops, grid)
    balance = star_balance(stops, grid, carried)
    total = sum(part["emitted"] for part in balance.values())
    assert total == pytest.approx(PION_REST_ENERGY_MEV * stops.sum(), rel=1e-9)
    for name in STAR_COMPONENTS:
        part = balance[name]
        assert part["emitted"] == pytest.approx(part["deposited"] + part["bound"] + part["escaped"], rel=1e-9)
        assert part["escaped"] > -1e-6 * part["emitted"]
    assert balance["star_heavy"]["escaped"] == pytest.approx(0.0, abs=1e-6 * balance["star_heavy"]["emitted"])


@pytest.mark.parametrize("medium", MATERIALS[:3], ids=lambda m: m.name)
def test_light_energy_stays_in_a_large_body(medium):
    grid = uniform((41, 41, 41), 12.0, medium)
    stops = np.zeros(grid.shape)
    stops[20, 20, 20] = 2.0
    energy = carry_stars(stops, grid, components=["star_light"])["star_light"]
    assert energy.sum() == pytest.approx(2.0 * star_energy_mev(medium)["star_light"], rel=1e-4)
    assert energy.min() >= 0.0


def test_stars_superpose_and_scale(rng):
    grid = mixed(rng)
    first, second = rng.uniform(size=grid.shape), rng.uniform(size=grid.shape)
    a, b, both = (carry_stars(s, grid) for s in (first, second, first + 2.0 * second))
    scaled = carry_stars(first, grid, star_scale=1.3)
    for name in STAR_COMPONENTS:
        np.testing.assert_allclose(both[name], a[name] + 2.0 * b[name], rtol=1e-7, atol=1e-9)
        factor = 1.3 if name in ("star_light", "star_heavy") else 1.0
        np.testing.assert_allclose(scaled[name], factor * a[name], rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("block_mm", [0.0, 6.0])
def test_the_transpose_is_exact(rng, block_mm):
    grid = mixed(rng)
    stops = rng.uniform(size=grid.shape)
    carried = carry_stars(stops, grid, star_scale=1.2, block_mm=block_mm)
    wanted = {name: rng.normal(size=grid.shape) for name in STAR_COMPONENTS}
    back = carry_stars_transposed(wanted, grid, star_scale=1.2, block_mm=block_mm)
    forward = sum(float((carried[name] * wanted[name]).sum()) for name in STAR_COMPONENTS)
    assert forward == pytest.approx(float((back * stops).sum()), rel=1e-9)


def test_thread_count_changes_no_bit(rng):
    """All components, blocks included, forward and back."""
    grid = mixed(rng, shape=(13, 11, 12))
    stops, wanted = rng.uniform(size=grid.shape), {name: rng.normal(size=grid.shape) for name in STAR_COMPONENTS}
    before, results = numba.get_num_threads(), []
    try:
        for threads in (1, min(2, numba.config.NUMBA_NUM_THREADS)):
            numba.set_num_threads(threads)
            carried = carry_stars(stops, grid)
            results.append(
                b"".join(carried[name].tobytes() for name in STAR_COMPONENTS)
                + carry_stars_transposed(wanted, grid).tobytes()
            )
    finally:
        numba.set_num_threads(before)
    assert results[0] == results[1]


def test_composition_decides_the_star():
    """A stop in bone makes bone's star, next to water that makes water's."""
    index = np.zeros((1, 1, 2), dtype=np.uint16)
    index[0, 0, 1] = 1
    density = np.array([1.0, 1.92], dtype=np.float32)[index]
    grid = VoxelGrid((0, 0, 0), (400.0, 400.0, 400.0), density, index, MATERIALS)
    for voxel, medium in enumerate(("water", "bone_cortical")):
        stops = np.zeros(grid.shape)
        stops[0, 0, voxel] = 1.0
        energy = carry_stars(stops, grid, components=["star_light", "star_heavy"])
        assert energy["star_heavy"].sum() == pytest.approx(star_energy_mev(medium)["star_heavy"], rel=1e-9)


def test_energy_leaves_at_the_surface():
    grid = uniform((21, 21, 21), 2.0, MATERIALS[0])
    inside, edge = np.zeros(grid.shape), np.zeros(grid.shape)
    inside[10, 10, 10] = edge[10, 10, 0] = 1.0
    kept = [carry_stars(s, grid, components=["star_light"])["star_light"].sum() for s in (inside, edge)]
    # half of what flies starts outwards; the shortest ranges end in the voxel itself
    assert 0.5 * kept[0] < kept[1] < 0.85 * kept[0]


def test_bad_input_is_refused(rng):
    grid = mixed(rng)
    with pytest.raises(GridError, match="shape"):
        carry_stars(np.zeros((2, 2, 2)), grid)
    with pytest.raises(InputError, match="negative"):
        carry_stars(np.full(grid.shape, -1.0), grid)
    with pytest.raises(InputError, match="finite"):
        carry_stars(np.full(grid.shape, np.nan), grid)
    with pytest.raises(UnknownNameError, match="star_light"):
        carry_stars(np.zeros(grid.shape), grid, components=["primary"])


# ---------------------------------------------------------------- against exact convolution


def exact_kernel(size, spacing_mm, kernel, parts=5):
    """Energy per voxel about a point in the middle voxel, by cutting voxels into parts."""
    centres = (np.arange(size) - size // 2) * spacing_mm
    radii = np.linspace(0.0, size * spacing_mm, 6001)
    left = np.exp(-np.outer(radii, kernel.rates_per_mm)) @ kernel.energies_mev
    per_mm3 = -np.diff(left) / (4.0 / 3.0 * np.pi * np.diff(radii**3))
    middle = 0.5 * (radii[1:] + radii[:-1])
    energy = np.zeros((size,) * 3)
    offsets = ((np.arange(parts) + 0.5) / parts - 0.5) * spacing_mm
    for z in offsets:
        for y in offsets:
            for x in offsets:
                r = np.sqrt(
                    (centres + z)[:, None, None] ** 2
                    + (centres + y)[None, :, None] ** 2
                    + (centres + x)[None, None, :] ** 2
                )
                energy += np.interp(r, middle, per_mm3) * (spacing_mm / parts) ** 3
    energy[(size // 2,) * 3] += kernel.energy_mev - energy.sum()
    return energy


@pytest.fixture(scope="module")
def light_in_water():
    """The exact kernel of light products in water, 2 mm."""
    return exact_kernel(61, 2.0, material_kernel("star_light", "cascade", MATERIALS[0]))


@pytest.mark.parametrize("sigmas", [(5.0, 9.0, 9.0), (5.0, 5.0, 5.0), (15.0, 12.0, 12.0)])
def test_no_rays_show_about_real_beams(light_in_water, sigmas):
    """Charged star dose about stops spread as beams spread them: within 2 % where it is over 5 % of the maximum."""
    grid = uniform((61, 61, 61), 2.0, MATERIALS[0])
    stops = gaussian(grid.shape, 2.0, sigmas)
    ours = carry_stars(stops, grid, yields="cascade", components=["star_light", "star_heavy"])
    total = ours["star_light"] + ours["star_heavy"]
    exact = fftconvolve(stops, light_in_water, mode="same") + ours["star_heavy"]
    large = exact > 0.05 * exact.max()
    assert np.abs(total[large] / exact[large] - 1.0).max() < 0.02


def test_blocks_for_neutral_products_change_less_than_one_percent_of_the_peak():
    grid = uniform((40, 40, 40), 3.0, MATERIALS[0])
    stops = gaussian(grid.shape, 3.0, (12.0, 12.0, 12.0))
    fine, coarse = (carry_stars(stops, grid, block_mm=b) for b in (0.0, 8.0))
    peak = sum(fine.values()).max()
    assert np.abs(sum(fine.values()) - sum(coarse.values())).max() < 0.01 * peak


@pytest.mark.parametrize("component", ["star_neutron", "star_photon"])
def test_no_rays_show_far_from_stops(component):
    """Neutrons and photons about a beam: within 30 % in the tail (0.5 to 5 % of the maximum), 10 % on average above."""
    size, spacing = 61, 4.0
    kernel = material_kernel(component, "evaluated", MATERIALS[0])
    grid = uniform((size,) * 3, spacing, MATERIALS[0])
    stops = gaussian(grid.shape, spacing, (12.0, 12.0, 12.0))
    place = (np.arange(size) - size // 2) * spacing
    radius = np.sqrt(place[:, None, None] ** 2 + place[None, :, None] ** 2 + place**2)
    fine = np.linspace(0.0, 300.0, 6001)
    left = np.exp(-np.outer(fine, kernel.rates_per_mm)) @ kernel.energies_mev
    per_mm3 = np.interp(radius, 0.5 * (fine[1:] + fine[:-1]), -np.diff(left) / (4.0 / 3.0 * np.pi * np.diff(fine**3)))
    # about the stop the energy of a ball of the voxel's volume
    ball = (3.0 / (4.0 * np.pi)) ** (1.0 / 3.0) * spacing
    exact_energy = per_mm3 * spacing**3
    exact_energy[radius == 0.0] = kernel.shells_mev(np.array([0.0, ball]))[0] - kernel.local_mev
    exact = fftconvolve(stops, exact_energy, mode="same") + kernel.local_mev * stops
    ours = carry_stars(stops, grid, components=[component])[component]
    ratio = ours / exact
    # the local part is not carried and lies where the stops are
    travelled = exact - kernel.local_mev * stops
    tail = (travelled > 0.005 * travelled.max()) & (travelled < 0.05 * travelled.max()) & (radius < 110.0)
    near = travelled >= 0.05 * travelled.max()
    assert np.abs(ratio[tail] - 1.0).max() < 0.30
    assert np.sqrt(((ratio[near] - 1.0) ** 2).mean()) < 0.10


@pytest.mark.parametrize("spacing", [(2.0, 2.0, 2.0), (1.5, 1.5, 3.0)])
def test_blocks_for_light_products_change_less_than_one_percent_of_the_peak(spacing):
    """The smooth part on blocks against all on the voxels, across slabs of bone and lung."""
    shape = (40, 45, 45)
    index = np.zeros(shape, dtype=np.uint16)
    index[:, :, 10:17] = 1
    index[:, :, 27:36] = 2
    density = np.array([m.density_g_cm3 for m in MATERIALS], dtype=np.float32)[index]
    grid = VoxelGrid((0, 0, 0), spacing, density, index, MATERIALS)
    stops = gaussian(shape, 1.0, tuple(s / d for s, d in zip((6.0, 6.0, 5.0), reversed(spacing), strict=True)))
    fine, coarse = (carry_stars(stops, grid, block_mm=b) for b in (0.0, 8.0))
    mass = density * float(np.prod(spacing))
    # as dose, the quantity that is shown; air is not in the way
    peak = (sum(fine.values()) / mass).max()
    assert (np.abs(fine["star_light"] - coarse["star_light"]) / mass).max() < 0.01 * peak
    assert coarse["star_light"].sum() == pytest.approx(fine["star_light"].sum(), rel=2e-3)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("case", "medium"), [("point_water", 0), ("point_lung", 2), ("point_bone", 1)], ids=["water", "lung", "bone"]
)
def test_light_energy_inside_spheres(case, medium, evidence):
    """Stops at a point of the voxel volume: energy of light products inside spheres against transport, 3 %."""
    spacing = 1.0
    grid = uniform((81, 81, 81), spacing, MATERIALS[medium])
    stops = np.zeros(grid.shape)
    stops[40, 40, 40] = 1.0
    energy = carry_stars(stops, grid, yields="cascade", components=["star_light"])["star_light"]
    place = (np.arange(81) - 40) * spacing
    offsets = (np.arange(4) - 1.5) / 4.0 * spacing
    theirs = np.cumsum(reference_cases.components(reference_cases.sphere(case))["star_light"])
    for radius in (5, 10, 15, 20, 30):
        inside = 0.0
        for z in offsets:
            for y in offsets:
                for x in offsets:
                    r2 = (place + z)[:, None, None] ** 2 + (place + y)[None, :, None] ** 2 + (place + x) ** 2
                    inside += float(energy[r2 < radius**2].sum()) / 64.0
        evidence(
            what=f"{case} star_light in voxels inside {radius} mm",
            source="independent transport",
            value=theirs[radius - 1],
            ours=inside,
            unit="MeV",
            bar="3 %",
            kind="reference",
        )
        assert inside == pytest.approx(theirs[radius - 1], rel=0.03)


# ---------------------------------------------------------------- re-weighting and reactions


def finished(grid, stops, **settings):
    """A dose map as a fold leaves it, with nothing but stars."""
    mass_g = grid.density_g_cm3 * float(np.prod(grid.spacing_mm)) * 1e-3
    dose = np.zeros((len(COMPONENTS), *grid.shape), dtype=np.float32)
    for name, energy in carry_stars(stops, grid, **settings).items():
        dose[COMPONENTS.index(name)] = energy * GRAY_PER_MEV_PER_GRAM / mass_g
    return xr.Dataset(
        {
            "dose": (("component", "z", "y", "x"), dose),
            "stops": (("z", "y", "x"), stops / float(np.prod(grid.spacing_mm))),
        },
        coords={"component": list(COMPONENTS)},
        attrs={"yields": "evaluated", "star_scale": 1.0, **settings},
    )


@pytest.mark.parametrize("change", [{"star_scale": 1.25}, {"yields": "cascade", "star_scale": 0.8}])
def test_reweighting_equals_a_new_run(rng, change):
    grid = mixed(rng)
    stops = rng.uniform(size=grid.shape) * 1e9
    new = reweight(finished(grid, stops), grid, **change)
    np.testing.assert_allclose(new["dose"], finished(grid, stops, **change)["dose"], rtol=2e-5, atol=1e-12)
    assert new.attrs["star_scale"] == change.get("star_scale", 1.0)
    assert "from evaluated" in new.attrs["reweighted"]


def test_reweighting_needs_what_it_needs(rng):
    grid = mixed(rng)
    run = finished(grid, np.ones(grid.shape))
    with pytest.raises(InputError, match="volume"):
        reweight(run, yields="cascade")
    with pytest.raises(InputError, match="star_scale"):
        reweight(run, star_scale=-1.0)
    with pytest.raises(InputError, match="components"):
        reweight(run.sel(component=["primary"]), star_scale=1.1)


@pytest.mark.parametrize("cosine", [-0.4, 0.0, 0.3, 0.6])
def test_forward_push_has_the_wanted_mean_cosine(cosine):
    from dosekit.maps.cones import Cones
    from dosekit.maps.cones_directions import direction_set

    bias = forward_bias((0.0, 2.0, 0.0), cosine)
    units, weights = direction_set(194)
    weighted = weights * bias(units)
    assert float(weighted @ units[:, 1] / weighted.sum()) == pytest.approx(cosine, abs=0.01)
    assert sum(line.weight for lines in Cones((1.0, 1.0, 1.0), 50, bias).lines() for line in lines) == pytest.approx(
        1.0
    )


@pytest.mark.parametrize("channel", REACTION_CHANNELS)
def test_reactions_are_pushed_forward(channel):
    grid = uniform((41, 41, 41), 8.0, MATERIALS[0])
    energy = np.zeros(grid.shape)
    energy[20, 20, 20] = 10.0
    left = carry_reactions(energy, grid, (1.0, 0.0, 0.0), channel=channel, mean_cosine=0.5)
    assert left[:, :, 21:].sum() > 1.5 * left[:, :, :20].sum()
    assert 0.0 < left.sum() <= 10.0 + 1e-9
    if channel == "charged":
        assert left.sum() == pytest.approx(10.0, rel=1e-3)
    with pytest.raises(UnknownNameError):
        carry_reactions(energy, grid, (1.0, 0.0, 0.0), channel="muons")
    with pytest.raises(InputError):
        carry_reactions(energy, grid, (0.0, 0.0, 0.0), channel=channel)
