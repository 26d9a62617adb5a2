"""Every kind of file that a study leaves, as other people's programs see it.

The rules are those of netCDF-4 in HDF5 (NetCDF User's Guide, "Interoperability
with HDF5") and of the CF conventions 1.8, sections 2.6, 3 and 4.
"""

from pathlib import Path

import h5py
import netCDF4
import numpy as np
import pytest
import xarray

from eddyshed.reduce.cli import main

TINY = Path(__file__).with_name("tiny.toml")
ENGINES = ("h5netcdf", "netcdf4")
KINDS = {"truth", "truth segment", "split", "closures", "simulated"}

# What a modeller expects of some variables: kind and path, unit.
EXPECTED = {
    ("truth", "state"): "m s-1",
    ("truth", "energy"): "m2 s-2",
    ("truth", "dissipation"): "m2 s-3",
    ("truth", "streamfunction"): "m2 s-1",
    ("truth", "vorticity"): "s-1",
    ("truth", "box_gyre"): "s-1",
    ("truth", "x"): "m",
    ("truth segment", "checkpoint/state"): "m s-1",
    ("split", "split/x"): "m s-1",
    ("split", "split/tendency"): "m s-2",
    ("split", "split/resolved/variance"): "m2 s-2",
    ("split", "split/resolved/vectors"): "1",
    ("closures", "operators/F1"): "m s-2",
    ("closures", "operators/A12"): "s-1",
    ("closures", "operators/B122"): "m-1",
    ("closures", "noise/process/rate"): "s-1",
    ("closures", "noise/process/covariance"): "m2 s-2",
    ("closures", "noise/variance/error"): "m2 s-2",
    ("closures", "noise/raw_decay/value"): "s-1",
    ("closures", "bare/x_from_xx"): "m-1",
    ("simulated", "x"): "m s-1",
}


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    """The files of a tiny study with every stream, by path, with their kind."""
    runs = tmp_path_factory.mktemp("runs")
    overrides = (
        "output.fields_every=80 d",
        'output.boxes.gyre.field="vorticity"',
        'forcing.gale.kind="gusts"',
        "forcing.gale.acceleration=1e-9 m/s2",
        "forcing.gale.band=[2, 3]",
        "forcing.gale.decorrelation=2 d",
        'closures.use=["bare", "residual"]',
        "benchmark.members=2",
    )
    options = [item for text in overrides for item in ("--set", text)]
    assert main(["benchmark", str(TINY), "--runs", str(runs), "--quiet", *options]) == 0
    kinds = {}
    segments = sorted(runs.rglob("segment-*.h5"))
    for path in sorted(runs.rglob("*.h5")):
        # The first lies in the spin-up and has no record, the last has most.
        if path in segments[1:-1]:
            continue
        with h5py.File(path) as file:
            kinds[path] = file.attrs["eddyshed_kind"]
    assert set(kinds.values()) >= KINDS
    return kinds


def groups_of(file):
    """All groups, the root first, and their datasets by name."""
    found = {"/": file}
    file.visititems(
        lambda name, item: (
            found.setdefault(name, item) and None
            if isinstance(item, h5py.Group)
            else None
        )
    )
    for name, group in found.items():
        yield (
            name,
            group,
            {n: i for n, i in group.items() if isinstance(i, h5py.Dataset)},
        )


def dimensions(item):
    """Names of the axes of a dataset, as its scales say."""
    if item.is_scale:
        return (item.name.rpartition("/")[2],)
    return tuple(axis[0].name.rpartition("/")[2] for axis in item.dims)


