"""Damaged and hostile DICOM: every input ends in an error of our own, soon and in little memory, nothing written."""

from __future__ import annotations

import resource
import time
import warnings
import zlib

import numpy as np
import pydicom
import pytest
from ct_series import FRAME, odd_volume, rectangle, save, slice_dataset, structure_dataset, write_series
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from pydicom.dataelem import RawDataElement
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.tag import Tag

from dosekit.errors import DicomError, DosekitWarning, InputError, SizeError
from dosekit.grids.ct import read_ct

NZ = 4
SLICE = "0001.dcm"

PIXELS_OF_84_BYTES = b"\xe0\x7f\x10\x00OW\0\0\x54\0\0\0"

# ---------------------------------------------------------------- the corpus: name -> damage done to a good folder


def header(**changes):
    """Change elements of one slice; None deletes."""

    def damage(folder):
        ds = pydicom.dcmread(folder / SLICE)
        for keyword, value in changes.items():
            if value is None:
                delattr(ds, keyword)
            else:
                setattr(ds, keyword, value)
        save(ds, folder / SLICE)

    return damage


def everywhere(**changes):
    """Change elements of all slices; None deletes."""

    def damage(folder):
        for path in folder.glob("*.dcm"):
            ds = pydicom.dcmread(path)
            for keyword, value in changes.items():
                if value is None:
                    delattr(ds, keyword)
                else:
                    setattr(ds, keyword, value)
            save(ds, path)

    return damage


def raw_value(keyword, value):
    """Put bytes into an element of one slice, as they are."""

    def damage(folder):
        ds = pydicom.dcmread(folder / SLICE)
        tag = Tag(keyword)
        ds._dict[tag] = RawDataElement(tag, ds[tag].VR, len(value), value, 0, False, True)
        save(ds, folder / SLICE)

    return damage


def raw_bytes(change):
    """Change the bytes of one file."""

    def damage(folder):
        path = folder / SLICE
        path.write_bytes(change(path.read_bytes()))

    return damage


def patched(old, new):
    """Replace bytes in one file, which must be there."""

    def change(data):
        assert old in data
        return data.replace(old, new, 1)

    return raw_bytes(change)


def only(*names):
    """Keep these files only."""

    def damage(folder):
        for path in folder.glob("*.dcm"):
            if path.name not in names:
                path.unlink()

    return damage


def copied(folder):
    (folder / "copy.dcm").write_bytes((folder / SLICE).read_bytes())


def without_inner_slice(folder):
    (folder / SLICE).unlink()


def deep_sequences(folder):
    ds = pydicom.dcmread(folder / SLICE)
    pixels = ds.PixelData
    del ds.PixelData
    inner = b""
    for _ in range(3000):  # undefined length: begin of sequence and item, then the same again
        inner += b"\x08\x00\x40\x11SQ\0\0\xff\xff\xff\xff\xfe\xff\x00\xe0\xff\xff\xff\xff"
    save(ds, folder / SLICE)
    data = (folder / SLICE).read_bytes()
    where = data.index(b"\x18\x00\x50\x00DS")
    tail = b"\xe0\x7f\x10\x00OW\0\0" + len(pixels).to_bytes(4, "little") + pixels
    (folder / SLICE).write_bytes(data[:where] + inner + data[where:] + tail)


def nested_items(folder):
    ds = pydicom.dcmread(folder / SLICE)
    item = Dataset()
    for _ in range(150):
        outer = Dataset()
        outer.ReferencedImageSequence = Sequence([item])
        item = outer
    ds.ReferencedImageSequence = Sequence([item])
    save(ds, folder / SLICE)
    raw_value("ImagePositionPatient", rb"0\0\nan")(folder)


def deflate_bomb(folder):
    ds = pydicom.dcmread(folder / SLICE)
    ds.file_meta.TransferSyntaxUID = "1.2.840.10008.1.2.1.99"
    ds.save_as(folder / SLICE)
    data = (folder / SLICE).read_bytes()
    meta_end = 144 + int.from_bytes(data[140:144], "little")
    packer = zlib.compressobj(9, zlib.DEFLATED, -zlib.MAX_WBITS)
    flood = packer.compress(b"\x08\x00\x05\x00CS\x00\x00")
    flood += b"".join(packer.compress(bytes(1 << 20)) for _ in range(150)) + packer.flush()
    (folder / SLICE).write_bytes(data[:meta_end] + flood)


