"""Along which directions do products travel, and how are exponentials carried along them?

Superposition after A. Ahnesjoe (Med. Phys. 16 (1989) 577): all that is emitted into the cone about a direction goes
straight along that direction. The directions and their weights are quadratures of the sphere with the symmetry of
the cube, after V. I. Lebedev, Zh. Vychisl. Mat. Mat. Fiz. 16 (1976) 293; sets of 26, 50, 86, 110 and 194. Every
kernel is a sum of exponentials in scaled distance (path times the local ``scale``), so that each mode needs one
recursion per direction (`dosekit.maps.kernels_stars`). The cost is voxels times directions times modes; no table of
distances is kept, and density scaling (J. E. O'Connor, Phys. Med. Biol. 1 (1957) 352) holds exactly.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import InputError
from dosekit.maps.cones_directions import direction_set
from dosekit.maps.cones_layouts import (
    LAST,
    add_turned,
    held_box,
    own,
    padded,
    padding,
    read,
    source_ranges,
    turn_last,
    unpadded,
)
from dosekit.maps.cones_threads import Threads

__all__ = ["FAINT", "WIDENING_MM", "Cones"]

WIDENING_MM = 300.0
"""Lateral variance per mm of path times the number of directions, mm2/mm: at 100 mm the rms width on one axis is half
the distance between neighbouring directions of any set (sqrt(4 pi / n) r), which leaves no ripple between them."""

FAINT = 1e-10
"""A mode that has fallen below this part of its brightest emission is put down where it is."""

_BATCH = 8


@dataclass(frozen=True)
class _Line:
    """One direction seen along its main axis."""

    slope_j: float
    slope_i: float
    down: bool
    step_mm: float
    weight: float


_AXES = ((0, 1, 2), (1, 0, 2), (2, 0, 1))
"""Array axes put first, second and third when z, y or x is the main axis."""

_ALIKE = 1e-9


@dataclass(frozen=True)
class Cones:
    """A set of directions on a lattice, ready to carry exponentials.

    Attributes
    ----------
    spacing_mm : tuple of float
        Voxel spacing (x, y, z), mm.
    directions : int
        Number of directions.
    bias : callable, optional
        Emission per solid angle against direction: takes unit vectors (n, 3), gives weights >= 0; isotropic by default.
        The weights are brought to a sum of 1.
    """

    spacing_mm: tuple[float, float, float]
    directions: int = 50
    bias: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None = None

    def lines(self, *, widening: bool = False) -> tuple[list[_Line], list[_Line], list[_Line]]:
        """Return the directions sorted by main array axis (z, y, x); those between axes are shared evenly, unless
        their rays are the same from each (not so if ``widening``).
        """
        units, weights = direction_set(self.directions)
        if self.bias is not None:
            weights = weights * np.asarray(self.bias(units), dtype=float)
            total = float(weights.sum())
            if not total > 0.0 or bool((weights < 0.0).any()):
                raise InputError("emission with no or negative weight", allowed="weights >= 0, some positive")
            weights = weights / total
        spacing = np.array(self.spacing_mm)[::-1]
        sorted_lines: tuple[list[_Line], list[_Line], list[_Line]] = ([], [], [])
        for unit, weight in zip(units[:, ::-1], weights, strict=True):
            if weight == 0.0:
                continue
            steps = np.abs(unit) / spacing
            main = [axis for axis in range(3) if steps[axis] > steps.max() * (1.0 - _ALIKE)]
            if not widening and all(min(step, steps.max() - step) < _ALIKE * steps.max() for step in steps):
                main = main[:1]  # whole steps from plane to plane: the same rays from any of these axes
            for axis in main:
                k, j, i = _AXES[axis]
                sorted_lines[axis].append(
                    _Line(
                        float(unit[j] / unit[k] * spacing[k] / spacing[j]),
                        float(unit[i] / unit[k] * spacing[k] / spacing[i]),
                        bool(unit[k] < 0.0),
                        float(spacing[k] / abs(unit[k])),
                        float(weight) / len(main),
                    )
                )
        return sorted_lines

    def carry_widening(
        self, scale: NDArray[Any], rates_per_mm: NDArray[np.float64], sources_mev: NDArray[Any]
    ) -> NDArray[np.float64]:
        """Carry energy along directions that widen as cones do.

        The state is handed from plane to plane by linear interpolation and smoothed, so that its lateral variance
        grows by
        ``WIDENING_MM / directions`` (or what interpolation makes, if more) per mm of path. This closes the gaps between
        directions far from small sources. Meant for coarse lattices and smooth kernels.

        Parameters
        ----------
        scale : ndarray [z, y, x]
            Scaled distance per mm of path.
        rates_per_mm : ndarray, shape (m,)
            Rates of the modes.
        sources_mev : ndarray [m, z, y, x]
            Energy emitted per voxel in each mode.

        Returns
        -------
        ndarray [z, y, x]
            Energy left in each voxel, MeV.
        """
        from dosekit.maps.kernels_stars import sweep_widening

        rates = np.ascontiguousarray(rates_per_mm, dtype=float)
        total = np.zeros(scale.shape)
        with Threads() as pool:
            for order, batches in self._batches():
                turned = padded(scale, order)
                sources = np.stack([padded(mode, order) for mode in sources_mev])
                out, summed = np.empty((_BATCH, *turned.shape)), np.zeros(turned.shape)
                for batch in batches:
                    out[:] = 0.0
                    common = (sources, turned, *padding(scale, order), rates, *self._widening(batch, order))
                    pool.run(sweep_widening, (*common, out), len(batch))
                    for line, part in zip(batch, out, strict=False):
                        summed += np.multiply(part, line.weight, out=part)
                total += unpadded(summed, scale, order)
        return total

    def gather_widening(
        self, scale: NDArray[Any], rates_per_mm: NDArray[np.float64], wanted: NDArray[Any]
    ) -> NDArray[np.float64]:
        """Apply the exact transpose of `carry_widening`.

        Parameters
        ----------
        scale, rates_per_mm : ndarray
            As in `carry_widening`.
        wanted : ndarray [z, y, x]
            What a unit of energy in each voxel counts.

        Returns
        -------
        ndarray [m, z, y, x]
            What a unit of energy emitted in each mode counts.
        """
        from dosekit.maps.kernels_stars import sweep_widening_transposed

        rates = np.ascontiguousarray(rates_per_mm, dtype=float)
        total = np.zeros((len(rates), *scale.shape))
        with Threads() as pool:
            for order, batches in self._batches():
                turned, asked = padded(scale, order), padded(wanted, order)
                out = np.empty((_BATCH, len(rates), *turned.shape))
                summed = np.zeros(out.shape[1:])
                for batch in batches:
                    out[:] = 0.0
                    common = (asked, turned, *padding(scale, order), rates, *self._widening(batch, order))
                    pool.run(sweep_widening_transposed, (*common, out), len(batch))
                    for line, part in zip(batch, out, strict=False):
                        summed += np.multiply(part, line.weight, out=part)
                total += np.stack([unpadded(values, scale, order) for values in summed])
        return total

    def _batches(self) -> list[tuple[tuple[int, int, int], list[list[_Line]]]]:
        """Return the lines of each main axis in batches of fixed size, so that memory is bounded and sums keep
        their order.
        """
        return [
            (_AXES[axis], [lines[start : start + _BATCH] for start in range(0, len(lines), _BATCH)])
            for axis, lines in enumerate(self.lines(widening=True))
            if lines
        ]

    def _widening(self, batch: list[_Line], order: tuple[int, int, int]) -> tuple[NDArray[Any], ...]:
        """Return taps, offsets, signs and steps of a batch."""
        spacing = np.array(self.spacing_mm)[::-1][list(order)]
        taps: list[list[NDArray[np.float64]]] = [[], []]
        starts: list[list[int]] = [[], []]
        for line in batch:
            variance_mm2 = WIDENING_MM / self.directions * line.step_mm
            for lateral, slope in enumerate((line.slope_j, line.slope_i)):
                move = -slope if line.down else slope
                floor = int(np.floor(move))
                part = move - floor
                extra = max(0.0, variance_mm2 / spacing[lateral + 1] ** 2 - part * (1.0 - part))
                side = min(0.5 * extra, 0.25)
                taps[lateral].append(np.convolve([1.0 - part, part], [side, 1.0 - 2.0 * side, side]))
                starts[lateral].append(floor - 1)
        return (
            np.array(taps[0]),
            np.array(starts[0]),
            np.array(taps[1]),
            np.array(starts[1]),
            np.array([line.down for line in batch]),
            np.array([line.step_mm for line in batch]),
        )

    def carry(
        self,
        scale: NDArray[Any],
        rates_per_mm: NDArray[np.float64],
        *,
        stops: NDArray[Any] | None = None,
        material: NDArray[Any] | None = None,
        energies_mev: NDArray[np.float64] | None = None,
        sources_mev: NDArray[np.float64] | None = None,
        total: NDArray[np.float64] | None = None,
    ) -> NDArray[np.float64]:
        """Carry energy from where it is emitted to where it stays.

        Parameters
        ----------
        scale : ndarray [z, y, x]
            Scaled distance per mm of path.
        rates_per_mm : ndarray, shape (m,)
            Rates of the modes, per mm of scaled distance.
        stops : ndarray [z, y, x], optional
            Stops per voxel, with ``material`` (index per voxel) and ``energies_mev`` (index, mode), MeV per stop.
        material : ndarray [z, y, x], optional
            Index into the rows of ``energies_mev``.
        energies_mev : ndarray, shape (n, m), optional
            Energy per stop in each mode; may be negative, as long as the kernel is not.
        sources_mev : ndarray [m, z, y, x], optional
            Energy emitted per voxel in each mode, instead of the three above.
        total : ndarray [z, y, x], optional
            Where to add the result.

        Returns
        -------
        ndarray [z, y, x]
            Energy left in each voxel, MeV (``total`` if given). What is missing from the sum has left the volume.
        """
        from dosekit.maps.kernels_stars import sweep

        rates = np.ascontiguousarray(rates_per_mm, dtype=float)
        by_stops = sources_mev is None
        if sources_mev is None:
            assert stops is not None
            assert material is not None
            assert energies_mev is not None
            table = np.ascontiguousarray(energies_mev, dtype=float)
            shining, kinds = own(stops, float), read(material)
            brightest = np.abs(table).max(axis=0) * max(float(shining.max()), -float(shining.min()))
            sources = np.empty((0, 1, 1, 1))
        else:
            table, kinds = np.zeros((1, 1)), read(np.zeros((1, 1, 1), np.uint16))
            sources = own(sources_mev, float)
            shining = np.abs(sources).sum(axis=0)
            brightest = np.abs(sources).reshape(len(rates), -1).max(axis=1)
        ranges = source_ranges(shining)
        held = held_box(*ranges)
        total = np.zeros(scale.shape) if total is None else total
        with Threads() as pool:
            for axis, lines in enumerate(self.lines()):
                if not lines:
                    continue
                turned, (first, last) = turn_last(pool, scale, axis), ranges
                emitted, index, modes = shining, kinds, sources
                if axis == LAST:
                    emitted = turn_last(pool, shining, axis, box=held)
                    first, last = source_ranges(emitted)
                    if by_stops:
                        index = read(turn_last(pool, kinds, axis, box=held))
                    else:
                        modes = np.stack([turn_last(pool, mode, axis, box=held) for mode in sources])
                if not by_stops:
                    emitted = np.empty((1, 1, 1))
                out = np.zeros(turned.shape) if axis == LAST else total
                for line in lines:
                    common = (emitted, index, table, modes, turned, rates, line.slope_j, line.slope_i, line.down)
                    faint = FAINT * line.weight * brightest
                    rest = (line.step_mm, line.weight, first, last, faint, axis == 1, out)
                    pool.run(sweep, (*common, *rest), _rows(line, scale.shape, axis))
                if axis == LAST:
                    pool.run(add_turned, (out, total), len(total))
        return total

    def gather(
        self,
        scale: NDArray[Any],
        rates_per_mm: NDArray[np.float64],
        wanted: NDArray[Any],
        *,
        material: NDArray[Any] | None = None,
        energies_mev: NDArray[np.float64] | None = None,
        total: NDArray[np.float64] | None = None,
    ) -> NDArray[np.float64]:
        """Apply the exact transpose of `carry`.

        Parameters
        ----------
        scale, rates_per_mm : ndarray
            As in `carry`.
        wanted : ndarray [z, y, x]
            What a unit of energy in each voxel counts.
        material, energies_mev : ndarray, optional
            As in `carry`; without them the result is per mode.
        total : ndarray, optional
            Where to add the result.

        Returns
        -------
        ndarray [z, y, x] or [m, z, y, x]
            What a stop in each voxel (or a unit of energy in each mode) counts.
        """
        from dosekit.maps.kernels_stars import sweep_transposed

        rates = np.ascontiguousarray(rates_per_mm, dtype=float)
        by_mode = energies_mev is None
        if total is None:
            total = np.zeros((len(rates), *scale.shape)) if by_mode else np.zeros(scale.shape)
        table = np.zeros((1, len(rates))) if energies_mev is None else np.ascontiguousarray(energies_mev, dtype=float)
        with Threads() as pool:
            for axis, lines in enumerate(self.lines()):
                if not lines:
                    continue
                turned, asked = turn_last(pool, scale, axis), turn_last(pool, wanted, axis, float)
                first, last = source_ranges(asked)
                faint = FAINT * max(float(asked.max()), -float(asked.min()))
                index = read(
                    np.zeros((1, 1, 1), np.uint16) if by_mode else turn_last(pool, read(material), axis, np.uint16)
                )
                goal = np.zeros((*total.shape[:-3], *turned.shape)) if axis == LAST else total
                out, out_modes = (np.zeros((1, 1, 1)), goal) if by_mode else (goal, np.zeros((1, 1, 1, 1)))
                for line in lines:
                    common = (asked, index, table, by_mode, turned, rates, line.slope_j, line.slope_i, line.down)
                    rest = (line.step_mm, line.weight, first, last, faint, axis == 1, out, out_modes)
                    pool.run(sweep_transposed, (*common, *rest), _rows(line, scale.shape, axis))
                if axis == LAST:
                    for turned_back, part in zip(goal, total, strict=True) if by_mode else ((goal, total),):
                        pool.run(add_turned, (turned_back, part), len(part))
        return total


def _rows(line: _Line, shape: tuple[int, ...], axis: int) -> int:
    """Return how many rows of rays cross a volume along one main axis."""
    order = _AXES[axis]
    nk, nj = shape[order[0]], shape[order[1]]
    ends = [int(np.rint(line.slope_j * (k - nk // 2))) for k in (0, nk - 1)]
    return nj + max(ends) - min(ends)
