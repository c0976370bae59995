"""Energy against distance from a stopped pion: one description for every component.

A profile says how much energy lies beyond a distance r from the stop, in any uniform medium, MeV per stop:
``beyond(0)`` is what leaves the point, ``beyond(r1) - beyond(r2)`` what a shell gets, and what stays at the point
is kept apart. For a plane through the stop, a spherical shell spreads evenly along any axis (Archimedes), so that
the energy beyond a plane at distance z, on one side, is

    P(z) = 1/2 integral_z^inf (1 - z / r) (-d beyond / dr) dr = z / 2 integral_z^inf beyond(r) / r^2 dr.

Light charged products: straight lines in the continuous-slowing-down approximation through the medium, species by
species over their spectra. Protons react on the way (0.012 per cm of water, Bortfeld, Med. Phys. 24 (1997) 2024);
half of what they have then goes on with secondary protons, half stays on the spot (ICRU Report 63 (2000), memory).
Helium ions and recoils likewise (they travel 0.1 mm); neutrons and photons
from the simulated profiles of `dosekit.capture.neutrons` and `dosekit.capture.photons`, scaled by density.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.components import STAR_COMPONENTS
from dosekit.basis.materials import Material, element, material
from dosekit.basis.tables import read_table
from dosekit.beams.ranges import range_table
from dosekit.capture import neutrons, photons
from dosekit.capture.neutrons import EDGES_MM
from dosekit.capture.sharing import capture_shares
from dosekit.capture.spectra import Spectrum
from dosekit.capture.stars import LIGHT_SPECIES, star
from dosekit.errors import UnknownNameError

__all__ = ["Profile", "charged_profile", "element_profile", "neutron_response", "photon_response", "star_profile"]

_REACTION_PER_MM = 0.5 * 0.0012
_PARTS = 16
_HISTORIES = 6000
_SEED = 20240501
_IONS = {"helium3": "helium3", "alpha": "alpha", "heavy": "carbon12"}


@dataclass(frozen=True)
class Profile:
    """Energy beyond a distance, per stop.

    Attributes
    ----------
    radius_mm : ndarray, shape (n,)
        Distances, increasing from 0.
    beyond_mev : ndarray, shape (n,)
        Energy left beyond each distance, MeV per stop; not increasing. What is left at the last one is never
        deposited within reach.
    local_mev : float
        Energy that stays at the point, MeV per stop.
    """

    radius_mm: NDArray[np.float64]
    beyond_mev: NDArray[np.float64]
    local_mev: float = 0.0

    @property
    def energy_mev(self) -> float:
        """All energy, MeV per stop."""
        return self.local_mev + float(self.beyond_mev[0])

    def beyond(self, radius_mm: ArrayLike) -> NDArray[np.float64]:
        """Return the energy beyond a distance.

        Parameters
        ----------
        radius_mm : array_like
            Distance, mm, >= 0.

        Returns
        -------
        ndarray
            MeV per stop; the local part counts at distance 0 only.
        """
        radius = np.asarray(radius_mm, dtype=float)
        value = np.interp(radius, self.radius_mm, self.beyond_mev)
        return np.asarray(np.where(radius <= 0.0, value + self.local_mev, value))

    def beyond_plane(self, depth_mm: ArrayLike) -> NDArray[np.float64]:
        """Return the energy beyond a plane, on one side of the stop.

        Parameters
        ----------
        depth_mm : array_like
            Distance of the plane, mm, >= 0.

        Returns
        -------
        ndarray
            MeV per stop; half of all at distance 0.
        """
        depth = np.asarray(depth_mm, dtype=float)
        outer = np.concatenate([self.beyond_mev[1:], [self.beyond_mev[-1]]])
        # between knots the energy beyond falls in a straight line a + b r, so the integral of (a + b r) / r^2 is closed
        step = np.diff(self.radius_mm)
        slope = np.diff(self.beyond_mev) / step
        base = self.beyond_mev[:-1] - slope * self.radius_mm[:-1]
        with np.errstate(divide="ignore"):
            inverse = 1.0 / self.radius_mm
            logs = np.log(self.radius_mm)
        pieces = np.zeros(len(step))
        pieces[1:] = base[1:] * (inverse[1:-1] - inverse[2:]) + slope[1:] * (logs[2:] - logs[1:-1])
        tail = outer[-1] * inverse[-1]
        from_knot = np.concatenate([np.cumsum(pieces[::-1])[::-1] + tail, [tail]])
        safe = np.maximum(depth, 1e-9)
        index = np.clip(np.searchsorted(self.radius_mm, safe, side="right") - 1, 0, len(step) - 1)
        right = self.radius_mm[index + 1]
        part = base[index] * (1.0 / safe - 1.0 / right) + slope[index] * np.log(right / safe)
        inside = 0.5 * safe * (part + from_knot[index + 1])
        beyond_all = 0.5 * np.full_like(safe, self.beyond_mev[-1])
        value = np.where(safe >= self.radius_mm[-1], beyond_all, inside)
        return np.asarray(np.where(depth <= 0.0, 0.5 * self.energy_mev, value))

    def added(self, other: Profile, factor: float = 1.0) -> Profile:
        """Return the sum with another profile.

        Parameters
        ----------
        other : Profile
            What to add.
        factor : float
            Its weight.

        Returns
        -------
        Profile
            On the joined distances.
        """
        radius = np.union1d(self.radius_mm, other.radius_mm)
        left = np.interp(radius, self.radius_mm, self.beyond_mev)
        right = np.interp(radius, other.radius_mm, other.beyond_mev)
        return Profile(radius, left + factor * right, self.local_mev + factor * other.local_mev)


_EMPTY = Profile(np.array([0.0, 1.0]), np.zeros(2))


def star_profile(
    medium: Material | str, component: str, *, yields: str = "evaluated", star_scale: float = 1.0
) -> Profile:
    """Return the profile of one component of the stars in a material.

    Parameters
    ----------
    medium : Material or str
        Where pions stop and their products travel.
    component : {"star_light", "star_heavy", "star_neutron", "star_photon"}
        Component.
    yields : {"evaluated", "cascade"}
        Yield set.
    star_scale : float
        Factor on the charged components.

    Returns
    -------
    Profile
        Energy against distance, MeV per stop in this material.
    """
    medium = material(medium)
    total = _EMPTY
    for symbol, share in capture_shares(medium, yields=yields).items():
        if share > 0.0:
            total = total.added(element_profile(symbol, medium, component, yields=yields), share)
    if component in ("star_light", "star_heavy"):
        return Profile(total.radius_mm, total.beyond_mev * star_scale, total.local_mev * star_scale)
    return total


def element_profile(symbol: str, medium: Material, component: str, *, yields: str) -> Profile:
    """Return the profile of one component of one element's star, travelling in a material.

    Parameters
    ----------
    symbol : str
        Capturing element.
    medium : Material
        Where the products travel.
    component : str
        Component.
    yields : str
        Yield set.

    Returns
    -------
    Profile
        Energy against distance, MeV per capture by this element.

    Raises
    ------
    UnknownNameError
        If the component is not one of a star.
    """
    if component not in STAR_COMPONENTS:
        raise UnknownNameError("star component", component, STAR_COMPONENTS)
    return _element_profile(symbol, medium, component, yields)


@lru_cache(maxsize=512)
def _element_profile(symbol: str, medium: Material, component: str, yields: str) -> Profile:
    """Build one profile."""
    emitted = star(symbol, yields)
    if component == "star_light":
        total = _EMPTY
        for species in LIGHT_SPECIES:
            if emitted.energy_mev[species] > 0.0:
                total = total.added(charged_profile(emitted.spectra[species], species, medium))
        return total
    if component == "star_heavy":
        total = _EMPTY
        for species, ion in _IONS.items():
            if emitted.energy_mev[species] > 0.0:
                total = total.added(charged_profile(emitted.spectra[species], ion, medium))
        return total
    if component == "star_neutron":
        spectrum = emitted.spectra["neutron"]
        lines = list(zip(spectrum.centres_mev, spectrum.numbers * spectrum.centres_mev, strict=True))
        return _from_lines(lines, neutrons.NODE_ENERGIES_MEV, neutron_response(medium), medium)
    parts = {name: value for name, value in emitted.energy_mev.items() if name.startswith("photon")}
    quanta, local = photons.photon_lines(parts, element(symbol).atomic_number)
    profile = _from_lines(quanta, photons.NODE_PHOTON_MEV, photon_response(medium), medium)
    return Profile(profile.radius_mm, profile.beyond_mev, profile.local_mev + local)


def charged_profile(spectrum: Spectrum, projectile: str, medium: Material) -> Profile:
    """Return the profile of charged particles on straight lines.

    Parameters
    ----------
    spectrum : Spectrum
        Particles per stop.
    projectile : str
        Name of the particle.
    medium : Material
        Where they travel.

    Returns
    -------
    Profile
        Energy against distance.
    """
    table = range_table(projectile, medium)
    # the bins are wide: each is split, in proportions that follow the logarithm of dN/dE from centre to centre
    width = np.diff(spectrum.edges_mev)
    parts = (np.arange(_PARTS) + 0.5) / _PARTS
    energy = (spectrum.edges_mev[:-1, None] + width[:, None] * parts).ravel()
    logs = np.log(np.maximum(spectrum.per_mev, 1e-9 * spectrum.per_mev.max()))
    shape = np.exp(np.interp(energy, spectrum.centres_mev, logs)).reshape(-1, _PARTS)
    number = (spectrum.numbers[:, None] * shape / shape.sum(axis=1, keepdims=True)).ravel()
    keep = number > 0.0
    energy, number = energy[keep], number[keep]
    ranges = table.range_mm(energy)
    longest = float(ranges.max()) * 1.0001
    radius = np.union1d(np.geomspace(min(1e-3, 0.1 * longest), longest, 120), np.linspace(0.0, longest, 240))
    left = table.energy_mev(np.maximum(ranges[None, :] - radius[:, None], 0.0)) @ number
    if projectile == "proton":
        left = left * np.exp(-_REACTION_PER_MM * medium.density_g_cm3 * radius)
    left[-1] = 0.0
    # the sum over bins is brought to the exact energy of the spectrum
    return Profile(radius, left * (spectrum.energy_mev / left[0]))


def _from_lines(
    lines: list[tuple[float, float]], nodes: NDArray[np.float64], response: NDArray[np.float64], medium: Material
) -> Profile:
    """Sum line sources from responses at node energies; energy lost to binding never leaves the first node's total."""
    shells = np.zeros(response.shape[1])
    logs = np.log(nodes)
    for energy, carried in lines:
        place = float(np.interp(np.log(max(energy, nodes[0])), logs, np.arange(len(nodes))))
        index = min(int(place), len(nodes) - 2)
        part = place - index
        shells += carried * ((1.0 - part) * response[index] + part * response[index + 1])
    total = sum(carried for _, carried in lines)
    beyond = total - np.concatenate([[0.0], np.cumsum(shells[:-1])])
    return Profile(EDGES_MM / medium.density_g_cm3, beyond)