def bad_run_lengths(folder):
    ds = pydicom.dcmread(folder / SLICE)
    ds.compress(pydicom.uid.RLELossless, generate_instance_uid=False)
    save(ds, folder / SLICE)
    data = (folder / SLICE).read_bytes()
    assert b"\x02\0\0\0\x40\0\0\0" in data  # two segments, the first after the table of 64 bytes
    (folder / SLICE).write_bytes(data.replace(b"\x02\0\0\0\x40\0\0\0", b"\x02\0\0\0\x40\x11\0\0", 1))


def unknown_syntax(uid):
    def damage(folder):
        ds = pydicom.dcmread(folder / SLICE)
        ds.file_meta.TransferSyntaxUID = uid
        ds.PixelData = pydicom.encaps.encapsulate([b"\xff\xd8" + b"\0" * 50])
        ds["PixelData"].is_undefined_length = True
        save(ds, folder / SLICE)

    return damage


def swapped_endianness(data):
    """Claim big-endian coding of little-endian bytes."""
    return data.replace(b"1.2.840.10008.1.2.1\0", b"1.2.840.10008.1.2.2\0", 1)


def swapped_words(data):
    body = bytearray(data[132:])
    body[0::2], body[1::2] = bytes(body[1::2]), bytes(body[0 : len(body) - len(body) % 2 : 2])
    return data[:132] + bytes(body)


def mixed_position(folder):
    ds = pydicom.dcmread(folder / SLICE)
    ds.ImagePositionPatient = ["30", "0", ds.ImagePositionPatient[2]]
    save(ds, folder / SLICE)


def all_in_one_place(folder):
    for path in folder.glob("*.dcm"):
        ds = pydicom.dcmread(path)
        ds.ImagePositionPatient = ["0", "0", "0"]
        save(ds, path)


def second_series(folder):
    save(slice_dataset(odd_volume()[0], position=(0, 0, 90), series="2.25.9"), folder / "other.dcm")


def far_slice(folder):
    save(slice_dataset(odd_volume()[0], position=(0, 0, 5000), number=50), folder / "far.dcm")


def empty_folder(folder):
    for path in folder.glob("*"):
        path.unlink()


def folder_of_notes(folder):
    empty_folder(folder)
    (folder / "note.txt").write_text("nothing here")


