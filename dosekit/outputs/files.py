"""How a file is put on disk: complete or not at all, and the same bytes each time.

A file is written beside its final name and moved there in one step, so that an
interrupted run leaves no half-written result under a name that somebody might open.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from dosekit.errors import OutputError

__all__ = ["sha256_of_bytes", "sha256_of_file", "whole_file", "write_bytes", "write_text"]

_BLOCK_BYTES = 1 << 20


def write_bytes(path: str | Path, data: bytes) -> Path:
    """Write bytes so that the file appears complete or not at all.

    Parameters
    ----------
    path : str or Path
        Where to write; the folder is made if it is not there.
    data : bytes
        The whole content.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    OutputError
        If the place cannot be written.
    """
    with whole_file(path) as partial:
        partial.write_bytes(data)
    return Path(path)


@contextmanager
def whole_file(path: str | Path) -> Iterator[Path]:
    """Give a name beside a file to write to; the file gets its own name when all went well, else it is removed.

    Parameters
    ----------
    path : str or Path
        The final name; its folder is made if it is not there.

    Yields
    ------
    Path
        Where to write.

    Raises
    ------
    OutputError
        If the place cannot be written.
    """
    target = Path(path)
    partial = target.with_name(f".{target.name}.partial")
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        yield partial
        partial.replace(target)
    except BaseException as problem:
        with suppress(OSError):
            partial.unlink(missing_ok=True)
        if not isinstance(problem, OSError):
            raise
        raise OutputError(
            f"{target.name} could not be written ({problem.strerror or type(problem).__name__})",
            remedy="check that the output folder exists, has space and may be written",
        ) from problem


def write_text(path: str | Path, text: str) -> Path:
    """Write UTF-8 text with plain newlines on every system; see `write_bytes`.

    Parameters
    ----------
    path : str or Path
        Where to write.
    text : str
        The whole content.

    Returns
    -------
    Path
        The file written.
    """
    return write_bytes(path, text.replace("\r\n", "\n").encode("utf-8"))


def sha256_of_bytes(data: bytes) -> str:
    """Return the SHA-256 of bytes in hexadecimal.

    Parameters
    ----------
    data : bytes
        What to hash.

    Returns
    -------
    str
        64 hexadecimal digits.

    Examples
    --------
    >>> sha256_of_bytes(b"abc")[:16]
    'ba7816bf8f01cfea'
    """
    return hashlib.sha256(data).hexdigest()


def sha256_of_file(path: str | Path) -> str:
    """Return the SHA-256 of a file in hexadecimal, read block by block.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    with Path(path).open("rb") as stream:
        while block := stream.read(_BLOCK_BYTES):
            digest.update(block)
    return digest.hexdigest()
