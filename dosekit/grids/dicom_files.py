"""Which files are there, and what do they say? Reading DICOM headers without trusting them.

Every file is read behind a guard: whatever goes wrong inside the decoder becomes a `DicomError` that names the file.
Files that are not DICOM at all (licences, notes) are passed over and listed; a file that claims to be DICOM and
cannot be read is an error, because a slice may be hiding in it.
"""

from __future__ import annotations

import io
import logging
import re
import warnings
import zlib
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from dosekit.errors import DicomError, DosekitError, SeriesError

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

__all__ = [
    "CT_STORAGE",
    "STRUCTURE_STORAGE",
    "DicomHeaders",
    "Header",
    "guarded",
    "in_threads",
    "list_files",
    "quiet_decoder",
    "read_file",
    "read_headers",
    "text_of",
]

CT_STORAGE = "1.2.840.10008.5.1.4.1.1.2"
"""CT Image Storage (DICOM PS3.6)."""
STRUCTURE_STORAGE = "1.2.840.10008.5.1.4.1.1.481.3"
"""RT Structure Set Storage (DICOM PS3.6)."""

_DEFLATED = "1.2.840.10008.1.2.1.99"
_LARGEST_FILE_BYTES = 128_000_000
_MOST_FILES = 20_000
_THREADS = 2
_IDENTITY = (
    "StudyInstanceUID", "SeriesInstanceUID", "FrameOfReferenceUID", "SOPInstanceUID", "SOPClassUID",
    "PatientName", "PatientID", "PatientBirthDate", "PatientSex", "StudyID", "StudyDate", "StudyTime",
    "AccessionNumber", "ReferringPhysicianName", "PatientPosition", "PositionReferenceIndicator",
    "ImagePositionPatient", "PatientIdentityRemoved", "SpecificCharacterSet",
)  # fmt: skip

T = TypeVar("T")
S = TypeVar("S")


@dataclass(frozen=True)
class Header:
    """The header of one DICOM file.

    Parameters
    ----------
    path : Path
        The file.
    dataset : pydicom.Dataset
        Its header, without pixels.
    """

    path: Path
    dataset: Dataset = field(repr=False)

    @property
    def name(self) -> str:
        """Return the name of the file."""
        return self.path.name


@dataclass(frozen=True, repr=False)
class DicomHeaders:
    """What DICOM outputs have to refer to: identifying elements of the images and of the structure set.

    Parameters
    ----------
    images : tuple of pydicom.Dataset
        One per image, by increasing z, identifying elements only.
    structure_set : pydicom.Dataset, optional
        The structure set's.
    """

    images: tuple[Dataset, ...]
    structure_set: Dataset | None = None

    def __repr__(self) -> str:
        """Count, without naming anybody."""
        return f"DicomHeaders({len(self.images)} images, structure set: {self.structure_set is not None})"

    @classmethod
    def from_headers(cls, images: Sequence[Header], structure_set: Dataset | None = None) -> DicomHeaders:
        """Keep the identifying elements of headers.

        Parameters
        ----------
        images : sequence of Header
            Headers of the images.
        structure_set : pydicom.Dataset, optional
            The structure set.

        Returns
        -------
        DicomHeaders
            Copies of the elements needed.
        """
        return cls(
            tuple(_identity(header.dataset) for header in images),
            None if structure_set is None else _identity(structure_set),
        )


def _identity(dataset: Dataset) -> Dataset:
    """Copy the identifying elements that are there; one that cannot be read is left out, never quoted."""
    from pydicom.dataset import Dataset

    kept = Dataset()
    for keyword in _IDENTITY:
        try:
            if keyword in dataset:
                kept.add(dataset[keyword])
        except Exception:  # noqa: S112 - whatever it is, it must not show a name
            continue
    return kept


@contextmanager
def quiet_decoder() -> Iterator[None]:
    """Keep the decoder's own warnings and log lines to ourselves while files are read.

    Damaged values are judged by our own checks, one message each. Not to be entered from several threads at once.
    """
    logger = logging.getLogger("pydicom")
    before = logger.disabled
    logger.disabled = True
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        logger.disabled = before


