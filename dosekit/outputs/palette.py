"""Fixed colours, dash patterns and printed names of components, particles and structures.

A component keeps its colour and its dash pattern in every figure. The nine colours are the
"muted" scheme of P. Tol, Colour schemes, SRON technical note EPS/TN/09-002 (2021), from memory,
which readers with colour-vision deficiencies can tell apart; the dash pattern carries the same
information in grey print. Structures use the same author's "bright" scheme.
"""

from __future__ import annotations

__all__ = [
    "COMPONENT_COLOURS",
    "COMPONENT_DASHES",
    "COMPONENT_LABELS",
    "INK",
    "PARTICLE_COLOURS",
    "RULE",
    "STRUCTURE_COLOURS",
    "STRUCTURE_DASHES",
    "component_style",
    "particle_label",
    "particle_style",
]

INK = "#222222"
RULE = "#8a8a8a"

COMPONENT_COLOURS = {
    "primary": "#332288",
    "in_flight": "#88CCEE",
    "star_light": "#CC6677",
    "star_heavy": "#882255",
    "star_neutron": "#DDCC77",
    "star_photon": "#999933",
    "decay": "#44AA99",
    "contaminant_muon": "#117733",
    "contaminant_electron": "#AA4499",
}
COMPONENT_LABELS = {
    "primary": "slowing down",
    "in_flight": "reactions in flight",
    "star_light": "stars: p, d, t",
    "star_heavy": "stars: He, recoils",
    "star_neutron": "stars: neutrons",
    "star_photon": "stars: photons",
    "decay": "decay leptons",
    "contaminant_muon": "beam muons",
    "contaminant_electron": "beam electrons",
}
_Dash = str | tuple[float, tuple[float, ...]]
COMPONENT_DASHES: dict[str, _Dash] = {
    "primary": "-",
    "in_flight": (0, (5, 1.5)),
    "star_light": "-",
    "star_heavy": (0, (4, 1, 1, 1)),
    "star_neutron": (0, (2, 1)),
    "star_photon": (0, (1, 1)),
    "decay": (0, (6, 1, 1, 1, 1, 1)),
    "contaminant_muon": (0, (3, 2)),
    "contaminant_electron": (0, (1, 2)),
}
PARTICLE_COLOURS = {
    "pi-": "#332288",
    "pi+": "#44AA99",
    "proton": "#CC6677",
    "mu-": "#999933",
    "mu+": "#DDCC77",
    "e-": "#88CCEE",
    "carbon12": "#882255",
    "alpha": "#AA4499",
}
_PARTICLE_DASHES: dict[str, _Dash] = {"pi-": "-", "pi+": (0, (5, 1.5)), "proton": (0, (4, 1, 1, 1))}
_SPARE_COLOURS = ("#117733", "#AA4499", "#88CCEE", "#882255", "#999933", "#DDCC77")
_SPARE_DASHES: tuple[_Dash, ...] = ((0, (2, 1)), (0, (1, 1)), (0, (6, 1, 1, 1, 1, 1)))
STRUCTURE_COLOURS = ("#EE6677", "#66CCEE", "#CCBB44", "#AA3377", "#228833", "#4477AA", "#BBBBBB")
STRUCTURE_DASHES: tuple[_Dash, ...] = ("-", (0, (5, 1.5)), (0, (2, 1)), (0, (4, 1, 1, 1)))


def component_style(name: str) -> dict[str, object]:
    """Return line settings (colour, dash, label) of a dose component.

    Parameters
    ----------
    name : str
        A component's name.

    Returns
    -------
    dict
        Keyword arguments for a line.

    Examples
    --------
    >>> component_style("star_heavy")["label"]
    'stars: He, recoils'
    """
    return {
        "color": COMPONENT_COLOURS.get(name, INK),
        "linestyle": COMPONENT_DASHES.get(name, "-"),
        "label": COMPONENT_LABELS.get(name, name.replace("_", " ")),
    }


def particle_style(name: str, *, index: int = 0) -> dict[str, object]:
    """Return line settings (colour, dash, label) of a beam particle in a comparison.

    Parameters
    ----------
    name : str
        A particle's name; names beyond the known ones take spare colours by index.
    index : int
        Place in the comparison.

    Returns
    -------
    dict
        Keyword arguments for a line.
    """
    return {
        "color": PARTICLE_COLOURS.get(name, _SPARE_COLOURS[index % len(_SPARE_COLOURS)]),
        "linestyle": _PARTICLE_DASHES.get(name, _SPARE_DASHES[index % len(_SPARE_DASHES)]),
        "label": particle_label(name),
    }


def particle_label(name: str) -> str:
    """Return a particle's printed name, with a raised charge where it has one.

    Parameters
    ----------
    name : str
        A particle's name.

    Returns
    -------
    str
        Text for a label.

    Examples
    --------
    >>> particle_label("proton")
    'protons'
    """
    printed = {
        "pi-": "$\\pi^{-}$",
        "pi+": "$\\pi^{+}$",
        "mu-": "$\\mu^{-}$",
        "mu+": "$\\mu^{+}$",
        "e-": "$e^{-}$",
        "e+": "$e^{+}$",
        "proton": "protons",
        "carbon12": "$^{12}$C",
        "alpha": "$^{4}$He",
    }
    return printed.get(name, name)