@lru_cache(maxsize=32)
def _response(kind: str, medium: Material) -> NDArray[np.float64]:
    """Return energy fractions in shells for the node energies, at unit density."""
    nodes = neutrons.NODE_ENERGIES_MEV if kind == "neutron" else photons.NODE_PHOTON_MEV
    if medium == material("water", 1.0):
        table = read_table(f"{kind}_profiles_water", folder="capture")
        stacked = np.array([table[f"e{i}"] for i in range(len(nodes))], dtype=float)
    elif kind == "neutron":
        stacked, _ = neutrons.simulate(medium, nodes, histories=_HISTORIES, seed=_SEED)
        stacked = stacked / nodes[:, None]
    else:
        stacked = photons.simulate(medium, nodes, histories=_HISTORIES, seed=_SEED) / nodes[:, None]
    stacked.setflags(write=False)
    return stacked


def neutron_response(medium: Material) -> NDArray[np.float64]:
    """Return what neutrons leave in shells, as fractions of their energy.

    Parameters
    ----------
    medium : Material
        Composition.

    Returns
    -------
    ndarray, shape (m, n)
        For each node energy, fractions in the shells `EDGES_MM` at unit density; the last element lies beyond. Rows
        sum to less than 1 by what is lost to nuclear binding.
    """
    return _response(
        "neutron", medium.replace(name="", density_g_cm3=1.0) if medium.name != "water" else material("water", 1.0)
    )


def photon_response(medium: Material) -> NDArray[np.float64]:
    """Return what photons leave in shells, as fractions of their energy.

    Parameters
    ----------
    medium : Material
        Composition.

    Returns
    -------
    ndarray, shape (m, n)
        As `neutron_response`.
    """
    return _response(
        "photon", medium.replace(name="", density_g_cm3=1.0) if medium.name != "water" else material("water", 1.0)
    )
