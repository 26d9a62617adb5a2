"""Files: every reader opens them, and nothing that goes wrong spoils one."""

import os
import subprocess
import sys
import textwrap

import h5py
import netCDF4
import numpy as np
import pytest
import xarray

from eddyshed.solver.errors import DataError, RunFolderError
from eddyshed.solver.files import (
    add_scale,
    add_time,
    add_variable,
    new_file,
    open_file,
    replacing,
    time_attributes,
)

ENGINES = ("h5netcdf", "netcdf4")


@pytest.fixture
def path(tmp_path):
    return tmp_path / "folder" / "some.h5"


def square():
    """Values on a square grid, where exchanged axes would not show in the shape."""
    return np.arange(16.0).reshape(4, 4)


def write(path, values=None, *, kind="test", **attributes):
    """A file with every sort of variable that the project writes."""
    values = square() if values is None else values
    with new_file(path, kind=kind, title="Test", attributes=attributes) as file:
        add_time(file, "time", np.array([0.0, 86400.0, 129600.0]))
        add_scale(file, "y", np.arange(4) * 2.0, units="m", long_name="north", axis="Y")
        add_scale(file, "x", np.arange(4) * 3.0, units="m", long_name="east", axis="X")
        add_variable(file, "field", ("y", "x"), values, units="m s-1", long_name="f")
        add_variable(file, "series", ("time",), [1.0, 2.0, 3.0], long_name="series")
        add_variable(file, "label", ("x",), ["a", "b", "ç", "d"], long_name="names")
        add_variable(file, "number", (), 7, long_name="a number alone")
        group = file.create_group("part", track_order=True)
        add_scale(group, "mode", np.arange(2), long_name="mode")
        add_variable(group, "small", ("mode",), np.float32([1, 2]), long_name="small")


def write_half(path, error):
    """Something goes wrong while a file is written."""
    with new_file(path, kind="test", title="new", attributes={}) as file:
        add_scale(file, "x", np.arange(3), long_name="x")
        raise error


def files_in(path):
    return sorted(file.name for file in path.parent.iterdir())


def in_a_small_disk(script, *arguments):
    """Run a script in a process whose files cannot grow beyond 20 kB."""
    head = """
        import resource, signal, sys
        from pathlib import Path
        import numpy as np
        from eddyshed.solver.errors import RunFolderError
        from eddyshed.solver.files import *
        # Python ignores the signal, so that a write beyond the limit fails with
        # an error, as it does on a full disk.
        assert signal.getsignal(signal.SIGXFSZ) == signal.SIG_IGN
        resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, 20_000))
        path = Path(sys.argv[1])
    """
    return subprocess.run(
        [
            sys.executable,
            "-c",
            textwrap.dedent(head) + textwrap.dedent(script),
            *map(str, arguments),
        ],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )


# --- What readers see -------------------------------------------------------


@pytest.mark.parametrize("engine", ENGINES)
def test_general_readers_open_it(path, engine):
    write(path)
    with xarray.open_dataset(path, engine=engine) as data:
        assert data["field"].dims == ("y", "x")
        np.testing.assert_array_equal(data["field"], square())
        np.testing.assert_array_equal(data["field"].sel(y=2.0), square()[1])
        assert data["field"].attrs == {"units": "m s-1", "long_name": "f"}
        assert data["x"].attrs["axis"] == "X"
        assert data["label"].values.tolist() == ["a", "b", "ç", "d"]
        assert data["number"].shape == ()
        # 129600 s is a day and a half; seconds since an arbitrary date (CF
        # conventions 1.8, section 4.4).
        assert str(data["time"].values[2])[:16] == "2000-01-02T12:00"
        assert data.attrs["Conventions"] == "CF-1.8"
        assert data.attrs["source"].startswith("eddyshed ")
    with xarray.open_dataset(path, engine=engine, group="part") as data:
        assert data["small"].dims == ("mode",)
        assert data["small"].dtype == np.float32


