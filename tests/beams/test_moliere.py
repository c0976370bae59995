"""Tails of multiple scattering: the exact law of displacements and the Gaussians that stand for it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import j0, k1

from dosekit.basis.materials import from_fractions
from dosekit.beams.moliere import TAIL_SIGMAS, core_variance_share, displacement_beyond, tail_shares
from dosekit.beams.ranges import range_table
from dosekit.beams.scattering import fermi_eyges_moments, pv_mev

CASES = [("proton", 150.0, 100.0), ("pi-", 80.4, 120.0), ("mu-", 94.5, 200.0)]


def core_sigma_mm(name, energy, depth):
    return float(np.sqrt(fermi_eyges_moments(name, "water", energy, depth_mm=depth)[2]))


@pytest.mark.parametrize("x", [0.01, 0.7, 5.0])
def test_transform_of_screened_rutherford(x):
    """1 - x K1(x) is the integral that the docstring says."""
    integral = quad(lambda t: 2.0 * t * (1.0 - j0(x * t)) / (1.0 + t * t) ** 2, 0.0, np.inf, limit=2000)[0]
    assert 1.0 - x * k1(x) == pytest.approx(integral, rel=1e-5)


@pytest.mark.parametrize(("name", "energy", "depth"), CASES)
def test_shares_fall_from_one(name, energy, depth):
    radius = np.linspace(0.0, 10.0, 60) * core_sigma_mm(name, energy, depth)
    beyond = displacement_beyond(name, "water", energy, depth_mm=depth, radius_mm=radius)
    assert beyond[0] == pytest.approx(1.0, abs=1e-12)
    assert np.all(np.diff(beyond) < 0.0)
    assert beyond[-1] > 0.0


@pytest.mark.parametrize(("name", "energy", "depth"), CASES)
def test_three_gaussians_describe_the_law(name, energy, depth):
    """Shares beyond 2 to 8 sigma within 10 %, core width free within 5 % of the differential Moliere power."""
    sigma = core_sigma_mm(name, energy, depth)
    q = np.array([2.0, 3.0, 4.0, 5.0, 6.0, 8.0])
    beyond = displacement_beyond(name, "water", energy, depth_mm=depth, radius_mm=q * sigma)
    near, far = tail_shares(name, energy, depth)
    fits = []
    for core in np.linspace(0.95, 1.05, 21):
        law = (1.0 - near - far) * np.exp(-0.5 * (q / core) ** 2)
        law += near * np.exp(-0.5 * (q / core / TAIL_SIGMAS[0]) ** 2)
        law += far * np.exp(-0.5 * (q / core / TAIL_SIGMAS[1]) ** 2)
        fits.append(np.abs(law / beyond - 1.0).max())
    assert min(fits) < 0.10


def test_far_tail_is_single_scattering_by_nuclei():
    """Far out, what lies beyond a radius is the Rutherford integral of chi_c^2 (z - z')^2 / r^2 over the path.

    In hydrogen, whose nucleus is a point here. The next term is of the order of 8 sigma^2 / r^2: twice the mean square
    of a Gaussian shift in the plane against r^2, times two for the slope of the law.
    """
    energy, depth = 150.0, 60.0
    gas = from_fractions("light", {"H": 1.0}, density_g_cm3=1.0)
    table = range_table("proton", gas)
    path = (np.arange(4000) + 0.5) * depth / 4000.0
    pv = pv_mev("proton", table.energy_mev(float(table.range_mm(energy)) - path))
    strength = 0.157 / 1.008 * 0.1 * np.sum(((depth - path) / pv) ** 2) * depth / 4000.0
    sigma = float(np.sqrt(fermi_eyges_moments("proton", gas, energy, depth_mm=depth)[2]))
    radius = np.array([9.0, 11.0]) * sigma
    beyond = displacement_beyond("proton", gas, energy, depth_mm=depth, radius_mm=radius, electrons=False)
    np.testing.assert_allclose(beyond, strength / radius**2 * (1.0 + 8.0 * (sigma / radius) ** 2), rtol=0.1)


def test_sum_of_core_and_tails_keeps_the_radius_of_one_e_th():
    shares = np.array([[0.0, 0.0], [0.06, 0.004], [0.07, 0.009]])
    for (near, far), ratio in zip(shares, core_variance_share(shares), strict=True):
        weights, squares = np.array([1.0 - near - far, near, far]), ratio * np.array([1.0, *TAIL_SIGMAS]) ** 2
        density = lambda r2, w=weights, s=squares: (w / s * np.exp(-0.5 * r2 / s)).sum()  # noqa: E731
        assert density(2.0) / density(0.0) == pytest.approx(np.exp(-1.0), rel=1e-9)


def test_tails_fade_with_depth():
    """The more scatterings, the nearer to a Gaussian."""
    shares = tail_shares("proton", 150.0, np.array([5.0, 40.0, 80.0, 120.0, 150.0]))
    assert np.all(np.diff(shares, axis=0) < 0.0)