IMAGES = {
    # cut short, overwritten, not DICOM
    "no files": empty_folder,
    "notes only": folder_of_notes,
    "one slice": only(SLICE),
    "empty file": raw_bytes(lambda data: b""),
    "cut in the preamble": raw_bytes(lambda data: data[:100]),
    "cut after the mark": raw_bytes(lambda data: data[:132]),
    "cut in the meta header": raw_bytes(lambda data: data[:180]),
    "cut in the header": raw_bytes(lambda data: data[:600]),
    "cut in the pixels": raw_bytes(lambda data: data[:-30]),
    "cut before the pixels": raw_bytes(lambda data: data[: data.index(b"\xe0\x7f\x10\x00")]),
    "mark overwritten": raw_bytes(lambda data: data[:128] + b"XXXX" + data[132:]),
    "noise": raw_bytes(lambda data: np.random.default_rng(1).bytes(len(data))),
    "noise after the mark": raw_bytes(lambda data: data[:132] + np.random.default_rng(2).bytes(len(data))),
    "noise after the meta header": raw_bytes(lambda data: data[:330] + np.random.default_rng(3).bytes(600)),
    "zeros": raw_bytes(lambda data: bytes(len(data))),
    "zeros after the mark": raw_bytes(lambda data: data[:132] + bytes(len(data))),
    "text named dcm": raw_bytes(lambda data: b"hello world\n" * 40),
    "claims big endian": raw_bytes(swapped_endianness),
    "bytes of words swapped": raw_bytes(swapped_words),
    "length of the pixels too small": patched(PIXELS_OF_84_BYTES, b"\xe0\x7f\x10\x00OW\0\0\x20\0\0\0"),
    "length beyond the end, and cut": raw_bytes(
        lambda data: data.replace(PIXELS_OF_84_BYTES, b"\xe0\x7f\x10\x00OW\0\0\xf0\xff\xff\xff")[:-9]
    ),
    "unknown representation": patched(b"\x28\x00\x30\x00DS", b"\x28\x00\x30\x00ZZ"),
    # sequences and compression
    "sequences without end": deep_sequences,
    "sequences nested and a position not a number": nested_items,
    "deflated bomb": deflate_bomb,
    "broken run lengths": bad_run_lengths,
    "broken jpeg": unknown_syntax("1.2.840.10008.1.2.4.70"),
    "broken jpeg 2000": unknown_syntax("1.2.840.10008.1.2.4.90"),
    "transfer syntax made up": unknown_syntax("1.2.3.4.5"),
    "video": unknown_syntax("1.2.840.10008.1.2.4.102"),
    # what kind of image
    "magnetic resonance": everywhere(Modality="MR"),
    "no modality": everywhere(Modality=None),
    "structure storage class": everywhere(SOPClassUID="1.2.840.10008.5.1.4.1.1.481.3"),
    "enhanced CT": everywhere(SOPClassUID="1.2.840.10008.5.1.4.1.1.2.1"),
    "two series": second_series,
    "two frames of reference": header(FrameOfReferenceUID="2.25.8"),
    "two patient positions": header(PatientPosition="FFP"),
    # size and pixels
    "huge rows": header(Rows=65535),
    "huge everywhere": everywhere(Rows=16384, Columns=16384),
    "no rows": header(Rows=None),
    "rows of zero": header(Rows=0),
    "other columns": header(Columns=6),
    "rows do not fit the pixels": everywhere(Rows=5),
    "no pixels": header(PixelData=None),
    "colour": header(SamplesPerPixel=3, PhotometricInterpretation="RGB"),
    "inverted grey": header(PhotometricInterpretation="MONOCHROME1"),
    "nine bits": header(BitsAllocated=9),
    "more bits stored than there are": header(BitsStored=20),
    "high bit astray": header(HighBit=3),
    "no bits": header(BitsAllocated=None),
    "sign of two": header(PixelRepresentation=2),
    "many frames": header(NumberOfFrames="1000000000"),
    "no slope": header(RescaleSlope=None),
    "no intercept": header(RescaleIntercept=None),
    "slope of zero": header(RescaleSlope="0"),
    "negative slope": header(RescaleSlope="-1"),
    "huge slope": header(RescaleSlope="1e30"),
    "huge intercept": header(RescaleIntercept="1e30"),
    "slope not a number": raw_value("RescaleSlope", b"one "),
    "intercept not finite": raw_value("RescaleIntercept", b"inf "),
    # geometry
    "no position": header(ImagePositionPatient=None),
    "position of two": header(ImagePositionPatient=["0", "0"]),
    "position not a number": raw_value("ImagePositionPatient", rb"0\0\up "),
    "position not finite": raw_value("ImagePositionPatient", rb"0\0\nan"),
    "position of many digits": raw_value("ImagePositionPatient", rb"0\0\1e308e"),
    "position far away": header(ImagePositionPatient=["0", "0", "1e9"]),
    "no orientation": header(ImageOrientationPatient=None),
    "orientation of five": header(ImageOrientationPatient=["1", "0", "0", "0", "1"]),
    "orientation of zeros": everywhere(ImageOrientationPatient=["0"] * 6),
    "orientation not at right angles": everywhere(ImageOrientationPatient=["1", "0", "0", "0.7", "0.7", "0"]),
    "orientation not of unit length": everywhere(ImageOrientationPatient=["2", "0", "0", "0", "2", "0"]),
    "two orientations": header(ImageOrientationPatient=["1", "0", "0", "0", "0", "-1"]),
    "oblique": everywhere(ImageOrientationPatient=["0.8", "0.6", "0", "-0.6", "0.8", "0"]),
    "tilted": everywhere(ImageOrientationPatient=["1", "0", "0", "0", "0.9588", "0.2840"]),
    "no spacing": header(PixelSpacing=None),
    "negative spacing": everywhere(PixelSpacing=["-1", "1"]),
    "spacing of zero": everywhere(PixelSpacing=["0", "1"]),
    "huge spacing": everywhere(PixelSpacing=["1e6", "1"]),
    "spacing of one number": everywhere(PixelSpacing="1"),
    "spacing not a number": raw_value("PixelSpacing", b"1\\x "),
    "two spacings": header(PixelSpacing=["1.1", "1.1"]),
    "a slice twice": copied,
    "a slice missing": without_inner_slice,
    "a slice aside": mixed_position,
    "a slice far away": far_slice,
    "all slices in one place": all_in_one_place,
}