def test_every_axis_has_a_scale_of_its_own(path):
    # Without scales on all axes general readers name the axes themselves, take
    # one for another on a square grid, or do not open the file at all.
    write(path)
    checked = 0
    with h5py.File(path) as file:
        for group in (file, file["part"]):
            for item in group.values():
                if isinstance(item, h5py.Group):
                    continue
                assert {"units", "long_name"} <= set(item.attrs)
                if item.is_scale:
                    continue
                assert all(len(axis) == 1 for axis in item.dims)
                checked += 1
        assert [axis[0].name for axis in file["field"].dims] == ["/y", "/x"]
    assert checked == 5


@pytest.mark.parametrize("dimensions", [(), ("y",), ("y", "x", "time")])
def test_a_variable_names_each_of_its_axes(path, dimensions):
    with new_file(path, kind="test", title="", attributes={}) as file:
        add_scale(file, "y", np.arange(4), long_name="y")
        add_scale(file, "x", np.arange(4), long_name="x")
        with pytest.raises(ValueError, match="zip"):
            add_variable(file, "field", dimensions, square(), long_name="f")


@pytest.mark.parametrize("engine", ENGINES)
def test_a_virtual_variable_shows_other_files(path, engine):
    write(path)
    index = path.with_name("index.h5")
    layout = h5py.VirtualLayout((4, 4), dtype="float64")
    layout[:] = h5py.VirtualSource(path.name, "field", shape=(4, 4))
    with new_file(index, kind="index", title="Index", attributes={}) as file:
        add_scale(file, "y", np.arange(4), long_name="y")
        add_scale(file, "x", np.arange(4), long_name="x")
        add_variable(file, "field", ("y", "x"), layout, long_name="f")
    with xarray.open_dataset(index, engine=engine) as data:
        np.testing.assert_array_equal(data["field"], square())
    path.unlink()
    with open_file(index) as file:
        assert np.isnan(file["field"][...]).all()


def test_attributes_read_back(path):
    write(path, stamp="ü", count=3, share=0.25, names=["a", "b"], numbers=[1, 2])
    with open_file(path, kind="test") as file:
        found = {name: file.attrs[name] for name in ("stamp", "count", "share")}
        assert found == {"stamp": "ü", "count": 3, "share": 0.25}
        assert list(file.attrs["names"]) == ["a", "b"]
        assert list(file.attrs["numbers"]) == [1, 2]
    assert time_attributes()["units"] == "seconds since 2000-01-01 00:00:00"


def test_netcdf_can_add_to_it(path):
    # It refuses to append to files that do not track the order of creation.
    write(path)
    with netCDF4.Dataset(path, "a") as data:
        data.createVariable("more", "f8", ("y",))[:] = 5.0
    with open_file(path) as file:
        np.testing.assert_array_equal(file["more"][:], 5.0)
        np.testing.assert_array_equal(file["field"][:], square())


# --- All or nothing ---------------------------------------------------------


def test_the_file_appears_when_the_block_ends(path):
    with new_file(path, kind="test", title="", attributes={}) as file:
        add_scale(file, "x", np.arange(3), long_name="x")
        assert not path.exists()
    assert files_in(path) == ["some.h5"]


@pytest.mark.parametrize("error", [KeyError("a"), DataError("b"), KeyboardInterrupt()])
def test_an_exception_leaves_the_old_file(path, error):
    write(path)
    before = path.read_bytes()
    with pytest.raises(type(error)):
        write_half(path, error)
    assert path.read_bytes() == before
    assert files_in(path) == ["some.h5"]


def test_an_exception_leaves_no_file_where_there_was_none(path):
    with pytest.raises(ZeroDivisionError):
        write_half(path, ZeroDivisionError())
    assert files_in(path) == []


def test_a_reader_keeps_the_file_that_it_opened(path):
    write(path)
    with xarray.open_dataset(path, engine="netcdf4") as data:
        write(path, -square())
        np.testing.assert_array_equal(data["field"], square())
    with open_file(path) as file:
        np.testing.assert_array_equal(file["field"][:], -square())


