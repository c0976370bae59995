"""What is the depth dose of a beam, part by part?

One call for every beam and medium. The result is an :class:`xarray.Dataset`; the schema is in its attributes.
"""

from __future__ import annotations

import math
import warnings
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.basis.materials import Material, material
from dosekit.beams.beam import Beam
from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import CHANNELS, YIELDS
from dosekit.caution import CAUTION
from dosekit.depths.layers import LONGEST_MM, Layers, as_layers
from dosekit.depths.quality import star_let_kev_um
from dosekit.depths.solver import Solution, solve
from dosekit.depths.stars import star_deposits, star_ledger
from dosekit.errors import BeamError, InputError, SizeError, UnknownNameError, ValidityWarning

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["VALID_TO_MEV", "check_star_scale", "depth_curve", "warn_of_energy"]

VALID_TO_MEV = {
    "pi-": 150.0, "pi+": 150.0, "proton": 250.0, "mu-": 400.0, "mu+": 400.0, "e-": 200.0, "e+": 200.0,
}  # fmt: skip
"""Kinetic energy up to which a beam is inside the validity of the tables, MeV."""

_MOST_BINS = 20000

_SOURCES = (
    "stopping: Bethe with shell, density, Barkas and Bloch terms; straggling: Bohr, Vavilov shape; scattering: Gottschalk 2010; "  # noqa: E501
    "reactions: Barashenkov 1990 and tables named in dosekit.beams.reactions; stars: dosekit.capture"
)


