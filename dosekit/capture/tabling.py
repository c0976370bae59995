"""How are the shipped tables of neutron and photon profiles in water made?

``python -c "from dosekit.capture.tabling import write_tables; write_tables('folder')"`` makes both again, bit for bit.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import material
from dosekit.capture import neutrons, photons
from dosekit.capture.neutrons import EDGES_MM

__all__ = ["HISTORIES", "SEED", "profile_fractions", "table_text", "write_tables"]

HISTORIES = {"neutron": 60000, "photon": 60000}
"""Histories per source energy in the shipped tables."""

SEED = 170197
"""Seed of the first source energy; the others count up."""


def profile_fractions(kind: str, *, histories: int, seed: int = SEED) -> NDArray[np.float64]:
    """Simulate the profiles in water.

    Parameters
    ----------
    kind : {"neutron", "photon"}
        What is followed.
    histories : int
        Histories per source energy.
    seed : int
        Seed.

    Returns
    -------
    ndarray, shape (m, n)
        Fractions of the source energy in the shells, what lies beyond in the last element.
    """
    water = material("water", 1.0)
    if kind == "neutron":
        nodes = neutrons.NODE_ENERGIES_MEV
        shells, _ = neutrons.simulate(water, nodes, histories=histories, seed=seed)
    else:
        nodes = photons.NODE_PHOTON_MEV
        shells = photons.simulate(water, nodes, histories=histories, seed=seed)
    return shells / nodes[:, None]


def table_text(kind: str, fractions: NDArray[np.float64], *, histories: int, seed: int = SEED) -> str:
    """Return a table of profiles as text with its header.

    Parameters
    ----------
    kind : {"neutron", "photon"}
        What was followed.
    fractions : ndarray, shape (m, n)
        Result of `profile_fractions`.
    histories : int
        Histories per source energy.
    seed : int
        Seed.

    Returns
    -------
    str
        CSV.
    """
    nodes = neutrons.NODE_ENERGIES_MEV if kind == "neutron" else photons.NODE_PHOTON_MEV
    sources = ", ".join(f"{energy:g}" for energy in nodes)
    lines = [
        f"# source: made by dosekit.capture.tabling, {kind} histories; seed {seed}, {histories} per energy",
        "# status: computed, a model",
        (
            "# units: r_inner_mm mm of water; e0, e1, ... fraction of the source energy from r_inner_mm to the next "
            f"(the last row lies beyond), for sources of {sources} MeV"
        ),
        "# validity: water at 1 g/cm3, isotropic point source",
        "# uncertainty: statistical 1 % per shell near 100 mm; the model 10 to 20 % (neutrons), 5 to 10 % (photons)",
        "# permission: made here, free to use",
        "r_inner_mm," + ",".join(f"e{i}" for i in range(len(nodes))),
    ]
    for radius, row in zip(EDGES_MM, fractions.T, strict=True):
        lines.append(f"{radius:g}," + ",".join(f"{value:.5g}" for value in row))
    return "\n".join(lines) + "\n"


def write_tables(folder: str | Path) -> None:
    """Write both tables.

    Parameters
    ----------
    folder : str or Path
        Where to.
    """
    for kind, histories in HISTORIES.items():
        text = table_text(kind, profile_fractions(kind, histories=histories), histories=histories)
        (Path(folder) / f"{kind}_profiles_water.csv").write_text(text, encoding="utf-8")
