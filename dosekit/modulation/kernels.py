"""Loops of the room, compiled: the entries of the quick stand-in, and products with a matrix kept by rows.

Pure functions on plain arrays; every constant is passed in.  Each fills or reads the rows ``begin`` to ``end`` and
lets go of Python's lock, so that plain threads may share the rows.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from dosekit.basis.compiling import KERNEL

__all__ = ["count_entries", "fill_entries", "multiply_rows", "multiply_rows_transposed"]

Real = NDArray[np.float64]
Thin = NDArray[np.float32]
Small = NDArray[np.int32]
Places = NDArray[np.int64]


@njit(**KERNEL)
def count_entries(
    u: Real, v: Real, reach: Real, live: NDArray[np.bool_], spots: Real, out: Places, begin: int, end: int
) -> None:
    """Add the number of entries of each row to ``out``: spots within reach times live steps.

    ``u``, ``v`` and ``reach`` (n,) in the plane of the isocentre, ``live`` (n, k), ``spots`` (s, 2), ``out`` (n,).
    """
    for row in range(begin, end):
        steps = 0
        for step in range(live.shape[1]):
            if live[row, step]:
                steps += 1
        near = 0
        square = reach[row] * reach[row]
        for spot in range(spots.shape[0]):
            du, dv = u[row] - spots[spot, 0], v[row] - spots[spot, 1]
            if du * du + dv * dv <= square:
                near += 1
        out[row] += steps * near


@njit(**KERNEL)
def fill_entries(
    u: Real,
    v: Real,
    wide: Real,
    reach: Real,
    live: NDArray[np.bool_],
    variance_u: Real,
    variance_v: Real,
    amplitude: Real,
    spots: Real,
    first_column: int,
    places: Places,
    columns: Small,
    values: Thin,
    begin: int,
    end: int,
) -> None:
    """Write the entries of one field from ``places`` on, and move ``places`` behind them.

    ``amplitude`` (m, n, k) for m matrices of the same pattern, ``variance_u`` and ``variance_v`` (n, k),
    ``values`` (m, entries), ``columns`` (entries,).
    """
    steps = live.shape[1]
    for row in range(begin, end):
        square = reach[row] * reach[row]
        place = places[row]
        for spot in range(spots.shape[0]):
            du, dv = u[row] - spots[spot, 0], v[row] - spots[spot, 1]
            if du * du + dv * dv > square:
                continue
            du, dv = du * wide[row], dv * wide[row]
            for step in range(steps):
                if not live[row, step]:
                    continue
                u2, v2 = variance_u[row, step], variance_v[row, step]
                share = math.exp(-0.5 * (du * du / u2 + dv * dv / v2)) / (2.0 * math.pi * math.sqrt(u2 * v2))
                columns[place] = first_column + spot * steps + step
                for which in range(amplitude.shape[0]):
                    values[which, place] = amplitude[which, row, step] * share
                place += 1
        places[row] = place


@njit(**KERNEL)
def multiply_rows(values: Thin, columns: Small, starts: Places, vector: Real, out: Real, begin: int, end: int) -> None:
    """Write the product of some rows with a vector."""
    for row in range(begin, end):
        total = 0.0
        for place in range(starts[row], starts[row + 1]):
            total += values[place] * vector[columns[place]]
        out[row] = total


@njit(**KERNEL)
def multiply_rows_transposed(
    values: Thin, columns: Small, starts: Places, blocks: Places, vector: Real, out: Real, begin: int, end: int
) -> None:
    """Add the transposed products of blocks of rows, each block to a row of its own in ``out``."""
    for block in range(begin, end):
        for row in range(blocks[block], blocks[block + 1]):
            factor = vector[row]
            if factor == 0.0:
                continue
            for place in range(starts[row], starts[row + 1]):
                out[block, columns[place]] += values[place] * factor
