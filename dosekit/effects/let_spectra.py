"""How is the dose of a component spread over LET?

What star and reaction products do to cells is not proportional to LET, so it has to be averaged over their dose, not
taken at their mean LET.  Particles that slow down to rest from a spectrum N(E) leave between T and T + dT, at LET
S(T), the dose::

    d(T) dT ~ sum over E > T of N(E) dT

`SPREAD` components and what their spectra in water are made of:

* ``star_light``, ``star_heavy``: p, d, t; and 3He, alpha, recoils (as carbon) of stars in water, evaluated yields.
  A mean LET other than the spectrum's own stretches it.
* ``star_neutron``: recoil protons of half the neutron's energy, and alphas and recoils as of ``star_heavy``, in the
  shares that give the mean LET.
* ``in_flight``: p, d, t of reactions of the beam particle at `_REACTION_MEV` (and recoil protons of their
  neutrons), and 3He, alpha, recoils with energies evenly spread up to a few MeV, in the shares that give the mean LET.

All other components have one LET in a place.  The mean is that of a quantity f(L) per dose::

    <f> = integral of f(L) d(L) dL / integral of d(L) dL

(for f = L the dose-averaged LET itself; for the lineal energy and the quality factor their definitions in ICRU Report
36 (1983) and ICRP Publication 60 (1991)).

Validity: products that come to rest in water; deposits near an edge or a reaction, where some have not yet slowed
down, have more of the lower LET.  Recoils are shorter than a cell nucleus, which a LET does not know.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, material
from dosekit.beams.ranges import range_table

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import ArrayLike

__all__ = ["SPREAD", "LetSpectrum", "component_spectra", "spectral_mean"]

SPREAD: tuple[str, ...] = ("in_flight", "star_light", "star_heavy", "star_neutron")
"""Components whose dose is spread over LET."""

_REACTION_MEV = 60.0
_EVEN_UP_TO_MEV = {"helium3": 10.0, "alpha": 7.0, "heavy": 4.0}
_CARRIERS = {"heavy": "carbon12", "neutron": "proton"}
_POINTS = 300
_LOWEST_MEV = 1e-3
_STRETCHES = np.geomspace(1e-2, 1e2, 161)


@dataclass(frozen=True, eq=False)
class LetSpectrum:
    """Dose over LET.

    Parameters
    ----------
    let_kev_um : ndarray, shape (n,)
        LET, keV/um.
    dose_share : ndarray, shape (n,)
        Share of the dose at each; sums to 1.
    """

    let_kev_um: NDArray[np.float64]
    dose_share: NDArray[np.float64]

    @property
    def mean_kev_um(self) -> float:
        """Dose-averaged LET, keV/um."""
        return float(np.dot(self.let_kev_um, self.dose_share))

    def mean_of(self, function: Callable[[NDArray[np.float64]], NDArray[np.float64]], *, stretch: float = 1.0) -> float:
        """Average a quantity over the dose.

        Parameters
        ----------
        function : callable
            Quantity as a function of LET in keV/um.
        stretch : float
            Factor on all LET.

        Returns
        -------
        float
            The mean.
        """
        return float(np.dot(function(self.let_kev_um * stretch), self.dose_share))


def component_spectra(component: str, *, beam_particle: str = "pi-") -> tuple[LetSpectrum, ...]:
    """Return the spectra that a component's dose is made of.

    Parameters
    ----------
    component : str
        One of `SPREAD`.
    beam_particle : str
        What reacts in flight.

    Returns
    -------
    tuple of LetSpectrum
        One, or the light and the heavy part, whose shares follow from the mean LET.

    Examples
    --------
    >>> light, heavy = component_spectra("star_neutron")
    >>> light.mean_kev_um < 15.0 < 200.0 < heavy.mean_kev_um
    True
    """
    if component == "in_flight":
        return _in_flight(beam_particle if beam_particle in ("pi-", "pi+", "proton") else "pi-")
    return _of_stars(component)


def spectral_mean(
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    component: str,
    let_kev_um: ArrayLike,
    *,
    beam_particle: str = "pi-",
) -> NDArray[np.float64]:
    """Average a quantity over the dose of a component of given mean LET.

    Parameters
    ----------
    function : callable
        Quantity per dose as a function of LET in keV/um; takes and returns arrays.
    component : str
        Component of the dose.
    let_kev_um : array_like
        Its dose-averaged LET, keV/um.
    beam_particle : str
        What reacts in flight.

    Returns
    -------
    ndarray
        The mean, of the shape of the LET; the function itself for components of one LET.

    Examples
    --------
    >>> import numpy as np
    >>> spectral_mean(lambda let: let, "in_flight", [40.0, 60.0]).round(9).tolist()
    [40.0, 60.0]
    >>> spectral_mean(np.sqrt, "primary", 4.0).item()
    2.0
    """
    let = np.asarray(let_kev_um, dtype=np.float64)
    if component not in SPREAD:
        return np.asarray(function(let))
    spectra = component_spectra(component, beam_particle=beam_particle)
    if len(spectra) == 2:
        low, high = (one.mean_kev_um for one in spectra)
        at_low, at_high = (one.mean_of(function) for one in spectra)
        heavy = np.clip((let - low) / (high - low), 0.0, 1.0)
        # beyond either end the whole part is stretched; nothing at no LET
        beyond = np.where(let < low, let / low, np.where(let > high, let / high, 1.0))
        inner = (1.0 - heavy) * at_low + heavy * at_high
        if np.all(beyond == 1.0):
            return np.asarray(inner)
        part = np.where(let < low, _stretched(function, spectra[0], beyond), _stretched(function, spectra[1], beyond))
        return np.where(beyond == 1.0, inner, part)
    return _stretched(function, spectra[0], let / spectra[0].mean_kev_um)


def _stretched(
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    spectrum: LetSpectrum,
    stretch: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Average over a spectrum stretched by each of many factors: exact for a few, else interpolated."""
    different = np.unique(stretch)
    if len(different) <= 16:
        values = np.array([spectrum.mean_of(function, stretch=float(factor)) for factor in different])
        return np.asarray(values[np.searchsorted(different, stretch)])
    axis = np.concatenate([[0.0], _STRETCHES])
    table = np.array([spectrum.mean_of(function, stretch=float(factor)) for factor in axis])
    return np.asarray(np.interp(stretch, axis, table))