def test_every_axis_is_named_once_and_every_type_is_known_to_all(study):
    checked = 0
    for path in study:
        with h5py.File(path) as file:
            assert file.attrs["Conventions"] == "CF-1.8"
            for name, group, datasets in groups_of(file):
                where = f"{path.name}:{name}"
                if name != "/":  # of the root HDF5 does not tell; see the last test
                    order = group.id.get_create_plist().get_link_creation_order()
                    assert order & h5py.h5p.CRT_ORDER_TRACKED, where
                for key, value in group.attrs.items():
                    kind = np.asarray(value).dtype.kind
                    assert kind in "ifUOS", (where, key)
                for item in datasets.values():
                    if not item.is_scale:
                        assert all(len(axis) == 1 for axis in item.dims), item.name
                    names = dimensions(item)
                    assert len(set(names)) == len(names), item.name
                    text = h5py.check_string_dtype(item.dtype)
                    known = ("f4", "f8", "i1", "i2", "i4", "i8")
                    assert text or item.dtype.str[1:] in known, item.name
                    assert item.attrs["long_name"], item.name
                    checked += 1
    assert checked > 100


@pytest.mark.parametrize("engine", ENGINES)
def test_xarray_sees_the_same_as_h5py(study, engine):
    seen = set()
    for path, kind in study.items():
        with h5py.File(path) as file:
            for name, _, datasets in groups_of(file):
                if not datasets:
                    continue
                with xarray.open_dataset(
                    path, engine=engine, group=name, decode_times=False
                ) as data:
                    # The checkpoint's axis stands in the root, as netCDF allows.
                    assert set(data.variables) == set(datasets)
                    for key, item in datasets.items():
                        variable = data[key]
                        assert variable.dims == dimensions(item), item.name
                        values = item[...]
                        if h5py.check_string_dtype(item.dtype):
                            values = item.asstr()[...]
                        np.testing.assert_array_equal(
                            variable.values, values, err_msg=item.name
                        )
                        assert variable.attrs.get("units") == item.attrs.get("units")
                        full = f"{name}/{key}".lstrip("/")
                        if (kind, full) in EXPECTED:
                            expected = EXPECTED[kind, full]
                            assert variable.attrs["units"] == expected, full
                            seen.add((kind, full))
    assert seen == set(EXPECTED)


@pytest.mark.parametrize("engine", ENGINES)
def test_times_are_dates_and_lengths_are_metres(study, engine):
    epoch = np.datetime64("2000-01-01T00:00:00")
    for path in study:
        with h5py.File(path) as file:
            seconds = {n: file[n][...] for n in file if n.endswith("time")}
        with xarray.open_dataset(path, engine=engine) as data:
            for name, since in seconds.items():
                assert data[name].attrs["axis"] == "T"
                assert data.indexes[name].is_monotonic_increasing
                passed = (data[name].values - epoch) / np.timedelta64(1, "s")
                np.testing.assert_allclose(passed, since, rtol=0, atol=1e-6)
            if "vorticity" in data:
                # 16 points over 1800 km, from 0.
                expected = 112.5e3 * np.arange(16)
                np.testing.assert_allclose(data["x"].values, expected, rtol=1e-15)
                assert data["y"].attrs["axis"] == "Y"
                assert data["vorticity"].dims == ("fields_time", "y", "x")


def test_what_has_no_unit_is_known(study):
    # A reduced model's y is each closure's own, and so is what gusts remember.
    for path in study:
        with h5py.File(path) as file:
            for name, _, datasets in groups_of(file):
                for key, item in datasets.items():
                    if "units" not in item.attrs:
                        known = "y" in key or key == "covariance"
                        assert known or name == "checkpoint/random", item.name


def test_netcdf_itself_appends_to_each(study, tmp_path):
    # It refuses where the order of creation is not tracked.
    for number, path in enumerate(study):
        copy = tmp_path / f"{number}.h5"
        copy.write_bytes(path.read_bytes())
        with netCDF4.Dataset(copy, "a") as data:
            data.createDimension("more", 3)
            data.createVariable("extra", "f8", ("more",))[:] = 5.0
        with h5py.File(copy) as file:
            np.testing.assert_array_equal(file["extra"][...], 5.0)
