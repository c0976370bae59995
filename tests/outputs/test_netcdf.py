"""NetCDF: everything comes back, nothing is lost or dated, bad input is refused."""

import time

import numpy as np
import pytest

from dosekit.caution import CAUTION
from dosekit.errors import InputError, OutputError
from dosekit.outputs.netcdf import content_hash, read_dataset, write_dataset


def test_dose_comes_back_bit_for_bit(dose, tmp_path):
    back = read_dataset(write_dataset(dose, tmp_path / "dose.nc", run_hash="f00d", sources=("one", "two")))
    np.testing.assert_array_equal(back["dose"].values, dose["dose"].values)
    assert back["dose"].dtype == np.float32
    assert back["dose"].dims == ("component", "z", "y", "x")
    assert [str(name) for name in back["component"].values] == [str(name) for name in dose["component"].values]
    for axis in "xyz":
        np.testing.assert_array_equal(back[axis].values, dose[axis].values)
        assert back[axis].attrs["units"] == "mm"
        assert "_FillValue" not in back[axis].encoding
    assert back["dose"].attrs["units"] == "Gy"
    assert back.attrs["caution"] == CAUTION
    assert back.attrs["references"] == "one\ntwo"
    assert back.attrs["run_hash"] == "f00d"
    assert back.attrs["Conventions"].startswith("CF-")
    assert back.attrs["dose_to"] == "medium"


def test_the_same_contents_are_the_same_bytes_at_another_time(dose, tmp_path):
    one = write_dataset(dose, tmp_path / "one.nc", run_hash="a").read_bytes()
    time.sleep(1.1)
    two = write_dataset(dose.copy(deep=True), tmp_path / "two.nc", run_hash="a").read_bytes()
    assert one == two


def test_a_large_map_is_written_in_pieces_and_comes_back(tmp_path, rng):
    import xarray as xr

    values = rng.random((2, 70, 80, 90)).astype(np.float32)
    big = xr.Dataset({"dose": (("component", "z", "y", "x"), values, {"units": "Gy"})})
    back = read_dataset(write_dataset(big, tmp_path / "big.nc", run_hash="a"))
    np.testing.assert_array_equal(back["dose"].values, values)


def test_zeros_take_little_room(dose, tmp_path):
    empty = dose.assign(dose=(dose["dose"] * 0.0).assign_attrs(units="Gy"))
    assert write_dataset(empty, tmp_path / "zero.nc", run_hash="a").stat().st_size < dose["dose"].nbytes / 2


def test_attributes_of_any_plain_kind_survive(dose, tmp_path):
    rich = dose.assign_attrs(
        flag=True, number=np.float64(2.5), nothing=None, names=["a", "b"], table={"x": 1}, triple=(1.0, 2.0, 3.0)
    )
    attrs = read_dataset(write_dataset(rich, tmp_path / "rich.nc", run_hash="a")).attrs
    assert attrs["flag"] == 1
    assert attrs["number"] == 2.5
    assert attrs["names"] == "a\nb"
    assert attrs["table"] == '{"x":1}'
    np.testing.assert_array_equal(attrs["triple"], [1.0, 2.0, 3.0])


def test_a_variable_without_a_unit_is_refused_and_nothing_written(dose, tmp_path):
    bare = dose.copy()
    bare["dose"] = bare["dose"].copy()
    bare["dose"].attrs = {}
    with pytest.raises(InputError, match="without a unit"):
        write_dataset(bare, tmp_path / "bare.nc", run_hash="a")
    assert list(tmp_path.iterdir()) == []


def test_a_place_that_cannot_be_written_is_said_plainly(dose, tmp_path):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(OutputError, match="could not be written"):
        write_dataset(dose, tmp_path / "file" / "dose.nc", run_hash="a")


@pytest.mark.parametrize("content", [b"", b"not netcdf", b"\x89HDF\r\n\x1a\n" + b"\0" * 64])
def test_damaged_files_are_refused(content, tmp_path):
    path = tmp_path / "bad.nc"
    path.write_bytes(content)
    with pytest.raises(InputError, match="cannot be read"):
        read_dataset(path)
    with pytest.raises(InputError, match="no file"):
        read_dataset(tmp_path / "none.nc")


def test_content_hash_follows_contents_only(dose):
    same = content_hash(dose)
    assert same == content_hash(dose.copy(deep=True))
    changed = dose.copy(deep=True)
    changed["dose"].values[0, 0, 0, 0] += 1e-3
    assert content_hash(changed) != same
    assert content_hash(dose.assign_attrs(dose_to="water")) != same
    assert content_hash(dose.assign_coords(x=dose["x"] + 1.0)) != same


def test_writing_leaves_the_dataset_alone(dose, tmp_path):
    before = content_hash(dose)
    write_dataset(dose, tmp_path / "dose.nc", run_hash="a")
    assert content_hash(dose) == before


def test_no_identity_in_the_file(dose, anatomy, tmp_path):
    assert "PLANTED" in str(anatomy.dicom_reference)
    assert b"PLANTED" not in write_dataset(dose, tmp_path / "dose.nc", run_hash="a").read_bytes()