@contextmanager
def guarded(name: str, *, kind: type[DicomError] = DicomError) -> Iterator[None]:
    """Turn whatever the decoder raises into an error of our own that names the file.

    Parameters
    ----------
    name : str
        Name of the file.
    kind : type
        The error to raise.
    """
    try:
        yield
    except DosekitError:
        raise
    except MemoryError:
        raise kind(f"{name} asks for more memory than there is", remedy="the file is damaged; get it again") from None
    except RecursionError:
        raise kind(f"{name} holds sequences nested without end", remedy="the file is damaged; get it again") from None
    except Exception as problem:
        reason = re.sub(r"\s+", " ", str(problem))[:200] or type(problem).__name__
        raise kind(
            f"{name} cannot be read ({type(problem).__name__}: {reason})",
            allowed="undamaged DICOM files",
            remedy="the file is damaged or cut short; get it again",
        ) from None


def list_files(source: str | Path | Iterable[str | Path]) -> list[Path]:
    """Return the files of a folder (with its subfolders) or of a list, by name.

    Parameters
    ----------
    source : str, Path or iterable of them
        A folder, a file, or a list of files and folders.

    Returns
    -------
    list of Path
        Regular files.

    Raises
    ------
    SeriesError
        When something is missing, there is no file, or there are absurdly many.
    """
    entries = [source] if isinstance(source, str | Path) else list(source)
    found: list[Path] = []
    for entry in entries:
        path = Path(entry)
        try:
            if path.is_dir():
                for item in path.rglob("*"):
                    if item.is_file() and not item.name.startswith("."):
                        found.append(item)
                    if len(found) > _MOST_FILES:
                        raise SeriesError(
                            f"more than {_MOST_FILES} files below {path.name!r}",
                            allowed="the folder of one CT series",
                            remedy="name the folder that holds the series",
                        )
            elif path.is_file():
                found.append(path)
            else:
                raise SeriesError(
                    f"{str(entry)!r} is neither a file nor a folder",
                    allowed="a folder or files",
                    remedy="check the path",
                )
        except (OSError, ValueError) as problem:
            if isinstance(problem, DosekitError):
                raise
            raise SeriesError(f"{str(entry)!r} cannot be looked into: {problem}", remedy="check the path") from None
    if not found:
        raise SeriesError("no files at all", allowed="a folder or a list with DICOM files", remedy="check the path")
    return sorted(set(found), key=str)


def read_headers(
    paths: Sequence[Path], *, progress: Callable[[int, int], None] | None = None
) -> tuple[list[Header], list[Path]]:
    """Read the headers of all files that are DICOM.

    Parameters
    ----------
    paths : sequence of Path
        The files.
    progress : callable, optional
        Told how many of how many are done.

    Returns
    -------
    tuple
        The headers in the order of the files, and the files that are not DICOM.

    Raises
    ------
    DicomError
        When a file claims to be DICOM and cannot be read.
    """
    with quiet_decoder():
        read = in_threads(lambda path: read_file(path, pixels=False), paths, progress=progress)
    headers = [Header(path, dataset) for path, dataset in zip(paths, read, strict=True) if dataset is not None]
    return headers, [path for path, dataset in zip(paths, read, strict=True) if dataset is None]