def test_a_folder_in_the_way_is_an_error(tmp_path):
    (tmp_path / "file").write_text("")
    with (
        pytest.raises(RunFolderError, match=r"cannot be written.*--runs"),
        new_file(tmp_path / "file" / "a.h5", kind="t", title="", attributes={}),
    ):
        pass
    (tmp_path / "folder").mkdir()
    (tmp_path / "folder" / "inside").write_text("")
    with pytest.raises(RunFolderError), replacing(tmp_path / "folder") as temporary:
        temporary.write_text("new")
    assert os.listdir(tmp_path / "folder") == ["inside"]
    assert sorted(os.listdir(tmp_path)) == ["file", "folder"]


@pytest.mark.parametrize("arrays", [1, 40])
def test_a_full_disk_leaves_the_old_file(path, arrays):
    # HDF5 writes large arrays at once and small ones when it closes the file.
    write(path)
    before = path.read_bytes()
    script = """
        try:
            with new_file(path, kind="test", title="new", attributes={}) as file:
                number = int(sys.argv[2])
                size = 4000 // number
                add_scale(file, "x", np.arange(size), long_name="x")
                for k in range(number):
                    add_variable(file, f"v{k}", ["x"], np.ones(size), long_name="v")
        except RunFolderError as error:
            print(error)
    """
    result = in_a_small_disk(script, path, arrays)
    assert result.returncode == 0, result.stderr
    assert f"{path}: cannot be written (File too large)" in result.stdout
    assert "what was there before is untouched" in result.stdout
    assert result.stderr == ""
    assert path.read_bytes() == before
    assert files_in(path) == ["some.h5"]


def test_a_full_disk_leaves_the_old_text(tmp_path):
    path = tmp_path / "report.html"
    path.write_text("old")
    script = """
        try:
            with replacing(path) as temporary:
                temporary.write_text(30_000 * "new")
        except RunFolderError as error:
            print(error)
    """
    result = in_a_small_disk(script, path)
    assert "cannot be written (File too large)" in result.stdout
    assert path.read_text() == "old"
    assert files_in(path) == ["report.html"]


# --- What is refused --------------------------------------------------------


def refused(path, words, kind=None):
    with pytest.raises(DataError, match=words) as caught, open_file(path, kind=kind):
        pass
    assert str(path) in str(caught.value)


def test_what_is_not_ours_is_refused(path):
    refused(path, "no such file")
    path.parent.mkdir()
    refused(path.parent, "no such file")
    path.write_text("text")
    refused(path, "not a whole HDF5 file .*; remove it and run the study again")
    with h5py.File(path, "w") as file:
        file["x"] = 1
    refused(path, "an HDF5 file, but not one that eddyshed wrote")


def test_another_kind_is_refused(path):
    write(path)
    refused(path, "holds 'test', where 'truth' is needed", kind="truth")
    with open_file(path) as file, open_file(path, kind="test") as same:
        assert file.attrs["title"] == same.attrs["title"] == "Test"


@pytest.mark.parametrize("schema", [0, 2, None])
def test_another_schema_is_refused(path, schema):
    write(path)
    with h5py.File(path, "a") as file:
        if schema is None:
            del file.attrs["eddyshed_schema"]
        else:
            file.attrs["eddyshed_schema"] = schema
    refused(path, f"schema {schema}, this version reads 1; make the file anew")


@pytest.mark.parametrize("left", [0, 0.01, 0.5, 0.99])
def test_a_damaged_file_is_refused(path, left):
    write(path)
    whole = path.read_bytes()
    path.write_bytes(whole[: int(left * len(whole))])
    refused(path, "not a whole HDF5 file")


def test_a_file_is_closed_when_its_block_ends(path):
    write(path)
    with open_file(path) as file:
        pass
    assert not file
    with pytest.raises(ZeroDivisionError), open_file(path) as file:
        raise ZeroDivisionError
    assert not file
