"""Does the work fit into memory? Asked before the memory is taken.

The allowance is four fifths of what the machine has free, and never more than ``LARGEST_GB``: a voxel volume beyond
that is a mistake in the input far more often than a wish.
"""

from __future__ import annotations

import os
from pathlib import Path

from dosekit.errors import SizeError

__all__ = ["LARGEST_GB", "allowed_gb", "check_memory"]

LARGEST_GB = 8.0
"""Most memory one volume may ask for, GB (10^9 bytes); a choice of this program."""

_SHARE_OF_FREE = 0.8


def allowed_gb() -> float:
    """Return how much memory one piece of work may take, GB.

    Returns
    -------
    float
        Four fifths of the free memory, at most `LARGEST_GB`.

    Examples
    --------
    >>> 0 < allowed_gb() <= LARGEST_GB
    True
    """
    free = _free_bytes()
    return LARGEST_GB if free is None else min(LARGEST_GB, _SHARE_OF_FREE * free / 1e9)


def check_memory(wanted_bytes: float, *, what: str, remedy: str = "use a larger spacing or a smaller volume") -> None:
    """Refuse work that would not fit into memory.

    Parameters
    ----------
    wanted_bytes : float
        Bytes the work is about to take.
    what : str
        What the memory is for, as the start of the message.
    remedy : str
        What the user can do.

    Raises
    ------
    SizeError
        When it is more than `allowed_gb`.
    """
    limit = allowed_gb()
    if not wanted_bytes <= limit * 1e9:
        raise SizeError(
            f"{what} would take {wanted_bytes / 1e9:.3g} GB",
            allowed=f"up to {limit:.3g} GB here",
            remedy=remedy,
        )


def _free_bytes() -> float | None:
    """Return the memory that is free now, or None where the system does not say."""
    try:
        for line in Path("/proc/meminfo").read_text(encoding="ascii").splitlines():
            if line.startswith("MemAvailable:"):
                return float(line.split()[1]) * 1024.0
    except (OSError, ValueError):
        pass
    try:
        return float(os.sysconf("SC_PHYS_PAGES")) * float(os.sysconf("SC_PAGE_SIZE"))
    except (AttributeError, ValueError, OSError):
        return None
