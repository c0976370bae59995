"""Independent pieces of one sweep, run at the same time.

Compiled sweeps let go of Python's lock, so plain threads serve; as many as numba would use (``NUMBA_NUM_THREADS``,
``numba.set_num_threads``). No piece touches what another writes, so the result has the same bits for any number.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from types import TracebackType
from typing import Any

__all__ = ["Threads"]

_PIECES_PER_THREAD = 4


class Threads:
    """Threads for the time of a ``with`` block."""

    def __init__(self) -> None:
        import numba

        self.count = int(numba.get_num_threads())
        self._pool = ThreadPoolExecutor(self.count) if self.count > 1 else None

    def __enter__(self) -> Threads:
        """Begin."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """End the threads."""
        if self._pool is not None:
            self._pool.shutdown()

    def run(self, kernel: Callable[..., None], arguments: tuple[Any, ...], pieces: int) -> None:
        """Call ``kernel(*arguments, begin, end)`` for ranges that cover ``range(pieces)``.

        Parameters
        ----------
        kernel : callable
            Compiled function that lets go of the lock.
        arguments : tuple
            What all calls share.
        pieces : int
            Number of independent pieces.
        """
        if self._pool is None:
            kernel(*arguments, 0, pieces)
            return
        step = max(1, -(-pieces // (_PIECES_PER_THREAD * self.count)))
        waiting = [
            self._pool.submit(kernel, *arguments, begin, min(pieces, begin + step)) for begin in range(0, pieces, step)
        ]
        for task in waiting:
            task.result()
