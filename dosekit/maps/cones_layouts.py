"""In which order do sweeps see an array?

Sweeps along the first two axes read arrays as they are; for the last axis the array is turned so that this axis
stands first. Widening sweeps see flat planes with empty voxels all round.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.cones_threads import Threads

__all__ = [
    "LAST",
    "add_turned",
    "held_box",
    "own",
    "padded",
    "padding",
    "read",
    "source_ranges",
    "turn_last",
    "unpadded",
]

LAST = 2
_PAD = 3


def padding(array: NDArray[Any], order: tuple[int, int, int]) -> tuple[int, int]:
    """Return the padding of a plane and the length of its padded rows."""
    return _PAD, array.shape[order[2]] + 2 * _PAD


def padded(array: NDArray[Any], order: tuple[int, int, int]) -> NDArray[np.float64]:
    """Return planes across the first axis of an order, flat, with empty voxels all round."""
    turned = np.pad(np.asarray(array, dtype=float).transpose(order), ((0, 0), (_PAD, _PAD), (_PAD, _PAD)))
    return np.ascontiguousarray(turned.reshape(len(turned), -1))


def unpadded(flat: NDArray[Any], like: NDArray[Any], order: tuple[int, int, int]) -> NDArray[Any]:
    """Undo `padded`."""
    nk, nj, ni = (like.shape[axis] for axis in order)
    inner = flat.reshape(nk, nj + 2 * _PAD, ni + 2 * _PAD)[:, _PAD:-_PAD, _PAD:-_PAD]
    return inner.transpose(np.argsort(order))


def source_ranges(values: NDArray[Any]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return the first and one past the last non-zero element of every row; length and 0 where there is none."""
    size = values.shape[-1]
    held = values != 0.0
    empty = ~held.any(axis=-1)
    first, last = held.argmax(axis=-1), size - held[..., ::-1].argmax(axis=-1)
    first[empty], last[empty] = size, 0
    return first, last


def held_box(first: NDArray[Any], last: NDArray[Any]) -> tuple[slice, slice, slice]:
    """Return the box that holds every non-zero voxel, from the ranges of its rows."""
    held = last > 0
    if not held.any():
        return slice(0), slice(0), slice(0)
    z, y = np.flatnonzero(held.any(axis=1)), np.flatnonzero(held.any(axis=0))
    return slice(z[0], z[-1] + 1), slice(y[0], y[-1] + 1), slice(first[held].min(), last.max())


def turn_last(
    pool: Threads, array: NDArray[Any], axis: int, dtype: Any = None, box: tuple[slice, slice, slice] | None = None
) -> NDArray[Any]:
    """Return an array for sweeps along one main axis: as it is for the first two, with the last axis first for it.

    Outside a box, if there is one, the turned array is 0.
    """
    if axis != LAST:
        return array if array.dtype == np.uint16 else own(array, dtype)
    nz, ny, nx = array.shape
    if box is None:
        turned = np.empty((nx, nz, ny), dtype or array.dtype)
        pool.run(_turn, (array, turned), nz)
    else:
        turned = np.zeros((nx, nz, ny), dtype or array.dtype)
        z, y, x = box
        pool.run(_turn, (array[box], turned[x, z, y]), z.stop - (z.start or 0))
    return turned


def _turn(array: NDArray[Any], turned: NDArray[Any], begin: int, end: int) -> None:
    """Put the last axis first, plane by plane."""
    for z in range(begin, min(end, len(array))):
        turned[:, z, :] = array[z].T


def add_turned(turned: NDArray[Any], total: NDArray[Any], begin: int, end: int) -> None:
    """Add an array whose last axis stands first, plane by plane."""
    for z in range(begin, end):
        total[z] += turned[:, z, :].T


def own(array: NDArray[Any], dtype: Any = None) -> NDArray[Any]:
    """Return a contiguous, writable array, so that kernels meet one type and are compiled once."""
    return np.require(array, dtype, ["C", "W"])


def read(array: NDArray[Any] | None) -> NDArray[np.uint16]:
    """Return an index that is only read, as one type and without a copy if it is one already."""
    assert array is not None
    view = np.ascontiguousarray(array, dtype=np.uint16).view()
    view.setflags(write=False)
    return view
