"""Independent transport results as arrays; tests/reference/README.md says how they were made."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).parent / "reference"


@cache
def _table(name: str) -> dict[str, np.ndarray]:
    lines = [line for line in (FOLDER / name).read_text().splitlines() if line and not line.startswith("#")]
    names = lines[0].split(",")
    values = np.array([[float(cell) for cell in line.split(",")] for line in lines[1:]])
    return {column: values[:, index] for index, column in enumerate(names)}


def depth(case: str) -> dict[str, np.ndarray]:
    """Return the columns of ``<case>_depth.csv``."""
    return dict(_table(f"{case}_depth.csv"))


def radial(case: str) -> dict[str, np.ndarray]:
    """Return the columns of ``<case>_radial.csv``."""
    return dict(_table(f"{case}_radial.csv"))


def sphere(case: str) -> dict[str, np.ndarray]:
    """Return the columns of ``<case>_sphere.csv``."""
    return dict(_table(f"{case}_sphere.csv"))


def components(columns: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return the reference columns gathered into dosekit's components."""
    zero = np.zeros_like(next(iter(columns.values())))

    def add(*names: str) -> np.ndarray:
        return sum((columns[name] for name in names if name in columns), zero)

    return {
        "primary": add("primary"),
        "in_flight": add("inflight_charged", "inflight_neutral"),
        "star_light": add("star_p", "star_d", "star_t"),
        "star_heavy": add("star_he", "star_heavy"),
        "star_neutron": add("star_neutron"),
        "star_photon": add("star_photon"),
        "decay": add("decay"),
    }