@pytest.fixture(scope="session")
def good_bytes(tmp_path_factory):
    """A good series and structure set, as bytes."""
    folder = tmp_path_factory.mktemp("good")
    write_series(folder, odd_volume(NZ), shuffle=False)
    files = {path.name: path.read_bytes() for path in folder.iterdir()}
    contours = [rectangle(0.6, 0.6, 4.4, 4.4, 2.0 * k) for k in range(NZ)]
    save(structure_dataset({"one": contours, "two": contours[:2]}), folder / "rs.dcm")
    return files, (folder / "rs.dcm").read_bytes()


@pytest.fixture
def good(good_bytes, tmp_path):
    """A good folder to be damaged, and its structure set beside it."""
    images = tmp_path / "ct"
    images.mkdir()
    for name, data in good_bytes[0].items():
        (images / name).write_bytes(data)
    (tmp_path / "rs.dcm").write_bytes(good_bytes[1])
    return tmp_path


def peak_bytes():
    """Largest memory of this process so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def ends_well(folder, structures=None, **options):
    """Read; return the error of ours, or None; nothing else may happen, and it must be quick and small."""
    before = {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    memory, start = peak_bytes(), time.perf_counter()
    error = None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            warnings.simplefilter("ignore", DosekitWarning)
            read_ct(folder / "ct", structures, **options)
    except InputError as problem:
        error = problem
    assert time.perf_counter() - start < 5.0
    assert peak_bytes() - memory < 1e9
    assert {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()} == before
    return error


def test_the_good_folder_is_good(good):
    assert ends_well(good, good / "rs.dcm") is None


def test_the_corpus_is_large_enough():
    assert len(IMAGES) + len(STRUCTURES) >= 60
    assert len(IMAGES) >= 60


@pytest.mark.parametrize("name", IMAGES)
def test_damaged_images_end_in_an_error_of_ours(good, name):
    IMAGES[name](good / "ct")
    error = ends_well(good)
    assert isinstance(error, DicomError | SizeError), name
    text = str(error)
    assert "Planted" not in text
    assert "PLANTED" not in text
    assert FRAME not in text


@pytest.mark.parametrize("name", IMAGES)
def test_asking_for_resampling_opens_no_door(good, name):
    IMAGES[name](good / "ct")
    ends_well(good, resample=True)


# ---------------------------------------------------------------- structure sets


def in_set(change):
    def damage(path):
        ds = pydicom.dcmread(path)
        change(ds)
        save(ds, path)

    return damage


def contour_value(value):
    """Put bytes into the first contour."""

    def change(ds):
        contour = ds.ROIContourSequence[0].ContourSequence[0]
        tag = Tag("ContourData")
        contour._dict[tag] = RawDataElement(tag, "DS", len(value), value, 0, True, True)

    return in_set(change)


def no_contours(ds):
    for item in ds.ROIContourSequence:
        item.ContourSequence = []


def self_crossing(ds):
    ds.ROIContourSequence[0].ContourSequence[0].ContourData = [
        "0",
        "0",
        "0",
        "5",
        "5",
        "0",
        "5",
        "0",
        "0",
        "0",
        "5",
        "0",
    ]


def crossing(ds):
    first, second = ds.ROIContourSequence[0].ContourSequence[:2]
    first.ContourData = ["0", "0", "0", "3", "0", "0", "3", "3", "0", "0", "3", "0"]
    second.ContourData = ["1", "1", "0", "6", "1", "0", "6", "6", "0", "1", "6", "0"]


def other_frame(ds):
    for roi in ds.StructureSetROISequence:
        roi.ReferencedFrameOfReferenceUID = "2.25.6"


STRUCTURES = {
    "set cut short": lambda path: path.write_bytes(path.read_bytes()[:700]),
    "set cut in a contour": lambda path: path.write_bytes(path.read_bytes()[:-700]),
    "set of noise": lambda path: path.write_bytes(np.random.default_rng(5).bytes(500)),
    "set empty": lambda path: path.write_bytes(b""),
    "set is a plan": in_set(lambda ds: setattr(ds, "Modality", "RTPLAN")),
    "set of another frame": in_set(other_frame),
    "no structures": in_set(lambda ds: delattr(ds, "StructureSetROISequence")),
    "no contours": in_set(no_contours),
    "contours not numbers": contour_value(b"0\\0\\x\\1\\1\\0\\2\\0\\0 "),
    "contours not finite": contour_value(b"0\\0\\0\\nan\\1\\0\\2\\0\\0 "),
    "contours of ten numbers": contour_value(b"0\\0\\0\\5\\1\\0\\2\\0\\0\\7 "),
    "contours far away": contour_value(b"0\\0\\0\\1e9\\1\\0\\2\\0\\0\\1\\1\\0 "),
    "contours slanted": contour_value(b"0\\0\\0\\4\\0\\3\\4\\4\\5\\0\\4\\2 "),
    "contours crossing": in_set(crossing),
    "contour crossing itself": in_set(self_crossing),
    "number not a number": in_set(lambda ds: ds.StructureSetROISequence[0].__delattr__("ROINumber")),
    "reference astray": in_set(lambda ds: ds.ROIContourSequence[0].__delattr__("ReferencedROINumber")),
}


@pytest.mark.parametrize("name", STRUCTURES)
def test_damaged_structure_sets_end_in_an_error_of_ours(good, name):
    STRUCTURES[name](good / "rs.dcm")
    error = ends_well(good, good / "rs.dcm")
    assert isinstance(error, DicomError), name
    assert "Planted" not in str(error)


# ---------------------------------------------------------------- whatever else may happen to bytes


def mutate(data, changes, cut):
    """Flip bits at places given as shares of the length, and cut the end."""
    body = bytearray(data)
    for place, bit in changes:
        body[int(place * (len(body) - 1))] ^= 1 << bit
    return bytes(body[: max(1, int(cut * len(body)))])


FLIPS = st.lists(st.tuples(st.floats(0, 1), st.integers(0, 7)), min_size=1, max_size=12)
CUTS = st.one_of(st.just(1.0), st.floats(0.0, 1.0))
CALM = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@CALM
@given(changes=FLIPS, cut=CUTS)
def test_flipped_bits_in_an_image(good, good_bytes, changes, cut):
    path = good / "ct" / SLICE
    path.write_bytes(mutate(good_bytes[0][SLICE], changes, cut))
    ends_well(good)


@CALM
@given(changes=FLIPS, cut=CUTS)
def test_flipped_bits_in_a_structure_set(good, good_bytes, changes, cut):
    path = good / "rs.dcm"
    path.write_bytes(mutate(good_bytes[1], changes, cut))
    ends_well(good, path)


TEXTS = st.text(alphabet="0123456789.+-eE\\ nax", max_size=24)
DECIMALS = ["ImagePositionPatient", "ImageOrientationPatient", "PixelSpacing", "RescaleSlope", "RescaleIntercept"]


@CALM
@given(keyword=st.sampled_from(DECIMALS), text=TEXTS)
def test_any_text_in_place_of_a_number(good, good_bytes, keyword, text):
    (good / "ct" / SLICE).write_bytes(good_bytes[0][SLICE])
    value = text.encode("ascii")
    raw_value(keyword, value + b" " * (len(value) % 2))(good / "ct")
    ends_well(good)


WHOLE = ["Rows", "Columns", "BitsAllocated", "BitsStored", "HighBit", "PixelRepresentation", "SamplesPerPixel"]


@CALM
@given(keyword=st.sampled_from(WHOLE), value=st.integers(0, 65535))
def test_any_whole_number_in_the_pixel_description(good, good_bytes, keyword, value):
    (good / "ct" / SLICE).write_bytes(good_bytes[0][SLICE])
    header(**{keyword: value})(good / "ct")
    ends_well(good)
