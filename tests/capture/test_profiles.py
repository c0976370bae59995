"""Energy against distance: sums, planes from shells, scaling, and the transport results of stars at a point."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.capture.products import planar_kernel, planar_neutron_kernel, point_kernel
from dosekit.capture.profiles import star_profile
from dosekit.capture.stars import star_energy_mev
from dosekit.errors import InputError, UnknownNameError

import reference_cases

MEDIA = {"point_water": ("water", 1.0), "point_lung": ("lung_tissue", 0.30), "point_bone": ("bone_cortical", 1.92)}
EDGES = np.arange(401.0)


@pytest.mark.parametrize("component", ["star_light", "star_heavy", "star_neutron", "star_photon"])
@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
def test_profiles_hold_the_stars_energy(component, yields):
    profile = star_profile("water", component, yields=yields)
    assert profile.energy_mev == pytest.approx(star_energy_mev("water", yields)[component], rel=1e-6)
    assert np.all(np.diff(profile.beyond_mev) <= 1e-9)


@pytest.mark.parametrize("component", ["star_light", "star_heavy"])
def test_charged_energy_is_all_laid_down(component):
    kernel = planar_kernel("water", component, half_length_mm=150.0)
    assert kernel.sum() == pytest.approx(star_energy_mev("water")[component], rel=1e-4)
    np.testing.assert_array_equal(kernel, kernel[::-1])
    assert kernel.argmax() == len(kernel) // 2
    assert not kernel.flags.writeable


@pytest.mark.naive
@pytest.mark.parametrize("component", ["star_light", "star_neutron"])
def test_planes_follow_from_shells(component):
    """The closed integral over planes equals shells cut into equal steps of cosine."""
    profile = star_profile("water", component)
    radius = np.linspace(0.0, 900.0, 90001)
    energy = -np.diff(profile.beyond(radius))
    energy[0] -= profile.local_mev
    middle = 0.5 * (radius[1:] + radius[:-1])
    for depth in (0.5, 3.0, 20.0, 90.0):
        share = np.where(middle > depth, 0.5 * (1.0 - depth / middle), 0.0)
        naive = float((energy * share).sum()) + 0.5 * float(profile.beyond(900.0))
        assert profile.beyond_plane(depth) == pytest.approx(naive, rel=0.02 if component == "star_neutron" else 1e-3)


def test_density_scales_distance():
    """Twice the density, half the distances (O'Connor 1957)."""
    for component in ("star_light", "star_neutron", "star_photon"):
        thin = point_kernel(material("water", 1.0), component, edges_mm=[2.0, 8.0, 30.0])
        dense = point_kernel(material("water", 2.0), component, edges_mm=[1.0, 4.0, 15.0])
        # the density effect is nil below 100 MeV per nucleon; another density means new histories for neutral products
        np.testing.assert_allclose(dense, thin, rtol=2e-3 if component == "star_light" else 0.03)


def test_fine_and_coarse_slices_agree():
    fine = planar_kernel("water", "star_light", bin_mm=0.5, half_length_mm=60.0)
    coarse = planar_kernel("water", "star_light", bin_mm=1.0, half_length_mm=60.0)
    assert fine[1:-1].sum() == pytest.approx(coarse.sum(), rel=1e-3)


def test_forward_push_moves_neutrons_ahead():
    even = planar_neutron_kernel(40.0, half_length_mm=300.0)
    pushed = planar_neutron_kernel(40.0, 0.3, half_length_mm=300.0)
    np.testing.assert_allclose(even, even[::-1], rtol=1e-9)
    assert pushed[301:].sum() > 1.5 * pushed[:300].sum()
    assert pushed.sum() == pytest.approx(even.sum(), rel=0.05)


def test_bad_lengths_are_refused():
    with pytest.raises(InputError, match="radii"):
        point_kernel("water", "star_light", edges_mm=[3.0, 1.0])
    with pytest.raises(InputError, match="slices"):
        planar_kernel("water", "star_light", bin_mm=0.0)
    with pytest.raises(UnknownNameError):
        point_kernel("water", "primary", edges_mm=[0.0, 1.0])


# ---------------------------------------------------------------- transport results


def compared(case, component, groups):
    """Ours and the reference's energy in groups of shells."""
    name, density = MEDIA[case]
    ours = point_kernel(material(name, density), component, yields="cascade", edges_mm=EDGES)
    theirs = reference_cases.components(reference_cases.sphere(case))[component]
    ours, theirs = (np.add.reduceat(values, groups[:-1])[: len(groups) - 1] for values in (ours, theirs))
    return ours, theirs


@pytest.mark.reference
@pytest.mark.parametrize("case", list(MEDIA))
@pytest.mark.parametrize("component", ["star_light", "star_heavy"])
def test_charged_stars_at_a_point(case, component, evidence):
    """Energy within 1 %, each millimetre within 3 % where it is over 5 % of the maximum.

    The reference's own noise is about 0.5 % per shell.
    """
    ours, theirs = compared(case, component, np.arange(200))
    evidence(
        what=f"{case} {component} energy",
        source="independent transport",
        value=theirs.sum(),
        ours=ours.sum(),
        unit="MeV",
        bar="1 %",
        kind="reference",
    )
    assert ours.sum() == pytest.approx(theirs.sum(), rel=0.01)
    large = theirs > 0.05 * theirs.max()
    worst = float(np.abs(ours[large] / theirs[large] - 1.0).max())
    evidence(
        what=f"{case} {component} worst shell over 5 %",
        source="independent transport",
        value=0.0,
        ours=worst,
        bar="0.03",
        kind="reference",
    )
    assert worst < 0.03


@pytest.mark.reference
@pytest.mark.parametrize("case", ["point_water", "point_lung"])
def test_charged_stars_far_from_a_point(case):
    """The far tail (over 0.1 % of the maximum) within 30 %, in groups of 5 mm."""
    ours, theirs = compared(case, "star_light", np.arange(0, 201, 5))
    far = (theirs > 1e-3 * theirs.max()) & (theirs < 0.05 * theirs.max())
    assert far.any()
    assert np.abs(ours[far] / theirs[far] - 1.0).max() < 0.30


@pytest.mark.reference
@pytest.mark.parametrize("case", list(MEDIA))
@pytest.mark.parametrize("component", ["star_neutron", "star_photon"])
@pytest.mark.parametrize("radius_mm", [10, 50, 100, 200])
def test_neutral_stars_at_a_point_coarsely(case, component, radius_mm, evidence):
    """Energy inside 1, 5, 10 and 20 cm within the models' own uncertainty of 25 %."""
    ours, theirs = compared(case, component, np.array([0, radius_mm, radius_mm + 1]))
    evidence(
        what=f"{case} {component} inside {radius_mm} mm",
        source="independent transport",
        value=theirs[0],
        ours=ours[0],
        unit="MeV",
        bar="25 % (asked: 3 %)",
        kind="reference",
    )
    assert ours[0] == pytest.approx(theirs[0], rel=0.25)


@pytest.mark.reference
@pytest.mark.xfail(
    strict=True,
    reason="measured 5 to 23 % more than the transport results in water; water, lung and bone together say that they "
    "hand a fifth less to hydrogen than measured n-p cross-sections with even sharing do (table in star_neutrons.md)",
)
def test_neutrons_at_a_point_within_three_percent():
    ours, theirs = compared("point_water", "star_neutron", np.arange(0, 201, 20))
    assert np.abs(ours / theirs - 1.0).max() < 0.03


@pytest.mark.reference
@pytest.mark.xfail(
    strict=True,
    reason="measured 5 to 21 % less: the tables give number and energy of photons from stars but no spectrum, and the "
    "transport results are flat from the second millimetre on, as quanta of 1 MeV or less would be",
)
def test_photons_at_a_point_within_three_percent():
    ours, theirs = compared("point_water", "star_photon", np.arange(0, 201, 20))
    assert np.abs(ours / theirs - 1.0).max() < 0.03
