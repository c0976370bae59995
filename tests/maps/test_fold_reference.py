"""Lateral profiles, slabs and insets against independent transport, with its own star yields.

The cases and their conditions are in tests/reference/README.md. Cases that miss a bar stay here, marked.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.interpolate import RectBivariateSpline
from scipy.optimize import least_squares

from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.basis.materials import material
from dosekit.beams.beam import Beam
from dosekit.depths.curves import depth_curve
from dosekit.depths.layers import Layers
from dosekit.effects.agreement import gamma_index
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.fields import Field
from dosekit.maps.fold import fold, library_of
from dosekit.maps.pencils import field_pencils
from dosekit.maps.rays import matter_of
from dosekit.maps.tables import TARGETS

import reference_cases
from invented_fields import box_grid

pytestmark = pytest.mark.reference

SPACING = 2.0
RINGS = np.arange(100.0)
BEAMS = {
    "w170_dp2": Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02, spot_sigma_mm=5),
    "w170_piplus": Beam("pi+", momentum_mev_c=170, momentum_sigma=0.02, spot_sigma_mm=5),
    "p150_water": Beam("proton", kinetic_energy_mev=150, spot_sigma_mm=5),
    "mu170": Beam("mu-", momentum_mev_c=170, spot_sigma_mm=5),
}


@cache
def primary_in_water(case):
    """Energy of the beam particles per mm of depth [depth, v, u], MeV per incident, and depths, in 2 mm voxels."""
    beam = BEAMS[case]
    depth = 240 if case == "p150_water" else 320
    grid = box_grid((141, int(depth / SPACING), 141), SPACING)
    field = Field(case, beam, (0, -0.5 * depth, 0), 0.0, weights=[[1e-9]])
    pencils = field_pencils(field, matter_of(grid), library_of(field, "cascade"))
    fine, coarse = pencils.maps(field.weights)
    out = np.zeros((1, int(np.prod(grid.shape))))
    voxels, rows = pencils.voxels(), np.where(np.array(TARGETS) == "primary", 0, -1)
    factor = np.full((1, 1), -(SPACING**2))
    pencils.deposit(fine, coarse, voxels, voxels, factor=factor, rows=rows, out=out)
    return out.reshape(grid.shape).transpose(1, 0, 2), grid.centres_mm("y") - grid.edges_mm("y")[0], grid


def rings_of(case, depth_mm):
    """Our energy in rings of 1 mm, averaged over 5 mm of depth, the last ring holding the rest."""
    planes, depths, grid = primary_in_water(case)
    overlap = np.minimum(depths + 1.0, depth_mm + 2.5) - np.maximum(depths - 1.0, depth_mm - 2.5)
    weights = np.clip(overlap, 0.0, None)
    plane = np.tensordot(weights / weights.sum(), planes, axes=1)
    x = grid.centres_mm("x")
    fine = np.arange(-140.0, 140.01, 0.25)
    smooth = RectBivariateSpline(x, x, plane)(fine, fine) * (0.25 / SPACING) ** 2
    ring = np.minimum(np.hypot(*np.meshgrid(fine, fine)).astype(int), 99)
    return np.bincount(ring.ravel(), smooth.ravel(), 100)


def core_sigma(rings):
    """Sigma of the narrower of two Gaussians fitted to energy in rings, mm."""

    def in_rings(sigma):
        outer = np.where(RINGS >= 99, 0.0, np.exp(-0.5 * ((RINGS + 1) / sigma) ** 2))
        return np.exp(-0.5 * (RINGS / sigma) ** 2) - outer

    def misfit(q):
        model = q[3] * ((1 - q[2]) * in_rings(q[0]) + q[2] * in_rings(q[1]))
        return (model - rings) / np.sqrt(rings.max() * rings + 4e-6 * rings.max() ** 2)

    bounds = ([0.3, 3.0, 0.0, 0.0], [30.0, 150.0, 1.0, 10.0])
    return least_squares(misfit, [6.0, 30.0, 0.05, rings.sum()], bounds=bounds).x[0]


def halo(rings, sigma):
    """Share of the energy beyond three sigma."""
    beyond = np.interp(3.0 * sigma, RINGS, rings[::-1].cumsum()[::-1])
    return beyond / rings.sum()


LESS_SCATTERING = "multiple scattering in that code is 5 to 6 % under Moliere, Fano and Hanson (w170_em, mu170)"
FEWER_BOUNCES = "protons scattered elastically by nuclei are too few at the peak"


def missed(what, *marks):
    return pytest.param(*marks, marks=pytest.mark.xfail(strict=True, reason=what))


@pytest.mark.parametrize(
    ("case", "depth_mm"),
    [
        ("w170_dp2", 10.0),
        ("w170_dp2", 97.0),
        missed(f"measured 1.045 times: {LESS_SCATTERING}", "w170_dp2", 155.0),
        ("w170_dp2", 188.0),
        ("w170_piplus", 10.0),
        ("w170_piplus", 95.0),
        ("w170_piplus", 184.0),
        ("p150_water", 10.0),
        ("p150_water", 79.0),
        ("p150_water", 126.0),
        missed(f"measured 1.035 times: {FEWER_BOUNCES}, and leave the fitted core wider", "p150_water", 152.0),
        ("mu170", 10.0),
        ("mu170", 141.0),
        missed(f"measured 1.048 times: {LESS_SCATTERING}", "mu170", 225.0),
    ],
)
def test_lateral_sigma(case, depth_mm, evidence):
    rows = reference_cases.radial(case)
    rings = rows["primary"][rows["depth_mm"] == depth_mm]
    wanted, ours = core_sigma(rings), core_sigma(rings_of(case, depth_mm))
    evidence(what=f"{case}: lateral sigma at {depth_mm:g} mm", source="tests/reference", value=wanted, ours=ours,
             unit="mm", bar="3 %", kind="reference")  # fmt: skip
    assert ours == pytest.approx(wanted, rel=0.03)


@pytest.mark.parametrize(
    ("case", "depth_mm"),
    [
        ("w170_dp2", 10.0),
        ("w170_dp2", 97.0),
        ("w170_dp2", 155.0),
        ("w170_dp2", 188.0),
        ("w170_piplus", 10.0),
        ("w170_piplus", 95.0),
        ("w170_piplus", 184.0),
        missed("measured 1.35 times: too many slow protons of reactions go sideways", "p150_water", 10.0),
        ("p150_water", 79.0),
        ("p150_water", 126.0),
        missed(f"measured 0.69 times: {FEWER_BOUNCES}", "p150_water", 152.0),
        ("mu170", 10.0),
        missed("measured 1.56 times: the tail of that code is under Moliere's (exact law: 1.4)", "mu170", 141.0),
    ],
)
def test_lateral_halo(case, depth_mm, evidence):
    rows = reference_cases.radial(case)
    rings = rows["primary"][rows["depth_mm"] == depth_mm]
    sigma = core_sigma(rings)
    wanted, ours = halo(rings, sigma), halo(rings_of(case, depth_mm), sigma)
    evidence(what=f"{case}: energy beyond 3 sigma at {depth_mm:g} mm", source="tests/reference", value=wanted,
             ours=ours, unit="share", bar="30 %", kind="reference")  # fmt: skip
    assert ours == pytest.approx(wanted, rel=0.30)


def volume(case):
    """The stack or inset of a case, 240 mm wide, beam along y."""
    wide, deep = int(240 / SPACING), int(400 / SPACING)
    stuffs = tuple(material(name) for name in ("water", "muscle_skeletal", "bone_cortical", "lung_tissue"))
    index = np.zeros((wide, deep, wide), dtype=np.uint16)
    density = np.ones((wide, deep, wide), dtype=np.float32)
    y = (np.arange(deep) + 0.5) * SPACING
    x = (np.arange(wide) - 0.5 * wide + 0.5) * SPACING
    if case == "slab_a":
        stack = ((0, 50, 1, None), (50, 70, 2, None), (70, 150, 3, 0.30))
        for low, high, n, given in stack:
            here = (y > low) & (y < high)
            index[:, here], density[:, here] = n, stuffs[n].density_g_cm3 if given is None else given
    else:
        here = np.ix_(np.arange(wide), (y > 60) & (y < 100), x > 0)
        index[here], density[here] = 2, stuffs[2].density_g_cm3
    return VoxelGrid((x[0], y[0], x[0]), (SPACING,) * 3, density, index, stuffs)


@cache
def energy_in(case):
    """Energy per incident pion [component, y, x] summed over z, MeV."""
    grid = volume(case)
    beam = Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02, spot_sigma_mm=5 if case == "slab_a" else 20)
    dose = fold(Field(case, beam, (0, 200, 0), 0.0, weights=[[1e-9]]), grid, yields="cascade")
    mass_g = grid.density_g_cm3 * SPACING**3 * 1e-3
    energy = (dose["dose"].to_numpy() * mass_g).sum(axis=1, dtype=np.float64) / GRAY_PER_MEV_PER_GRAM
    return dict(zip(dose["component"].to_numpy().tolist(), energy, strict=True)), grid


@pytest.mark.slow
@pytest.mark.parametrize("name", ["total", "primary", "in_flight", "star_light", "star_heavy", "star_neutron", "decay"])
def test_slab_a_depth(name, evidence):
    """3 % of the peak of the total, or 1.5 mm, everywhere."""
    energy, grid = energy_in("slab_a")
    ours = (sum(energy.values()) if name == "total" else energy[name]).sum(axis=1) / SPACING
    parts = reference_cases.components(reference_cases.depth("slab_a"))
    columns = {**parts, "total": sum(parts.values())}
    wanted = columns[name].reshape(-1, int(SPACING)).mean(axis=1)
    peak = columns["total"].reshape(-1, int(SPACING)).mean(axis=1).max()
    y = grid.centres_mm("y")
    fine = np.arange(0.0, 400.0, 0.1)
    curve = np.interp(fine, y, ours)
    worst = 0.0
    for place, value in zip(y, wanted, strict=True):
        near = curve[np.abs(fine - place) <= 1.5]
        gap = max(value - near.max(), near.min() - value, 0.0)
        worst = max(worst, min(gap, abs(float(np.interp(place, y, ours)) - value)))
    evidence(what=f"slab_a: {name}, largest miss beyond 1.5 mm", source="tests/reference", value=0.0,
             ours=worst / peak, unit="of the peak", bar="3 %", kind="reference")  # fmt: skip
    assert worst < 0.03 * peak


@pytest.mark.slow
@pytest.mark.parametrize("case", ["slab_a", "inset_bone"])
@pytest.mark.parametrize("part", ["primary", "total"])
def test_xz_gamma(case, part, evidence):
    """95 % of the points over a tenth of the maximum within 3 % and 3 mm (gamma, Low 1998)."""
    energy, grid = energy_in(case)
    with np.load(reference_cases.FOLDER / f"{case}_xz.npz") as stored:
        wanted = stored["primary"].astype(float) + (stored["rest"] if part == "total" else 0.0)
    wanted = wanted.reshape(200, 2, 100).sum(axis=1)
    ours = (sum(energy.values()) if part == "total" else energy["primary"])[:, np.abs(grid.centres_mm("x")) < 100.0]
    gamma = gamma_index(wanted, ours, spacing_mm=SPACING, distance_mm=3.0, dose_percent=3.0)
    share = gamma.pass_share
    assert gamma.judged > 1000
    evidence(what=f"{case}: {part} within 3 % / 3 mm", source="tests/reference", value=1.0, ours=share,
             unit="share", bar="0.95", kind="reference")  # fmt: skip
    assert share >= 0.95


@pytest.mark.slow
@pytest.mark.parametrize("name", ["primary", "star_light"])
def test_slabs_as_in_one_dimension(name):
    """Energy summed across the beam in slab_a is that of the depth curve, which knows each material: 1 % of the peak.

    Reactions and decays per water-equivalent length are water's in the fold; this is what that costs.
    """
    energy, _ = energy_in("slab_a")
    ours = energy[name].sum(axis=1) / SPACING
    lung = material("lung_tissue", density_g_cm3=0.30)
    stack = [("muscle_skeletal", 50), ("bone_cortical", 20), (lung, 80), ("water", 250)]
    curve = depth_curve(BEAMS["w170_dp2"], Layers(stack), yields="cascade", bin_mm=SPACING)
    peak = float(curve["energy"].sum("component").max())
    wanted = curve["energy"].sel(component=name).to_numpy()[: len(ours)]
    assert float(np.abs(ours - wanted).max()) < 0.01 * peak
