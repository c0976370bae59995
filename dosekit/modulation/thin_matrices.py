"""A sparse matrix in single precision, kept by rows, whose products are made in double precision.

Half the memory of the usual form, and no copy in double precision for each product.  The transposed product is summed
in a fixed number of blocks, in a fixed order, so that it has the same bits for any number of threads.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.maps.cones_threads import Threads

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["ThinMatrix"]

_BLOCKS = 16


@dataclass(frozen=True, eq=False)
class ThinMatrix:
    """A sparse matrix by rows.

    Parameters
    ----------
    values : ndarray of float32, shape (entries,)
        The entries, row by row.
    columns : ndarray of int32, shape (entries,)
        Their columns.
    starts : ndarray of int64, shape (rows + 1,)
        Where each row begins, and the end of the last.
    shape : (int, int)
        Rows and columns.

    Examples
    --------
    >>> values, columns = np.array([2.0, 3.0], dtype=np.float32), np.array([0, 1], dtype=np.int32)
    >>> matrix = ThinMatrix(values, columns, np.array([0, 2, 2]), (2, 2))
    >>> (matrix @ [1.0, 1.0]).tolist(), (matrix.T @ [1.0, 1.0]).tolist()
    ([5.0, 0.0], [2.0, 3.0])
    """

    values: NDArray[np.float32]
    columns: NDArray[np.int32]
    starts: NDArray[np.int64]
    shape: tuple[int, int]

    @property
    def entries(self) -> int:
        """Number of entries."""
        return len(self.values)

    @property
    def T(self) -> _Transposed:  # noqa: N802
        """The transposed matrix, for products only."""
        return _Transposed(self)

    def __matmul__(self, vector: NDArray[np.float64]) -> NDArray[np.float64]:
        """Multiply with a vector, in double precision."""
        from dosekit.modulation import kernels

        given = np.ascontiguousarray(vector, dtype=np.float64)
        out = np.zeros(self.shape[0])
        with Threads() as threads:
            threads.run(kernels.multiply_rows, (self.values, self.columns, self.starts, given, out), self.shape[0])
        return out


@dataclass(frozen=True, eq=False)
class _Transposed:
    """The transposed matrix, for products only."""

    matrix: ThinMatrix

    def __matmul__(self, vector: NDArray[np.float64]) -> NDArray[np.float64]:
        """Multiply with a vector, in double precision."""
        from dosekit.modulation import kernels

        whole = self.matrix
        given = np.ascontiguousarray(vector, dtype=np.float64)
        edges = np.linspace(0, len(whole.values), _BLOCKS + 1)
        blocks = np.searchsorted(whole.starts, edges).astype(np.int64)
        blocks[0], blocks[-1] = 0, whole.shape[0]
        out = np.zeros((_BLOCKS, whole.shape[1]))
        with Threads() as threads:
            threads.run(
                kernels.multiply_rows_transposed,
                (whole.values, whole.columns, whole.starts, blocks, given, out),
                _BLOCKS,
            )
        return np.asarray(out.sum(axis=0))
