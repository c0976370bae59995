"""Depth curves against independent transport results, case by case; tests/reference/README.md says how they were made.

Bars: each component and the total within 2 % of the peak total, or within 1 mm, at every depth (slabs: 3 % or 1.5
mm); stops within 1 %; centre of the Gaussian fitted to the core of stops within 0.5 mm and its sigma within 5 %;
reactions within 5 %.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.optimize import curve_fit

import dosekit as dk
from dosekit.basis.components import STAR_COMPONENTS
from dosekit.beams.ranges import range_table

import reference_cases

pytestmark = pytest.mark.reference

PION = {"momentum_mev_c": 170}
LUNG = ("lung_tissue", 0.30)


def setting(case):
    """Return beam, medium and options of a case, from the README of the reference."""
    spread = {"momentum_sigma": 0.02}
    water = dk.material("water")
    if case == "w170_em":
        return dk.Beam("pi-", **PION), water, {"nuclear": False, "decays": False}
    if case == "w170_dp0":
        return dk.Beam("pi-", **PION), water, {}
    if case == "w170_dp2":
        return dk.Beam("pi-", **PION, **spread), water, {}
    if case == "w170_piplus":
        return dk.Beam("pi+", **PION, **spread), water, {}
    if case == "mu170":
        return dk.Beam("mu-", **PION), water, {}
    if case == "p150_water":
        return dk.Beam("proton", kinetic_energy_mev=150), water, {}
    lung = dk.material(LUNG[0], density_g_cm3=LUNG[1])
    stack = dk.Layers([("muscle_skeletal", 50), ("bone_cortical", 20), (lung, 80), ("water", 250)])
    return dk.Beam("pi-", **PION, **spread), stack, {}


CASES = ("w170_em", "w170_dp0", "w170_dp2", "w170_piplus", "mu170", "p150_water", "slab_a")


@cache
def pair(case):
    """Return our curve and the reference columns."""
    columns = reference_cases.depth(case)
    beam, medium, options = setting(case)
    depth = float(len(columns["depth_mm"]))
    return dk.depth_curve(beam, medium, yields="cascade", bin_mm=1.0, depth_mm=depth, **options), columns


def excess(z, ours, theirs, shift_mm):
    """Return by how much ours misses theirs when it may be moved by up to a distance."""
    moved = [np.interp(z + s, z, ours) for s in np.linspace(-shift_mm, shift_mm, 21)]
    return np.maximum(np.maximum(np.min(moved, axis=0) - theirs, theirs - np.max(moved, axis=0)), 0.0)


def core(z, stops):
    """Return centre and sigma of a Gaussian fitted where stops are over 2 % of their maximum."""
    top = int(np.argmax(stops))
    keep = (stops > 0.02 * stops[top]) & (np.abs(z - z[top]) < 60.0)
    gauss = lambda x, a, m, s: a * np.exp(-0.5 * ((x - m) / s) ** 2)  # noqa: E731
    return curve_fit(gauss, z[keep], stops[keep], p0=[stops[top], z[top], 5.0])[0][1:]


# what misses its bar, with what was measured; each goes when the physics improves
COMPONENT_MISSES = {
    ("w170_dp2", "total"): "2.3 % at 192.5 mm: star neutrons 12 % above the reference",
    ("mu170", "stars and decay"): (
        "2.6 % at 288.5 mm: the reference has 5.9 MeV of charged particles per nuclear capture, here 1.8 (Measday); "
        "electrons and neutrons agree"
    ),
}
LONG_STEPS = (
    ": steps of 1 mm account for about 0.2 mm of it up to two thirds of the range (test_offset_in_range_is_that_of_"
    "long_steps); the rest, where the reference's stopping drops by 1 % at once, is not shown by a test. "
    "Histories with exact losses: w170_em 196.7 mm"
)
CORE_MISSES = {
    ("w170_em", "centre"): "196.79 mm against 197.43" + LONG_STEPS,
    ("w170_dp0", "centre"): "196.67 mm against 197.20" + LONG_STEPS,
    ("w170_dp2", "centre"): "195.59 mm against 196.10" + LONG_STEPS,
    ("mu170", "centre"): "286.54 mm against 287.18" + LONG_STEPS,
}
STOP_MISSES = {
    "p150_water": (
        "1.083 against 1.120: the reference's cascade makes about 0.3 more slow protons per collision than the "
        "multiplicities after ICRU Report 63 in use (1.5 at 150 MeV); recoils of hydrogen count in both"
    )
}


def components_of(case):
    names = ["total", *reference_cases.components(reference_cases.depth(case))]
    if case == "mu170":
        # the reference counts electrons of decays in orbit as star_photon
        return ["total", "primary", "stars and decay"]
    if case == "w170_em":
        return ["total", "primary"]
    if case in ("w170_piplus", "p150_water"):
        return [name for name in names if not name.startswith("star")]
    return names


def marked(case, name, misses):
    reason = misses.get((case, name))
    marks = [pytest.mark.xfail(strict=True, reason=f"measured {reason}")] if reason else []
    return pytest.param(case, name, marks=marks, id=f"{case}-{name.replace(' ', '_')}")


@pytest.mark.parametrize(
    ("case", "name"), [marked(case, name, COMPONENT_MISSES) for case in CASES for name in components_of(case)]
)
def test_component(case, name, evidence):
    curve, columns = pair(case)
    z = columns["depth_mm"]
    theirs = reference_cases.components(columns)
    if name == "total":
        ours, ref = curve["energy"].sum("component").to_numpy(), columns["total"]
    elif name == "stars and decay":
        both = [*STAR_COMPONENTS, "decay"]
        ours = curve["energy"].sel(component=both).sum("component").to_numpy()
        ref = sum(theirs[part] for part in both)
    else:
        ours, ref = curve["energy"].sel(component=name).to_numpy(), theirs[name]
    peak = float(np.max(columns["total"]))
    bar, shift = (0.03, 1.5) if case.startswith("slab") else (0.02, 1.0)
    miss = excess(z, ours, ref, shift) / peak
    worst = int(np.argmax(miss))
    evidence(what=f"{case}: {name}, largest miss after {shift:g} mm", source="tests/reference", value=0.0,
             ours=100.0 * float(miss[worst]), unit="% of peak", bar=f"{100 * bar:g} %", kind="reference")  # fmt: skip
    assert miss[worst] <= bar, f"{100 * miss[worst]:.2f} % of the peak at {z[worst]:g} mm"


def stop_case(case):
    reason = STOP_MISSES.get(case)
    return pytest.param(case, marks=[pytest.mark.xfail(strict=True, reason=f"measured {reason}")] if reason else [])


@pytest.mark.parametrize("case", [stop_case(case) for case in CASES if case != "w170_piplus"])
def test_stops(case, evidence):
    curve, columns = pair(case)
    ours, ref = float(curve["stops"].sum()), float(np.sum(columns["stops"]))
    evidence(
        what=f"{case}: stops per incident", source="tests/reference", value=ref, ours=ours, bar="1 %", kind="reference"
    )
    assert ours == pytest.approx(ref, rel=0.01)


def test_positive_pions_decay_at_rest(evidence):
    curve, columns = pair("w170_piplus")
    ours, ref = float(curve["decays"].sum()), float(np.sum(columns["decays"]))
    evidence(
        what="w170_piplus: decays per incident",
        source="tests/reference",
        value=ref,
        ours=ours,
        bar="1 %",
        kind="reference",
    )
    assert ours == pytest.approx(ref, rel=0.01)


@pytest.mark.parametrize(
    ("case", "what"), [marked(c, w, CORE_MISSES) for c in CASES if c != "w170_piplus" for w in ("centre", "sigma")]
)
def test_core_of_stops(case, what, evidence):
    curve, columns = pair(case)
    z = columns["depth_mm"]
    ours, ref = core(z, curve["stops"].to_numpy()), core(z, columns["stops"])
    index = ("centre", "sigma").index(what)
    mine, theirs = abs(float(ours[index])), abs(float(ref[index]))
    evidence(what=f"{case}: {what} of the stop core", source="tests/reference", value=theirs, ours=mine, unit="mm",
             bar="0.5 mm" if what == "centre" else "5 %", kind="reference")  # fmt: skip
    if what == "centre":
        assert abs(mine - theirs) <= 0.5
    else:
        assert mine == pytest.approx(theirs, rel=0.05)


@pytest.mark.parametrize(("case", "depth_mm"), [("w170_em", 60), ("w170_em", 140), ("mu170", 100), ("mu170", 215)])
def test_offset_in_range_is_that_of_long_steps(case, depth_mm, evidence):
    """The reference moves in steps of 1 mm; while a step takes under 1 % of the energy, codes use S at its start.

    That loses less energy than the way really costs. What is missing at a depth, as range, must be what such steps
    make of our own stopping power; the stopping powers then agree. The bar of 0.06 mm is ours and was set with the
    figures known (0.19 and 0.17 against 0.22 and 0.23): under the noise of the reference, 0.3 % of the peak for each
    mm, which is up to 0.1 mm here. This says where part of the offset comes from, not that all of it is explained.
    """
    curve, columns = pair(case)
    ours = curve["energy"].sel(component="primary").to_numpy()[:depth_mm]
    beam, medium, _ = setting(case)
    table = range_table(beam.particle, medium)
    start = float(beam.kinetic_energy_mev)
    less = float(np.sum(ours) - np.sum(columns["primary"][:depth_mm]))
    measured = less / float(table.stopping_mev_mm(start - float(np.sum(ours))))
    stepped = start
    for _ in range(depth_mm):
        stepped -= float(table.stopping_mev_mm(stepped))
    expected = float(table.range_mm(stepped)) - (float(table.range_mm(start)) - depth_mm)
    evidence(what=f"{case}: offset in range at {depth_mm} mm, that of 1 mm steps", source="tests/reference",
             value=measured, ours=expected, unit="mm", bar="0.06 mm", kind="reference")  # fmt: skip
    assert measured > 0.0
    assert expected == pytest.approx(measured, abs=0.06)


@pytest.mark.parametrize("case", ["w170_dp0", "w170_dp2", "w170_piplus", "p150_water", "slab_a"])
def test_reactions_in_flight(case, evidence):
    curve, columns = pair(case)
    ours = float(curve["reactions"].sel(channel=["absorption", "inelastic", "charge_exchange"]).sum())
    ref = float(np.sum(columns["in_flight"]))
    evidence(
        what=f"{case}: reactions in flight", source="tests/reference", value=ref, ours=ours, bar="5 %", kind="reference"
    )
    assert ours == pytest.approx(ref, rel=0.05)


@pytest.mark.parametrize("case", ["w170_dp0", "w170_dp2", "w170_piplus", "p150_water", "slab_a", "mu170"])
def test_primary_energy_as_a_whole(case, evidence):
    curve, columns = pair(case)
    ours, ref = float(curve["energy"].sel(component="primary").sum()), float(np.sum(columns["primary"]))
    evidence(what=f"{case}: energy of the primary component", source="tests/reference", value=ref, ours=ours,
             unit="MeV", bar="1 %", kind="reference")  # fmt: skip
    assert ours == pytest.approx(ref, rel=0.01)