def depth_curve(
    beam: Beam,
    medium: str | Material | Layers,
    *,
    yields: str = "evaluated",
    bin_mm: float = 1.0,
    depth_mm: float | None = None,
    star_scale: float = 1.0,
    width_mm: float | None = 600.0,
    nuclear: bool = True,
    decays: bool = True,
) -> xr.Dataset:
    """Return energy deposit, stops, reactions, decays and LET against depth.

    Parameters
    ----------
    beam : Beam
        The beam at depth 0 (or in front of its fixed range shifter).
    medium : str or Material or Layers
        A material, its name, or a stack.
    yields : {"evaluated", "cascade"}
        Star and reaction yield set.
    bin_mm : float
        Bin, mm, 0.05 to 50.
    depth_mm : float, optional
        Depth covered; vacuum beyond. By default the stack, or the range and 1.3 times of it plus 50 mm.
    star_scale : float
        Factor on the charged energy of stars.
    width_mm : float, optional
        Width of the square medium, centred on the beam, over which energy is summed. It matters to neutrons and
        photons, part of which leaves sideways and counts as escaped; None means without end. What a wider medium
        would scatter back is not taken off.
    nuclear, decays : bool
        Switch reactions in flight and stars, or decays, off (for comparisons).

    Returns
    -------
    xarray.Dataset
        Per incident particle of the main species: ``energy`` (component, depth) MeV/mm, ``stops``, ``decays`` (depth)
        and ``reactions`` (channel, depth) per mm, ``fluence`` (depth) particles before their first scattering, its
        ``mean_energy`` MeV, ``let_dose`` (component, depth) keV/um. Attributes hold units, sources, the caution and the
        energy balance.

    Raises
    ------
    InputError
        If a bin, depth or scale makes no sense.
    UnknownNameError
        If the yield set or material is not known.

    Warns
    -----
    ValidityWarning
        If the beam is faster than what its reactions are made for (`VALID_TO_MEV`).

    Examples
    --------
    >>> curve = depth_curve(Beam("pi-", momentum_mev_c=120), "water", bin_mm=2.0)
    >>> float(curve["energy"].sum("component").idxmax("depth")) > 70
    True
    """
    import xarray as xr

    layers, bins, bin_width, offset = _layout(beam, medium, bin_mm, depth_mm)
    if yields not in YIELDS:
        raise UnknownNameError("yield set", yields, YIELDS)
    check_star_scale(star_scale)
    warn_of_energy(beam)
    settings: dict[str, Any] = {
        "layers": layers,
        "bin_mm": bin_width,
        "yields": yields,
        "nuclear": nuclear,
        "decays": decays,
    }
    settings["width_mm"] = None if width_mm is None else _width(width_mm)
    main = solve(beam.particle, beam.momentum_mev_c, spread=beam.momentum_spread, **settings)
    edges, layer = main.core.edges_mm, main.core.layer
    materials = tuple(stuff for stuff, _ in layers)
    energy, let = _components(main)
    balance = dict(main.ledger)
    stops = main.stops["core"] + main.stops["scattered"]
    if beam.particle == "pi-" and nuclear:
        stars = star_deposits(
            stops,
            edges_mm=edges,
            layer=layer,
            materials=materials,
            yields=yields,
            star_scale=star_scale,
            width_mm=settings["width_mm"],
        )
        by_material: dict[Material, float] = {}
        for index, stuff in enumerate(materials):
            by_material[stuff] = by_material.get(stuff, 0.0) + float(np.sum(stops[layer == index]))
        emitted = star_ledger(by_material, yields=yields, star_scale=star_scale)
        balance["binding"] += emitted.pop("binding", 0.0)
        inside = 0.0
        for name in STAR_COMPONENTS:
            energy[name] = energy[name] + stars[name]
            per_layer = np.array([star_let_kev_um(stuff, yields=yields)[name] for stuff in materials])
            let[name] = per_layer[layer]
            inside += float(np.sum(stars[name]))
        # capture outside of the pion's sight: nothing; what stars emit and is not left inside has escaped
        stopped = sum(by_material.values())
        balance["escaped"] += math.fsum(emitted.values()) - inside
        balance["star"] -= stopped * 139.57039
        balance["binding"] += stopped * 139.57039 - (
            math.fsum(emitted.values()) + _star_binding(by_material, yields, star_scale)
        )
    for name, fraction in beam.contaminant_fractions.items():
        if fraction <= 0.0:
            continue
        target = "contaminant_muon" if name.startswith("mu") else "contaminant_electron"
        extra = solve(name, beam.momentum_mev_c, spread=beam.momentum_spread, **settings)
        amount = sum(extra.deposit.values())
        weighted = sum(extra.deposit[part] * extra.let[part] for part in extra.deposit)
        old = energy[target]
        new = old + fraction * amount
        let[target] = (old * let[target] + fraction * weighted) / np.where(new > 1e-15, new, 1.0)
        energy[target] = new
        for key, value in extra.ledger.items():
            balance[key] = balance.get(key, 0.0) + fraction * value
    keep = np.flatnonzero(0.5 * (edges[1:] + edges[:-1]) > offset)
    place = np.minimum(((0.5 * (edges[1:] + edges[:-1])[keep] - offset) / bin_width).astype(int), bins - 1)

    def binned(values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sum fine bins into output bins, per mm."""
        return np.asarray(np.bincount(place, weights=values[keep], minlength=bins) / widths)

    widths = np.full(bins, bin_width)
    used = float(edges[-1]) - offset
    widths[-1] = used - bin_width * (bins - 1)
    depth = bin_width * np.arange(bins) + 0.5 * widths
    table = np.stack([binned(energy[name]) for name in COMPONENTS])
    quality = np.stack([binned(energy[name] * let[name]) for name in COMPONENTS])
    quality = quality / np.where(table > 1e-15, table, 1.0)
    deposited = math.fsum(float(np.sum(values)) for values in energy.values())
    shifter = deposited - float(np.sum(table * widths))
    edge_depth = edges - offset
    number = np.interp(depth, edge_depth, main.core.number)
    flux_energy = np.interp(depth, edge_depth, main.core.mean_energy)
    balance["deposited"] = deposited
    return xr.Dataset(
        {
            "energy": (
                ("component", "depth"),
                table,
                {"units": "MeV/mm", "long_name": "energy deposit per incident particle"},
            ),
            "stops": (("depth",), binned(stops), {"units": "1/mm", "long_name": "particles brought to rest"}),
            "decays": (
                ("depth",),
                binned(main.channels["decay"] + main.decays_at_rest),
                {"units": "1/mm", "long_name": "decays of beam particles, in flight and at rest"},
            ),
            "reactions": (
                ("channel", "depth"),
                np.stack([binned(main.channels[name]) for name in CHANNELS]),
                {"units": "1/mm", "long_name": "reactions in flight"},
            ),
            "fluence": (
                ("depth",),
                number,
                {"units": "1", "long_name": "particles before their first nuclear scattering"},
            ),
            "mean_energy": (("depth",), flux_energy, {"units": "MeV", "long_name": "mean kinetic energy of these"}),
            "let_dose": (("component", "depth"), quality, {"units": "keV/um", "long_name": "dose-averaged LET"}),
        },
        coords={
            "component": list(COMPONENTS),
            "channel": list(CHANNELS),
            "depth": ("depth", depth, {"units": "mm", "long_name": "depth (bin centre)"}),
            "layer": ("depth", [materials[i].name for i in layer[keep][np.searchsorted(place, np.arange(bins))]]),
        },
        attrs={
            "title": f"depth curve of {beam.particle} at {beam.momentum_mev_c:.6g} MeV/c",
            "particle": beam.particle,
            "momentum_mev_c": beam.momentum_mev_c,
            "momentum_spread": beam.momentum_spread,
            "yields": yields,
            "star_scale": float(star_scale),
            "bin_mm": float(bin_width),
            "width_mm": "without end" if width_mm is None else float(width_mm),
            "medium": "; ".join(f"{stuff.name} {thickness:g} mm" for stuff, thickness in layers),
            "sources": _SOURCES,
            "caution": CAUTION,
            "energy_in_mev": balance["in"],
            "energy_deposited_mev": balance["deposited"],
            "energy_in_shifter_mev": shifter,
            "energy_escaped_mev": balance["escaped"],
            "energy_neutrino_mev": balance["neutrino"],
            "energy_binding_mev": balance["binding"],
            "energy_electron_rest_mev": balance["electron_rest"],
        },
    )


def warn_of_energy(beam: Beam) -> None:
    """Warn of a beam that is faster than what its physics here is made for.

    Parameters
    ----------
    beam : Beam
        The beam.

    Warns
    -----
    ValidityWarning
        If it is.
    """
    limit = VALID_TO_MEV[beam.particle]
    if beam.kinetic_energy_mev > limit:
        warnings.warn(
            f"{beam.particle} of {beam.kinetic_energy_mev:.0f} MeV: reactions, decays and radiation are made for up to "
            f"{limit:g} MeV; beyond, cross sections and products are taken as constant",
            ValidityWarning,
            stacklevel=3,
        )


def check_star_scale(star_scale: float) -> None:
    """Refuse a star scale that is not a number from 0 to 3.

    Parameters
    ----------
    star_scale : float
        Factor on the charged energy of stars.

    Raises
    ------
    InputError
        If it is outside.
    """
    if not (math.isfinite(star_scale) and 0.0 <= star_scale <= 3.0):
        raise InputError(f"star_scale of {star_scale}", allowed="0 to 3", remedy="1 is the yield set as it is")


def _star_binding(by_material: dict[Material, float], yields: str, star_scale: float) -> float:
    """Return the binding energy of stars, MeV."""
    return star_ledger(by_material, yields=yields, star_scale=star_scale).get("binding", 0.0)


def _components(solution: Solution) -> tuple[dict[str, NDArray[np.float64]], dict[str, NDArray[np.float64]]]:
    """Sort the parts of a solution into components."""
    empty = np.zeros(len(solution.core.layer))
    homes = {
        "primary": ("core", "scattered"),
        "in_flight": ("in_flight_charged", "in_flight_neutral"),
        "star_light": ("capture_light",),
        "star_heavy": ("capture_heavy",),
        "star_neutron": ("capture_neutron",),
        "star_photon": ("capture_photon",),
        "decay": ("decay",),
    }
    energy = {name: empty.copy() for name in COMPONENTS}
    let = {name: empty.copy() for name in COMPONENTS}
    for name, parts in homes.items():
        for part in parts:
            if part in solution.deposit:
                energy[name] += solution.deposit[part]
                let[name] += solution.deposit[part] * solution.let[part]
        let[name] /= np.where(energy[name] > 1e-15, energy[name], 1.0)
    return energy, let


def _layout(
    beam: Beam, medium: str | Material | Layers, bin_mm: float, depth_mm: float | None
) -> tuple[tuple[tuple[Material, float], ...], int, float, float]:
    """Check bin and depth; return layers (fixed range shifter first), number of bins, bin and depth of the surface."""
    if not isinstance(beam, Beam):
        raise BeamError(f"a beam of type {type(beam).__name__}", allowed="a Beam")
    bin_width = _finite(bin_mm, "bin")
    if not 0.05 <= bin_width <= 50.0:
        raise InputError(f"bin of {bin_width:g} mm", allowed="0.05 to 50 mm")
    if depth_mm is None:
        if isinstance(medium, Layers):
            total = medium.total_mm
        else:
            stuff = material(medium)
            slow = range_table(beam.particle, stuff)
            reach = float(slow.range_mm(beam.kinetic_energy_mev))
            total = bin_width * math.ceil((1.3 * reach + 50.0 / min(stuff.density_g_cm3, 2.0)) / bin_width)
            if total > LONGEST_MM:
                raise SizeError(
                    f"{beam.particle} that go {reach / 1000.0:.3g} m in {stuff.name}",
                    allowed=f"a depth of up to {LONGEST_MM / 1000.0:g} m",
                    remedy="say depth_mm",
                )
    else:
        total = _finite(depth_mm, "depth")
    if total <= 0.0:
        raise InputError(f"depth of {total:g} mm", allowed="more than 0 mm")
    count = max(math.ceil(total / bin_width - 1e-9), 1)
    if count > _MOST_BINS:
        raise SizeError(f"{count} bins of {bin_width:g} mm", allowed=f"at most {_MOST_BINS}", remedy="take larger bins")
    layers = as_layers(medium, total).parts
    shifter = beam.shifter_material
    offset = beam.fixed_shifter_mm
    if shifter is not None and offset > 0.0:
        layers = ((shifter, offset), *layers)
    return layers, count, bin_width, offset


def _width(width_mm: float) -> float:
    """Return a width that makes sense."""
    width = _finite(width_mm, "width")
    if not 10.0 <= width <= 1e5:
        raise InputError(f"width of {width:g} mm", allowed="10 to 100000 mm, or None for a medium without end")
    return width


def _finite(value: float, what: str) -> float:
    """Return a finite number or refuse."""
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{what} {value!r} is not a number", allowed="a number in mm") from None
    if not math.isfinite(number):
        raise InputError(f"{what} is {number}", allowed="a finite number in mm")
    return number
