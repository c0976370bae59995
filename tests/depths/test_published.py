"""Depth curves against an analytic form and against published facts."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import curve_fit
from scipy.special import gamma, pbdv

import dosekit as dk
from dosekit.basis.tables import read_table
from dosekit.beams.straggling import range_sigma_mm
from dosekit.depths.library import mean_projected_range_mm

FACTS = {row["fact"]: row for row in read_table("capture_and_beam_facts").rows()}


def bortfeld(depth_cm, range_cm, sigma_cm, fluence_loss=0.012, local_share=0.6, slow=0.0):
    """Return dose per fluence, T. Bortfeld, Med. Phys. 24 (1997) 2024, eqs. 26 to 28 with p = 1.77, alpha = 0.0022."""
    p, alpha = 1.77, 0.0022
    norm = p * alpha ** (1.0 / p) * (1.0 + fluence_loss * range_cm)
    zeta = (depth_cm - range_cm) / sigma_cm
    near = np.abs(zeta) < 10.0
    z = np.where(near, zeta, 0.0)
    d1 = np.array([pbdv(-1.0 / p, value)[0] for value in z])
    d2 = np.array([pbdv(-1.0 / p - 1.0, value)[0] for value in z])
    front = np.exp(-(z**2) / 4.0) * sigma_cm ** (1.0 / p) * gamma(1.0 / p) / (np.sqrt(2.0 * np.pi) * norm)
    peak = front * (d1 / sigma_cm + (fluence_loss / p + local_share * fluence_loss + slow / range_cm) * d2)
    rest = np.maximum(range_cm - depth_cm, 1e-6)
    plateau = rest ** (1.0 / p - 1.0) + (fluence_loss + p * local_share * fluence_loss) * rest ** (1.0 / p)
    return np.where(near, peak, np.where(depth_cm < range_cm, plateau / norm, 0.0))


# measured; with elastic scattering on hydrogen switched off, which the form does not know: 2.9 and 4.3 %
MISSES = {150.0: "4.5 %", 200.0: "7.0 %"}
RELATIVE_MISSES = {200.0: "4.5 %"}


def proton_cases(misses):
    """Return the energies, those that miss marked."""
    because = (
        "the form knows no elastic scattering on nuclei and hydrogen, which takes protons out of the peak, and lays "
        "secondary protons down on the spot; the independent transport result at 150 MeV misses it by 5 to 8 % "
        "(absolute) and 4.3 % (relative)"
    )
    for energy in (70.0, 100.0, 150.0, 200.0):
        missed = misses.get(energy)
        marks = [pytest.mark.xfail(strict=True, reason=f"measured {missed}: {because}")] if missed else []
        yield pytest.param(energy, marks=marks)


def proton_curve(energy):
    """Return our curve in bins much narrower than the peak: depth in cm, MeV/cm and stops."""
    curve = dk.depth_curve(dk.Beam("proton", kinetic_energy_mev=energy), "water", bin_mm=energy / 1000.0)
    return curve["depth"].to_numpy() / 10.0, curve["energy"].sum("component").to_numpy() * 10.0, curve["stops"]


@pytest.mark.published
@pytest.mark.parametrize("energy", [*proton_cases(MISSES)])
def test_proton_peak_against_the_analytic_form(energy, evidence):
    """3 % of the peak. Range and width are inputs of the form: the mean range and Bohr's width are given to it.

    The form lays reaction energy down on the spot, so it has no build-up: the first 10 mm are left out.
    """
    depth, ours, _ = proton_curve(energy)
    range_cm = mean_projected_range_mm("proton", dk.Beam("proton", kinetic_energy_mev=energy).momentum_mev_c) / 10.0
    sigma = float(range_sigma_mm("proton", "water", energy)) / 10.0
    theirs = bortfeld(depth, range_cm, sigma)
    keep = (depth > 1.0) & (depth < range_cm + 2.0 * sigma)
    worst = float(np.max(np.abs(ours - theirs)[keep]) / np.max(theirs))
    evidence(what=f"proton depth dose {energy:g} MeV, miss", source="Bortfeld (1997)", value=0.0, ours=100.0 * worst,
             unit="% of peak", bar="3 %")  # fmt: skip
    assert worst < 0.03


def distal_80(depth, dose):
    """Return the depth behind the peak where dose has fallen to 80 %."""
    top = int(np.argmax(dose))
    return float(np.interp(-0.8, -dose[top:] / dose[top], depth[top:]))


@pytest.mark.published
@pytest.mark.parametrize("energy", [*proton_cases(RELATIVE_MISSES)])
def test_proton_shape_against_the_analytic_form(energy, evidence):
    """3 % of the peak, read as measured curves are: both to their maximum, aligned at the distal 80 %.

    The width given to the form is that of the Gaussian core of our stops.
    """
    depth, ours, stops = proton_curve(energy)
    stops = stops.to_numpy()
    keep = stops > 0.02 * np.max(stops)
    gauss = lambda x, a, m, s: a * np.exp(-0.5 * ((x - m) / s) ** 2)  # noqa: E731
    start = [np.max(stops), depth[np.argmax(stops)], 0.01 * depth[np.argmax(stops)]]
    centre, sigma = np.abs(curve_fit(gauss, depth[keep], stops[keep], p0=start)[0][1:])
    fine = np.linspace(depth[0], depth[-1], 20000)
    form = bortfeld(fine, centre, sigma)
    shift = distal_80(depth, ours) - distal_80(fine, form)
    theirs = bortfeld(depth, centre + shift, sigma) / np.max(form)
    inside = (depth > 1.0) & (depth < centre + 2.0 * sigma)
    worst = float(np.max(np.abs(ours / np.max(ours) - theirs)[inside]))
    evidence(what=f"proton depth dose {energy:g} MeV, shape, miss", source="Bortfeld (1997)", value=0.0,
             ours=100.0 * worst, unit="% of peak", bar="3 %")  # fmt: skip
    assert worst < 0.03


@pytest.mark.published
def test_peak_to_entrance_of_a_therapy_beam(evidence):
    row = FACTS["peak to entrance dose rate 172 MeV/c 8 % momentum spread"]
    # 8 % read as standard deviation; read as full width at half maximum it gives 2.5, outside the bounds of the report
    beam = dk.Beam("pi-", momentum_mev_c=172, momentum_sigma=0.08, contaminants={"mu-": 0.08, "e-": 0.15})
    curve = dk.depth_curve(beam, "water")
    total = curve["energy"].sum("component").to_numpy()
    ours = float(np.max(total) / np.mean(total[:20]))
    evidence(what=row["fact"], source=row["source"], value=row["value"], ours=ours, bar="0.25")
    assert ours == pytest.approx(row["value"], abs=row["sigma"])


@pytest.mark.published
def test_range_of_the_therapy_beam(evidence):
    ours = mean_projected_range_mm("pi-", 172.0)
    # between the rows for 170 and 180 MeV/c, R ~ p^3.2, less half a percent of detour
    value = 197.3 * (172.0 / 170.0) ** 2.48
    evidence(
        what="mean projected range, pi- 172 MeV/c",
        source="ICRU 90 scaled",
        value=value,
        ours=ours,
        unit="mm",
        bar="1 %",
    )
    assert ours == pytest.approx(value, rel=0.01)


def test_stars_make_much_of_the_peak():
    curve = dk.depth_curve(dk.Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02), "water")
    total = curve["energy"].sum("component").to_numpy()
    top = int(np.argmax(total))
    stars = curve["energy"].sel(component=["star_light", "star_heavy", "star_neutron", "star_photon"]).sum("component")
    share = float(stars.to_numpy()[top]) / float(total[top])
    assert 0.35 < share < 0.70
    beyond = total[top + 60 : top + 70]
    assert 0.005 < float(np.mean(beyond)) / float(total[top]) < 0.1
