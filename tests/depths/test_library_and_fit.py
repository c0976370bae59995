"""The library over residual range, and beams fitted to measured curves."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

import dosekit as dk
from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.depths.fitting import fit_beam, read_depth_dose
from dosekit.depths.library import QUANTITIES, depth_library, mean_projected_range_mm
from dosekit.errors import FitWarning, InputError, ReachError, UnknownNameError

BEAM = dk.Beam("pi-", momentum_mev_c=160, momentum_sigma=0.02, contaminants={"mu-": 0.08, "e-": 0.15})


def test_library_rows_are_the_curve_seen_from_behind_the_shifter():
    reach = mean_projected_range_mm("pi-", 160.0)
    library = depth_library(BEAM, [reach, reach - 40.0, reach - 90.0])
    np.testing.assert_allclose(library.shift_mm, [0.0, 40.0, 90.0], atol=1e-9)
    for name in QUANTITIES:
        whole = library.quantities[name][0]
        n = len(library.depth_mm) - 90
        np.testing.assert_allclose(library.quantities[name][1][:n], whole[40 : 40 + n], rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(library.quantities[name][2][:n], whole[90 : 90 + n], rtol=1e-9, atol=1e-12)


def test_library_agrees_with_the_curve():
    reach = mean_projected_range_mm("pi-", 160.0)
    library = depth_library(BEAM, [reach])
    n = len(library.depth_mm)
    curve = dk.depth_curve(BEAM, "water", depth_mm=float(n))
    ours, theirs = library.depth_dose()[0], curve["energy"].to_numpy()
    # the library keeps what captured decay muons leave with the decays, the curve with stars
    mixed = [COMPONENTS.index(name) for name in ("decay", *STAR_COMPONENTS)]
    own = [index for index in range(len(COMPONENTS)) if index not in mixed]
    limit = 2e-4 * float(curve["energy"].sum("component").max())
    np.testing.assert_allclose(ours[own], theirs[own], atol=limit)
    np.testing.assert_allclose(ours[mixed].sum(axis=0), theirs[mixed].sum(axis=0), atol=limit)
    stops = library.quantities["core_stops"] + library.quantities["scattered_stops"]
    np.testing.assert_allclose(stops[0], curve["stops"].to_numpy(), rtol=1e-9, atol=1e-12)
    assert library.depth_dose(components=False).shape == (1, n)
    assert library.component_let().shape == (1, len(COMPONENTS), n)


@pytest.mark.parametrize("mode", ["shifter", "momentum"])
def test_stops_lie_at_the_residual_range(mode):
    wanted = np.array([60.0, 90.0, 120.0])
    library = depth_library(BEAM, wanted, mode=mode)
    for row, target in zip(library.quantities["core_stops"], wanted, strict=True):
        mean = float(np.sum(row * library.depth_mm) / np.sum(row))
        # losses take more from the long side of the spread
        assert mean == pytest.approx(target, abs=1.5)
    for name, values in library.extra_sigma_mm.items():
        assert np.all(values >= 0.0), name
        assert np.all(np.isfinite(values)), name
    assert np.all(np.diff(library.kinetic_energy_mev[:, :40], axis=1) < 0.0)


def test_momentum_mode_has_sharper_shallow_peaks():
    wide, sharp = (
        depth_library(BEAM, [60.0], mode=mode).quantities["core_stops"][0] for mode in ("shifter", "momentum")
    )
    assert np.max(sharp) > 1.3 * np.max(wide)


def test_library_refusals():
    with pytest.raises(ReachError, match="raise the momentum"):
        depth_library(BEAM, [300.0])
    for bad in ([], [0.0], [float("nan")], [[10.0, 20.0]]):
        with pytest.raises(InputError):
            depth_library(BEAM, bad)
    with pytest.raises(UnknownNameError):
        depth_library(BEAM, [60.0], mode="magic")
    with pytest.raises(InputError):
        depth_library(BEAM, [60.0], bin_mm=float("nan"))


def invented(offset_mm=0.0, noise=0.0, rng=None):
    beam = dk.Beam("pi-", momentum_mev_c=150, momentum_sigma=0.03, contaminants={"e-": 0.18})
    curve = dk.depth_curve(beam, "water", depth_mm=300.0)
    depth = np.arange(4.0, 250.0, 6.0)
    dose = CubicSpline(curve["depth"].to_numpy(), curve["energy"].sum("component").to_numpy())(depth + offset_mm)
    if rng is not None:
        dose = dose * (1.0 + noise * rng.standard_normal(len(depth)))
    return depth, 100.0 * dose / np.max(dose)


@pytest.mark.slow
def test_a_known_beam_is_found_again(rng):
    depth, dose = invented(noise=0.005, rng=rng)
    start = dk.Beam("pi-", momentum_mev_c=146, momentum_sigma=0.02, contaminants={"e-": 0.1})
    found = fit_beam(depth, dose, start, free=("momentum_mev_c", "momentum_sigma", "e-"))
    truth = {"momentum_mev_c": 150.0, "momentum_sigma": 0.03, "e-": 0.18}
    floor = {"momentum_mev_c": 0.05, "momentum_sigma": 2e-4, "e-": 0.005}
    for name, value in truth.items():
        assert abs(found.parameters[name] - value) < 4.0 * found.sigma[name] + floor[name], name
    assert found.residual_rms < 0.006
    assert found.covariance.shape == (3, 3)
    np.testing.assert_allclose(found.covariance, found.covariance.T)
    assert set(found.data) == {"measured", "fitted", "residual"}
    assert found.data.attrs["caution"].startswith("RESEARCH ONLY")


@pytest.mark.slow
def test_an_offset_moves_with_the_momentum():
    depth, dose = invented(offset_mm=1.5)
    start = dk.Beam("pi-", momentum_mev_c=148, momentum_sigma=0.025, contaminants={"e-": 0.18})
    with pytest.warns(FitWarning, match="momentum_mev_c and offset_mm stand for each other"):
        found = fit_beam(depth, dose, start, free=("momentum_mev_c", "momentum_sigma", "offset_mm"))
    # what is sure is where the peak lies
    reach = mean_projected_range_mm("pi-", found.parameters["momentum_mev_c"]) - found.parameters["offset_mm"]
    assert reach == pytest.approx(mean_projected_range_mm("pi-", 150.0) - 1.5, abs=0.15)
    assert found.residual_rms < 0.002
    assert found.correlation[0, 2] > 0.98
    np.testing.assert_allclose(np.diag(found.correlation), 1.0)


@pytest.mark.slow
@pytest.mark.parametrize(("stated", "offset"), [(True, False), (False, True)])
def test_standard_deviations_are_those_of_repeated_noise(stated, offset, rng):
    """The same beam with eight draws of noise: (found - true) / sigma must scatter by 1.

    With eight draws the root mean square is known to 25 %; the bounds are two of that. Errors are stated, or taken from
    the residuals.
    """
    beam = dk.Beam("proton", momentum_mev_c=500.0, momentum_sigma=0.008)
    curve = dk.depth_curve(beam, "water", depth_mm=200.0)
    depth = np.arange(4.0, 160.0, 4.0)
    clean = CubicSpline(curve["depth"].to_numpy(), curve["energy"].sum("component").to_numpy())(depth)
    clean = 100.0 * clean / np.max(clean)
    free = ("momentum_mev_c", "momentum_sigma", *(["offset_mm"] if offset else []))
    truth = {"momentum_mev_c": 500.0, "momentum_sigma": 0.008, "offset_mm": 0.0}
    pulls = []
    for _ in range(8):
        noisy = np.maximum(clean + 0.5 * rng.standard_normal(len(depth)), 0.0)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", FitWarning)
            found = fit_beam(depth, noisy, beam, free=free, uncertainty=np.full(len(depth), 0.5) if stated else None)
        pulls.append([(found.parameters[name] - truth[name]) / found.sigma[name] for name in free])
    spread = np.sqrt(np.mean(np.square(pulls), axis=0))
    assert np.all(spread > 0.5), spread
    assert np.all(spread < 1.5), spread


@pytest.mark.filterwarnings("ignore::dosekit.errors.ValidityWarning")  # the search tries momenta beyond the tables
def test_a_parameter_at_its_limit_is_said():
    beam = dk.Beam("proton", momentum_mev_c=450.0, momentum_sigma=0.01)
    curve = dk.depth_curve(beam, "water", depth_mm=140.0, bin_mm=2.0)
    # momentum cannot come down by more than a fifth
    with pytest.warns(FitWarning, match="limit of momentum_mev_c"):
        fit_beam(
            curve["depth"].to_numpy(),
            curve["energy"].sum("component").to_numpy(),
            beam.replace(momentum_mev_c=600.0),
            free=("momentum_mev_c",),
        )


def test_read_depth_dose(tmp_path):
    place = tmp_path / "curve.csv"
    place.write_text(
        "# scanned\ndepth_mm,dose_percent\n" + "".join(f"{z},{50 + z}\n" for z in (30, 10, 20, 40, 60, 50))
    )
    depth, dose = read_depth_dose(place)
    assert list(depth) == [10, 20, 30, 40, 50, 60]
    assert list(dose) == [60, 70, 80, 90, 100, 110]


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("a,b\n1,2\n", "columns"),
        ("depth_mm,dose\n1,nan\n2,3\n3,4\n4,5\n5,6\n6,7\n", "finite"),
        ("depth_mm,dose\n1,x\n2,3\n", "line 2"),
        ("depth_mm,dose\n1\n2,3\n", "line 2"),
        ("depth_mm,dose\n1,2\n2,3\n", "six pairs"),
        ("depth_mm,dose\n1,2\n2,-3\n3,1\n4,1\n5,1\n6,1\n", "negative"),
        ("depth_mm,dose\n50,0\n52,10\n60,20\n95,30\n100,40\n70,50\n20,60\n", "swapped"),
        ("", "no points"),
    ],
)
def test_damaged_curves_are_refused(tmp_path, text, word):
    place = tmp_path / "curve.csv"
    place.write_text(text)
    with pytest.raises(InputError, match=word):
        read_depth_dose(place)


def test_fit_refusals(tmp_path):
    depth, dose = np.arange(6.0), np.ones(6)
    with pytest.raises(InputError):
        read_depth_dose(tmp_path / "absent.csv")
    with pytest.raises(InputError, match="free parameter"):
        fit_beam(depth, dose, BEAM, free=("colour",))
    with pytest.raises(InputError):
        fit_beam(depth, dose, BEAM, free=())
    with pytest.raises(InputError):
        fit_beam(depth, dose, BEAM, uncertainty=-np.ones(6))


@pytest.mark.parametrize("beam", [BEAM, dk.Beam("proton", kinetic_energy_mev=140)], ids=["pi-", "proton"])
def test_scattered_particles_in_three_classes(beam):
    library = depth_library(beam, [90.0])
    q, sigma = library.quantities, library.extra_sigma_mm
    classes = ("scattered_near", "scattered_oblique", "scattered_wide")
    every = sum(q[name] for name in classes)
    np.testing.assert_allclose(every, q["scattered"], rtol=1e-6, atol=1e-9)
    every = sum(q[f"{name}_stops"] for name in classes)
    np.testing.assert_allclose(every, q["scattered_stops"], rtol=1e-6, atol=1e-9)
    middle = slice(30, 60)  # behind it those that left sideways have stopped near where they left
    assert np.all(sigma["scattered_near"][0, middle] < sigma["scattered"][0, middle])
    assert np.all(sigma["scattered_near"][0, middle] < sigma["scattered_oblique"][0, middle])


def test_spread_of_neutral_products_is_that_of_point_kernels():
    """Sigma and inequality of what fast neutrons and photons of pi0 leave within 300 mm of a point in water."""
    from dosekit.basis.materials import material
    from dosekit.capture.neutrons import EDGES_MM, NODE_ENERGIES_MEV
    from dosekit.capture.photons import NODE_PHOTON_MEV
    from dosekit.capture.profiles import neutron_response, photon_response

    library = depth_library(dk.Beam("pi-", momentum_mev_c=150), [100.0])
    ours = (library.extra_sigma_mm["in_flight_neutral"][0, 50], library.unequal["in_flight_neutral"][0, 50])
    inner, outer = EDGES_MM[:-1], EDGES_MM[1:]
    within = outer <= 300.0
    square = 0.6 * ((outer**5 - inner**5) / (outer**3 - inner**3))[within]
    for response, energies, bar in (
        (neutron_response, NODE_ENERGIES_MEV, 0.1),
        (photon_response, NODE_PHOTON_MEV, 0.3),
    ):
        rows = response(material("water"))[:, : len(outer)][:, within]
        for row in rows[(energies >= 40.0) & (energies <= 120.0)]:
            mean = float(row @ square / row.sum())
            assert float(ours[0]) == pytest.approx(np.sqrt(mean / 3.0), rel=bar)
            assert float(ours[1]) == pytest.approx(1.2 * float(row @ square**2 / row.sum()) / mean**2, rel=bar)
