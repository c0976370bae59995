"""The parts of the dose that are kept apart to the end."""

from __future__ import annotations

__all__ = ["COMPONENTS", "COMPONENT_TITLES", "STAR_COMPONENTS"]

COMPONENTS: tuple[str, ...] = (
    "primary",
    "in_flight",
    "star_light",
    "star_heavy",
    "star_neutron",
    "star_photon",
    "decay",
    "contaminant_muon",
    "contaminant_electron",
)
"""Names along the ``component`` dimension, in order."""

STAR_COMPONENTS: tuple[str, ...] = ("star_light", "star_heavy", "star_neutron", "star_photon")
"""The components that come out of capture stars."""

COMPONENT_TITLES: dict[str, str] = {
    "primary": "slowing-down of the beam particles and their delta rays",
    "in_flight": "products of nuclear reactions in flight",
    "star_light": "protons, deuterons and tritons from stars",
    "star_heavy": "helium ions and recoils from stars",
    "star_neutron": "everything that neutrons from stars cause",
    "star_photon": "photons (and neutral pions) from stars",
    "decay": "muons and electrons from decays",
    "contaminant_muon": "muons in the beam",
    "contaminant_electron": "electrons in the beam",
}
"""One plain line for each component."""
