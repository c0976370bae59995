"""How are kernels compiled? The same way in every room, and as little as serves.

``@njit(**KERNEL)`` for what Python calls, ``@njit(**PART)`` for what only kernels of the same file call. Neither gets
the wrapper for C callers, and parts none for Python: on a new machine that saves a third of the time to compile.
Kernels let other threads run, divide as numpy does, and are kept on disk; no fast-math, so that bits stay the same.
"""

from __future__ import annotations

from typing import Any

__all__ = ["KERNEL", "PART"]

KERNEL: dict[str, Any] = {"cache": True, "nogil": True, "error_model": "numpy", "no_cfunc_wrapper": True}
PART: dict[str, Any] = {
    "nogil": True,
    "error_model": "numpy",
    "no_cfunc_wrapper": True,
    "no_cpython_wrapper": True,
}
