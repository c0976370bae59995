"""What must hold for any depth curve: energy, particles, limits, scaling, refusals."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

import dosekit as dk
from dosekit.basis.components import COMPONENTS
from dosekit.depths.angles import COSINES, WEIGHTS, diffusion_matrices, kappa_of, shares
from dosekit.depths.broad import convolve_planes, plane_from_shells
from dosekit.depths.coarse import coarse_grid
from dosekit.depths.core import solve_core
from dosekit.depths.leptons import annihilation_cm2_g
from dosekit.depths.library import depth_library
from dosekit.depths.muons import muon_capture_share
from dosekit.depths.tables import beta_samples, node_spread
from dosekit.errors import BeamError, InputError, SizeError, UnknownNameError, ValidityWarning

BEAMS = {
    "pi-": dk.Beam("pi-", momentum_mev_c=150, momentum_sigma=0.02),
    "pi+": dk.Beam("pi+", momentum_mev_c=150, momentum_sigma=0.02),
    "mu-": dk.Beam("mu-", momentum_mev_c=130),
    "mu+": dk.Beam("mu+", momentum_mev_c=130, momentum_sigma=0.01),
    "proton": dk.Beam("proton", kinetic_energy_mev=120),
    "e-": dk.Beam("e-", momentum_mev_c=60),
    "mixed": dk.Beam("pi-", momentum_mev_c=150, momentum_sigma=0.02, contaminants={"mu-": 0.1, "e-": 0.2}),
}
STACK = dk.Layers(
    [
        ("muscle_skeletal", 40),
        ("bone_cortical", 12),
        (dk.material("lung_tissue", density_g_cm3=0.3), 60),
        ("water", 200),
    ]
)
MEDIA = {"water": "water", "bone_cortical": "bone_cortical", "adipose": "adipose", "stack": STACK}


def balance(curve):
    a = curve.attrs
    spent = sum(a[f"energy_{name}_mev"] for name in ("deposited", "escaped", "neutrino", "binding", "electron_rest"))
    return spent / a["energy_in_mev"] - 1.0


@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
@pytest.mark.parametrize("medium", MEDIA)
@pytest.mark.parametrize("name", BEAMS)
def test_energy_in_is_energy_out(name, medium, yields):
    if medium in ("bone_cortical", "adipose") and yields == "cascade":
        pytest.skip("one yield set is enough where neutron histories are simulated")
    curve = dk.depth_curve(BEAMS[name], MEDIA[medium], yields=yields, bin_mm=2.0)
    assert abs(balance(curve)) < 2e-3
    for part in ("deposited", "escaped", "neutrino"):
        assert curve.attrs[f"energy_{part}_mev"] >= -1e-9
    # a negative muon leaves an electron; a positron takes one of the medium with it
    electron = curve.attrs["energy_electron_rest_mev"]
    assert (-0.512 < electron < 0.0) if name in ("pi+", "mu+") else (-1e-9 <= electron < 0.512)
    inside = float((curve["energy"] * curve.attrs["bin_mm"]).sum())
    assert inside == pytest.approx(curve.attrs["energy_deposited_mev"], rel=0.02)


def test_positrons_give_their_rest_energy_to_photons():
    settings = {"bin_mm": 2.0, "depth_mm": 1000.0, "width_mm": None}
    kinetic = dk.Beam("e+", momentum_mev_c=60).kinetic_energy_mev
    curve = dk.depth_curve(dk.Beam("e+", momentum_mev_c=60), "water", **settings)
    assert abs(balance(curve)) < 2e-3
    assert curve.attrs["energy_electron_rest_mev"] == pytest.approx(-1.022, abs=0.02)
    assert curve.attrs["energy_in_mev"] == pytest.approx(kinetic)
    # a little annihilates early: less reach than electrons
    electrons = dk.depth_curve(dk.Beam("e-", momentum_mev_c=60), "water", **settings)
    deep = slice(200.0, 240.0)
    assert float(curve["energy"].sel(depth=deep).sum()) < float(electrons["energy"].sel(depth=deep).sum())


def test_annihilation_in_flight_has_its_limits():
    water = dk.material("water")
    slow, fast = np.array([1e-4, 200.0])
    area = np.pi * 2.8179403262e-13**2 * water.electrons_per_gram
    beta = np.sqrt(1.0 - 1.0 / (1.0 + slow / 0.511) ** 2)
    # Dirac: pi r_e^2 / beta for slow positrons; pi r_e^2 (ln 2 gamma - 1) / gamma for fast ones
    assert float(annihilation_cm2_g(water, slow)) == pytest.approx(area / beta, rel=0.01)
    gamma = 1.0 + fast / 0.511
    assert float(annihilation_cm2_g(water, fast)) == pytest.approx(area / gamma * (np.log(2 * gamma) - 1), rel=0.02)


def test_hydrogen_keeps_muons_in_the_cascade_set_alone():
    water, carbon = dk.material("water"), dk.material("graphite")
    oxygen = 1.0 - 1795.0 / 2197.0
    assert muon_capture_share(water) == pytest.approx(oxygen)
    # Z for hydrogen, 0.56 Z for oxygen: 2 / 6.48 stay
    assert muon_capture_share(water, yields="cascade") == pytest.approx(oxygen * (1.0 - 2.0 / 6.48), rel=0.005)
    assert muon_capture_share(carbon, yields="cascade") == pytest.approx(muon_capture_share(carbon))


@pytest.mark.parametrize("depth_mm", [247.0, 248.0, 250.0, 300.0])
def test_the_end_of_a_stack_takes_nothing_away_and_adds_nothing(depth_mm):
    """What leaves escapes. Only what a longer stack scatters back is missing, and that comes smoothly."""
    beam = dk.Beam("pi-", momentum_mev_c=153.7, contaminants={"mu-": 0.06, "e-": 0.08})
    curve, longer = (dk.depth_curve(beam, "water", depth_mm=depth) for depth in (depth_mm, 420.0))
    assert abs(balance(curve)) < 1e-3
    longer = longer.isel(depth=slice(0, len(curve["depth"])))
    peak = float(longer["energy"].sum("component").max())
    for name in COMPONENTS:
        ours, theirs = (c["energy"].sel(component=name).to_numpy() for c in (curve, longer))
        assert np.max(np.abs(ours - theirs)) < 1e-3 * peak, name
    # electrons run ahead: there is no scattering back to speak of, and no edge in front
    electrons, theirs = (c["energy"].sel(component="contaminant_electron").to_numpy() for c in (curve, longer))
    np.testing.assert_allclose(electrons[-12:], theirs[-12:], rtol=0.03)  # cells differ a little
    assert np.max(np.abs(np.diff(electrons[:12]))) < 0.02 * electrons[0]
    for name in ("decay", "contaminant_muon"):
        share = (curve["energy"].sel(component=name) / longer["energy"].sel(component=name)).to_numpy()[-10:]
        assert np.all(np.diff(share) < 0.005), name
        assert share[-1] > 0.75, name


def test_nothing_is_negative_and_nothing_is_missing():
    curve = dk.depth_curve(BEAMS["mixed"], "water")
    assert list(curve["component"].to_numpy()) == list(COMPONENTS)
    for name in ("energy", "stops", "decays", "reactions", "fluence", "let_dose"):
        values = curve[name].to_numpy()
        assert np.all(np.isfinite(values)), name
        assert np.min(values) > -1e-9, name
    assert curve.attrs["caution"].startswith("RESEARCH ONLY")
    for name in COMPONENTS:
        assert float(curve["energy"].sel(component=name).sum()) > 0.0, name


def test_particles_are_counted():
    curve = dk.depth_curve(BEAMS["pi-"], "water", depth_mm=400.0)
    reacted = float(curve["reactions"].sel(channel=["absorption", "charge_exchange"]).sum())
    ended = float(curve["stops"].sum()) + float(curve["decays"].sum()) + reacted
    # inelastic collisions mostly give the pion back; a few end in pi+ or in nothing
    assert 0.97 < ended < 1.005


def test_slowing_down_alone_gives_all_kinetic_energy():
    beam = dk.Beam("pi-", momentum_mev_c=150)
    curve = dk.depth_curve(beam, "water", nuclear=False, decays=False, depth_mm=300.0)
    assert float(curve["energy"].sum()) == pytest.approx(beam.kinetic_energy_mev, rel=2e-4)
    assert float(curve["stops"].sum()) == pytest.approx(1.0, abs=1e-6)
    assert float(curve["energy"].sel(component=["in_flight", "decay", "star_light"]).sum()) == 0.0


def test_thin_slab_gives_the_stopping_power():
    from dosekit.beams.stopping import stopping_power_mev_mm

    core = solve_core("pi-", 170.0, spread=0.0, layers=((dk.material("water"), 1.0),), bin_mm=1.0, yields="cascade",
                      nuclear=False, decays=False, detour=False)  # fmt: skip
    assert float(core.deposit[0]) == pytest.approx(float(stopping_power_mev_mm("pi-", "water", 80.25)), rel=1e-3)


def test_density_scales_depth():
    thin = dk.material("water", density_g_cm3=0.5)
    full = dk.depth_curve(BEAMS["pi-"], "water", bin_mm=1.0, depth_mm=300.0, width_mm=None)
    half = dk.depth_curve(BEAMS["pi-"], thin, bin_mm=2.0, depth_mm=600.0, width_mm=None)
    one = full["energy"].sel(component=["primary", "star_light", "star_heavy"]).to_numpy()
    two = 2.0 * half["energy"].sel(component=["primary", "star_light", "star_heavy"]).to_numpy()
    # decay takes twice as many in the longer path; the rest scales
    assert np.max(np.abs(one - two)) < 0.03 * np.max(one)


def test_equal_layers_are_one_medium():
    whole = dk.depth_curve(BEAMS["pi-"], "water", depth_mm=260.0)
    parts = dk.depth_curve(BEAMS["pi-"], dk.Layers([("water", 60), ("water", 40), ("water", 160)]))
    assert float(np.max(np.abs(whole["energy"] - parts["energy"]))) < 2e-3 * float(
        whole["energy"].sum("component").max()
    )


def test_fixed_range_shifter_takes_range_away():
    bare = dk.depth_curve(BEAMS["pi-"], "water", depth_mm=250.0)
    beam = BEAMS["pi-"].replace(range_shifter=("water", 30.0))
    shifted = dk.depth_curve(beam, "water", depth_mm=220.0)
    peak = lambda c: float(c["depth"][int(np.argmax(c["stops"].to_numpy()))])  # noqa: E731
    assert peak(bare) - peak(shifted) == pytest.approx(30.0, abs=1.0)
    assert shifted.attrs["energy_in_shifter_mev"] > 5.0


def test_contaminants_add():
    clean = dk.depth_curve(BEAMS["pi-"], "water", depth_mm=300.0)
    mixed = dk.depth_curve(BEAMS["mixed"], "water", depth_mm=300.0)
    own = [name for name in COMPONENTS if not name.startswith("contaminant")]
    np.testing.assert_allclose(clean["energy"].sel(component=own), mixed["energy"].sel(component=own), rtol=1e-12)
    muons = dk.depth_curve(dk.Beam("mu-", momentum_mev_c=150, momentum_sigma=0.02), "water", depth_mm=300.0)
    np.testing.assert_allclose(
        mixed["energy"].sel(component="contaminant_muon"), 0.1 * muons["energy"].sum("component"), rtol=1e-9, atol=1e-12
    )


def test_star_scale_is_linear_in_charged_components():
    one = dk.depth_curve(BEAMS["pi-"], "water")
    more = dk.depth_curve(BEAMS["pi-"], "water", star_scale=1.2)
    light = ["star_light", "star_heavy"]
    # a little of these components comes from captured decay muons, which the factor leaves alone
    np.testing.assert_allclose(
        1.2 * one["energy"].sel(component=light), more["energy"].sel(component=light), rtol=2e-4, atol=2e-5
    )
    np.testing.assert_allclose(
        one["energy"].sel(component="star_neutron"), more["energy"].sel(component="star_neutron")
    )
    assert abs(balance(more)) < 2e-3


def test_same_input_same_bytes():
    from dosekit.depths.solver import _solve

    first = dk.depth_curve(BEAMS["mixed"], "water")["energy"].to_numpy().tobytes()
    _solve.cache_clear()
    assert dk.depth_curve(BEAMS["mixed"], "water")["energy"].to_numpy().tobytes() == first


def test_wider_media_hold_more():
    narrow, wide, endless = (
        float(dk.depth_curve(BEAMS["pi-"], "water", width_mm=w)["energy"].sel(component="star_neutron").sum())
        for w in (200.0, 600.0, None)
    )
    assert narrow < wide < endless


def test_let_of_primaries_is_between_slow_and_fast():
    curve = dk.depth_curve(BEAMS["pi-"], "water")
    let = curve["let_dose"].sel(component="primary").to_numpy()
    assert 0.25 < let[5] < 0.6
    top = int(np.argmax(curve["stops"].to_numpy()))
    assert let[top] > 1.5


@pytest.mark.parametrize(
    ("options", "error"),
    [
        ({"bin_mm": 0.0}, InputError),
        ({"bin_mm": float("nan")}, InputError),
        ({"bin_mm": "thin"}, InputError),
        ({"depth_mm": -5.0}, InputError),
        ({"depth_mm": float("inf")}, InputError),
        ({"depth_mm": 1e5, "bin_mm": 0.1}, SizeError),
        ({"star_scale": -1.0}, InputError),
        ({"star_scale": float("nan")}, InputError),
        ({"yields": "guess"}, UnknownNameError),
        ({"width_mm": 0.0}, InputError),
    ],
)
def test_bad_settings_are_refused(options, error):
    with pytest.raises(error):
        dk.depth_curve(BEAMS["pi-"], "water", **options)


def test_bad_media_and_beams_are_refused():
    with pytest.raises(InputError):
        dk.depth_curve(BEAMS["pi-"], "wood")
    with pytest.raises(BeamError):
        dk.depth_curve("pi-", "water")
    for parts in ([], [("water", -3)], [("water", float("nan"))], ["water"], [("water", "thick")]):
        with pytest.raises(InputError):
            dk.Layers(parts)


def test_shares_keep_number_and_mean_cosine():
    for mean in (-0.6, -0.1, 0.0, 0.3, 0.8):
        found = shares(kappa_of(mean))
        assert float(np.sum(found)) == pytest.approx(1.0, abs=1e-12)
        assert float(np.sum(found * COSINES)) == pytest.approx(mean, abs=0.01)
        tilted = shares(kappa_of(mean), 0.5)
        assert float(np.sum(tilted * COSINES)) == pytest.approx(0.5 * mean, abs=0.01)


def test_diffusion_of_directions():
    forward = np.zeros(16)
    forward[-1] = 1.0
    for amount in (0.01, 0.1, 0.5, 20.0):
        turned = forward @ diffusion_matrices(amount)[0]
        assert float(np.sum(turned)) == pytest.approx(1.0, abs=1e-12)
        assert float(turned @ COSINES) == pytest.approx(COSINES[-1] * np.exp(-amount), abs=0.02)
    np.testing.assert_allclose(forward @ diffusion_matrices(50.0)[0], 0.5 * WEIGHTS, atol=1e-6)


def test_spectra_keep_number_mean_and_energy():
    mean, rms, top = np.array([20.0, 50.0]), np.array([28.0, 52.0]), np.array([110.0, 79.0])
    drawn = beta_samples(mean, rms, top, samples=200)
    np.testing.assert_allclose(np.mean(drawn, axis=1), mean, rtol=1e-9)
    np.testing.assert_allclose(np.sqrt(np.mean(drawn**2, axis=1)), rms, rtol=0.02)
    nodes = np.linspace(0.0, 12.0, 60) ** 2
    spread = node_spread(drawn, nodes)
    np.testing.assert_allclose(np.sum(spread, axis=1), 1.0, rtol=1e-12)
    np.testing.assert_allclose(spread @ nodes, mean, rtol=1e-9)


def test_planes_from_shells_keep_energy():
    edges = np.array([0.0, 1.0, 5.0, 20.0, 80.0])
    energy = np.array([1.0, 2.0, 3.0, 4.0])
    plane = plane_from_shells(energy, edges, bin_mm=1.0, half_length_mm=90.0)
    assert float(np.sum(plane)) == pytest.approx(10.0, rel=1e-9)
    np.testing.assert_allclose(plane, plane[::-1], rtol=1e-9)
    ahead = plane_from_shells(energy, edges, bin_mm=1.0, half_length_mm=90.0, mean_cosine=0.2)
    assert float(np.sum(ahead[91:]) - np.sum(ahead[:90])) == pytest.approx(
        3.0, rel=0.1
    )  # 3/2 g of 10 MeV, less what lies in the centre bin
    narrow = plane_from_shells(energy, edges, bin_mm=1.0, half_length_mm=90.0, width_mm=40.0)
    assert float(np.sum(narrow)) < 10.0
    source = np.zeros(50)
    source[[3, 30]] = 1.0, 2.0
    np.testing.assert_allclose(convolve_planes(source, plane), np.convolve(source, plane)[90:140], atol=1e-12)


def test_spectra_hold_the_beam():
    from dosekit.depths.quality import fluence_spectrum

    beam = dk.Beam("pi-", momentum_mev_c=150, momentum_sigma=0.02)
    edges = np.linspace(0.0, 80.0, 161)
    spectrum = fluence_spectrum(beam, "water", depth_mm=[0.0, 60.0, 120.0], energy_edges_mev=edges)
    number = (spectrum * 0.5).sum("energy").to_numpy()
    mean = (spectrum * spectrum["energy"] * 0.5).sum("energy").to_numpy() / number
    curve = dk.depth_curve(beam, "water", depth_mm=200.0)
    at = lambda name, z: float(np.interp(z, curve["depth"], curve[name]))  # noqa: E731
    assert number[0] == pytest.approx(1.0, abs=1e-6)
    assert mean[0] == pytest.approx(beam.kinetic_energy_mev, rel=5e-3)
    for index, z in ((1, 60.0), (2, 120.0)):
        assert number[index] == pytest.approx(at("fluence", z), rel=2e-3)
        assert mean[index] == pytest.approx(at("mean_energy", z), rel=1e-2)
    for bad in ({"depth_mm": [-1.0], "energy_edges_mev": edges}, {"depth_mm": [1.0], "energy_edges_mev": [2.0, 1.0]}):
        with pytest.raises(InputError):
            fluence_spectrum(beam, "water", **bad)


def test_let_of_stars_follows_their_spectra():
    from dosekit.beams.ranges import range_table
    from dosekit.depths.quality import _integral_of_stopping, star_let_kev_um

    # a proton that stops: energy-averaged stopping power, by itself
    water = dk.material("water")
    t = np.linspace(1e-3, 10.0, 20001)
    alone = np.trapezoid(range_table("proton", water).stopping_mev_mm(t), t)
    assert float(_integral_of_stopping("proton", water, np.array([10.0]))[0]) == pytest.approx(alone, rel=5e-3)
    for yields in ("evaluated", "cascade"):
        let = star_let_kev_um("water", yields=yields)
        assert 5.0 < let["star_light"] < 30.0
        assert 60.0 < let["star_heavy"] < 300.0
        assert let["star_photon"] < let["star_neutron"] < let["star_heavy"]


def test_cells_come_back_through_a_monotone_cubic(rng):
    """As scipy's, on cells of length 1; what lies beyond the stack is left out."""
    water = dk.material("water")
    edges = np.linspace(0.0, 47.3, 70)
    grid = coarse_grid("proton", 60.0, layers=((water, 47.3),), edges_mm=edges, layer=np.zeros(69, int), step_mm=2.0)
    assert grid.cells == 24
    for values in (rng.random(24), rng.normal(size=24), np.r_[np.zeros(10), 1.0, 0.2, np.zeros(12)]):
        total = np.concatenate([[0.0], np.cumsum(values)])
        theirs = np.diff(PchipInterpolator(np.arange(25.0), total)(edges / 2.0))
        np.testing.assert_allclose(grid.to_bins(values), theirs, rtol=1e-10, atol=1e-13)


def test_a_beam_outside_the_tables_is_said():
    fast = dk.Beam("pi-", momentum_mev_c=300.0)
    with pytest.warns(ValidityWarning, match="made for up to 150 MeV"):
        dk.depth_curve(fast, "water", bin_mm=5.0)
    with pytest.warns(ValidityWarning):
        depth_library(fast, [200.0], bin_mm=5.0)
    with pytest.raises(SizeError, match="say depth_mm"):
        dk.depth_curve(BEAMS["pi-"], "air", bin_mm=50.0)