def read_file(path: Path, *, pixels: bool) -> Dataset | None:
    """Read one file.

    Parameters
    ----------
    path : Path
        The file.
    pixels : bool
        Whether to read the pixels too.

    Returns
    -------
    pydicom.Dataset or None
        None when the file is not DICOM and does not claim to be.

    Raises
    ------
    DicomError
        When it claims to be DICOM and cannot be read.
    """
    import pydicom

    claims = path.suffix.lower() in {".dcm", ".dicom", ".ima"}
    with guarded(path.name):
        with path.open("rb") as stream:
            start = stream.read(132)
            marked = start[128:132] == b"DICM"
            length = path.stat().st_size
            if length > _LARGEST_FILE_BYTES:
                if not (marked or claims):
                    return None
                raise DicomError(
                    f"{path.name} has {length / 1e6:.0f} MB",
                    allowed=f"files up to {_LARGEST_FILE_BYTES / 1e6:.0f} MB, one slice each",
                    remedy="give a series of single slices",
                )
            # Read at one stroke: a damaged length then ends at the end of the bytes and takes no memory.
            raw = start + stream.read()
        if marked:
            _check_deflated(raw, path.name)
            dataset: Dataset = pydicom.dcmread(io.BytesIO(raw), stop_before_pixels=not pixels)
            dataset.get("Modality")
            return dataset
    try:
        bare: Dataset = pydicom.dcmread(io.BytesIO(raw), stop_before_pixels=not pixels, force=True)
        known = "SOPClassUID" in bare and "Modality" in bare
        if known:
            bare.ensure_file_meta()
            if "TransferSyntaxUID" not in bare.file_meta:
                explicit = not bare.original_encoding[0]
                little = bool(bare.original_encoding[1])
                bare.file_meta.TransferSyntaxUID = _syntax(explicit=explicit, little=little)
            return bare
    except Exception:  # noqa: S110 - whatever it is, it is not DICOM; decided below
        pass
    if claims:
        raise DicomError(
            f"{path.name} is not a DICOM file (no mark at byte 128)",
            allowed="DICOM files",
            remedy="the file is damaged, empty or of another kind; get it again or remove it",
        )
    return None


def _syntax(*, explicit: bool, little: bool) -> Any:
    """Return the transfer syntax of a file that does not name it."""
    from pydicom.uid import ExplicitVRBigEndian, ExplicitVRLittleEndian, ImplicitVRLittleEndian

    if not little:
        return ExplicitVRBigEndian
    return ExplicitVRLittleEndian if explicit else ImplicitVRLittleEndian


def _check_deflated(raw: bytes, name: str) -> None:
    """Refuse a deflated file that would unfold beyond reason."""
    if _DEFLATED.encode("ascii") not in raw[:65536]:
        return
    from pydicom.filereader import read_dataset

    stream = io.BytesIO(raw)
    stream.seek(132)
    meta = read_dataset(
        stream, is_implicit_VR=False, is_little_endian=True, stop_when=lambda tag, _vr, _length: tag.group != 2
    )
    if str(meta.get("TransferSyntaxUID", "")) != _DEFLATED:
        return
    unfolder = zlib.decompressobj(-zlib.MAX_WBITS)
    length, piece = 0, raw[stream.tell() :]
    while piece:
        length += len(unfolder.decompress(piece, 1 << 22))
        piece = unfolder.unconsumed_tail
        if length > _LARGEST_FILE_BYTES:
            raise DicomError(
                f"{name} unfolds to more than {_LARGEST_FILE_BYTES / 1e6:.0f} MB",
                allowed="one slice per file",
                remedy="the file is damaged; get it again",
            )


def in_threads(
    work: Callable[[S], T], items: Sequence[S], *, progress: Callable[[int, int], None] | None = None
) -> list[T]:
    """Do the same work on many files, a few at a time, in order.

    Parameters
    ----------
    work : callable
        What to do with one item.
    items : sequence
        The items.
    progress : callable, optional
        Told how many of how many are done.

    Returns
    -------
    list
        The results in the order of the items.
    """
    results: list[T] = []
    with ThreadPoolExecutor(_THREADS) as pool:
        futures = [pool.submit(work, item) for item in items]
        try:
            for number, future in enumerate(futures, start=1):
                results.append(future.result())
                if progress is not None:
                    progress(number, len(items))
        except BaseException:
            for future in futures:
                future.cancel()
            raise
    return results


def text_of(dataset: Dataset, keyword: str, *, name: str = "a file") -> str:
    """Return an element as plain text, empty when absent.

    Parameters
    ----------
    dataset : pydicom.Dataset
        The header.
    keyword : str
        DICOM keyword.
    name : str
        Name of the file, for messages.

    Returns
    -------
    str
        The text without blanks around it.
    """
    with guarded(name):
        value: Any = dataset.get(keyword)
        return "" if value is None else str(value).strip()