@lru_cache(maxsize=8)
def _of_stars(component: str) -> tuple[LetSpectrum, ...]:
    """Sum over capturing elements and species of stars in water."""
    from dosekit.capture.sharing import capture_shares
    from dosekit.capture.stars import HEAVY_SPECIES, LIGHT_SPECIES, star

    water = material("water")
    species = {"star_light": LIGHT_SPECIES, "star_heavy": HEAVY_SPECIES, "star_neutron": ("neutron",)}[component]
    parts = []
    for symbol, share in capture_shares(water, yields="evaluated").items():
        spectra = star(symbol, "evaluated").spectra
        for name in species:
            if name in spectra and spectra[name].multiplicity > 0.0:
                energy = spectra[name].centres_mev * (0.5 if name == "neutron" else 1.0)
                parts.append(_slowing_down(name, water, energy, share * spectra[name].numbers))
    if component == "star_neutron":
        return _joined(parts), _of_stars("star_heavy")[0]
    return (_joined(parts),)


@lru_cache(maxsize=8)
def _in_flight(projectile: str) -> tuple[LetSpectrum, ...]:
    """Sum over the products of reactions in water."""
    from dosekit.beams.reactions import reactions

    water = material("water")
    table = reactions(projectile, water)
    at = np.array([_REACTION_MEV])

    def look(values: NDArray[np.float64]) -> float:
        return float(table.at(values, at)[0])

    light, heavy = [], []
    even = (np.arange(_POINTS) + 0.5) / _POINTS
    for name in ("proton", "deuteron", "triton", "neutron"):
        number, mean = look(table.number[name]), look(table.mean_energy_mev[name])
        if number <= 0.0 or mean <= 0.0:
            continue
        energy = -mean * np.log1p(-even) * (0.5 if name == "neutron" else 1.0)  # exponential of that mean
        light.append(_slowing_down(name, water, energy, np.full(_POINTS, number / _POINTS)))
    for name, top in _EVEN_UP_TO_MEV.items():
        held = look(table.number[name]) * look(table.mean_energy_mev[name])
        if held > 0.0:
            stopping = range_table(_CARRIERS.get(name, name), water).stopping_mev_mm(even * top)
            heavy.append((np.asarray(stopping), np.full(_POINTS, held / _POINTS)))
    return _joined(light), _joined(heavy)


def _slowing_down(
    name: str, stuff: Material, energy_mev: NDArray[np.float64], number: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return LET (keV/um) and energy left there (MeV) of particles that come to rest."""
    edges = np.concatenate([[0.0], np.geomspace(_LOWEST_MEV, max(float(np.max(energy_mev)), 0.1), _POINTS)])
    middle = 0.5 * (edges[1:] + edges[:-1])
    # share of each interval that particles of each energy pass through
    passed = np.clip((energy_mev[None, :] - edges[:-1, None]) / np.diff(edges)[:, None], 0.0, 1.0)
    stopping = range_table(_CARRIERS.get(name, name), stuff).stopping_mev_mm(np.maximum(middle, _LOWEST_MEV))
    return np.asarray(stopping), (passed @ number) * np.diff(edges)


def _joined(parts: Sequence[tuple[NDArray[np.float64], NDArray[np.float64]]]) -> LetSpectrum:
    """Join the doses of several species."""
    let = np.concatenate([part[0] for part in parts])
    dose = np.concatenate([part[1] for part in parts])
    return LetSpectrum(let, dose / dose.sum())
