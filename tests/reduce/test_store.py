"""Files of the reduction: what goes in comes out, and every reader opens them."""

import dataclasses
import json
import math
from dataclasses import dataclass

import h5py
import numpy as np
import pytest
import xarray
from splits import divided
from toys import coloured_model, orthonormal_vectors, random_model

from eddyshed.reduce.audit import Finding
from eddyshed.reduce.bases.basis import Basis, Measured
from eddyshed.reduce.diffusion import DiffusionModel
from eddyshed.reduce.homogenised import white_limit
from eddyshed.reduce.layout import AXES, UNITS, composed
from eddyshed.reduce.noise.fit import NoiseFit, fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import Operators, galerkin
from eddyshed.reduce.polynomial import Polynomial
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.report.markup import page
from eddyshed.reduce.split import Split
from eddyshed.reduce.store import (
    pack,
    plain,
    read_fingerprint,
    read_json,
    read_one,
    unpack,
    write_all,
    write_json,
)
from eddyshed.solver.errors import DataError, RunFolderError

ENGINES = ("h5netcdf", "netcdf4")
NX, NY = 3, 4


@pytest.fixture(scope="module")
def parts():
    """One of everything that is kept, from one small reduction."""
    rng = np.random.default_rng(91)
    model = random_model(rng, 9)
    vectors = orthonormal_vectors(rng, model.weights, NX + NY)
    states = OrnsteinUhlenbeck(rate=np.eye(9), covariance=np.eye(9)).simulate(
        3000, 0.3, rng
    )[0]
    split, y = divided(model, states, vectors, NX, step=0.3)
    split = dataclasses.replace(
        split,
        unresolved=dataclasses.replace(
            split.unresolved, partners=np.array([1, 0, -1, -1])
        ),
        fine_x=split.x.repeat(3, axis=1),
        fine_step=0.1,
    )
    operators = galerkin(model, vectors[:, :NX], vectors[:, NX:], split.mean)
    noise = fit_ornstein_uhlenbeck(
        y, 0.3, window=6.0, partners=split.unresolved.partners
    )
    noise = dataclasses.replace(
        noise,
        uncorrected=np.array([True, True, False, False]),
        notes=("first: ü ∂ “quoted” \"plain\" 'single'", "second\nline"),
        decay=dataclasses.replace(
            noise.decay, error=np.array([0.1, 0.1, math.inf, 1e-300])
        ),
    )
    full = fit_ornstein_uhlenbeck(y[..., :2], 0.3, window=6.0, structure="full")
    coloured = coloured_model(
        operators, rate=noise.process.rate, covariance=noise.process.covariance
    )
    coloured = dataclasses.replace(
        coloured,
        notes=("a note",),
        facts={"share [1]": 0.1 + 0.2, "large": 1e300, "none": math.inf},
    )
    bare = ReducedModel(
        name="bare",
        x_forcing=operators.F1,
        x_from_x=operators.A11,
        x_from_xx=operators.B111,
    )
    white = white_limit(coloured).equation(
        labels=split.resolved.labels, notes=("a note",), facts={"size": 0.1}
    )
    return {
        "split": split,
        "operators": operators,
        "noise": noise,
        "full": full,
        "process": noise.process,
        "coloured": coloured,
        "bare": bare,
        "white": white,
    }


@pytest.fixture(scope="module")
def path(parts, tmp_path_factory):
    path = tmp_path_factory.mktemp("store") / "all.h5"
    write_all(path, "a stamp", "Title", "test", parts)
    return path


def assert_equal(one, other, where="value"):
    """Equal to the bit, type for type."""
    assert type(one) is type(other), where
    if dataclasses.is_dataclass(one):
        for field in dataclasses.fields(one):
            name = field.name
            assert_equal(getattr(one, name), getattr(other, name), f"{where}.{name}")
    elif isinstance(one, np.ndarray):
        assert (one.dtype, one.shape) == (other.dtype, other.shape), where
        assert one.tobytes() == other.tobytes(), where
    else:
        assert one == other, where


NAMES = ("split", "operators", "noise", "full", "process", "coloured", "bare", "white")


@pytest.mark.parametrize("name", NAMES)
def test_what_goes_in_comes_out(parts, path, name):
    value = parts[name]
    assert_equal(read_one(path, "test", name, type(value)), value)


def test_all_kinds_are_tried(parts):
    kinds = {Split, Operators, NoiseFit, OrnsteinUhlenbeck, ReducedModel}
    kinds.add(DiffusionModel)
    assert {type(value) for value in parts.values()} == kinds
    for kind in (*kinds, Basis, Polynomial):
        arrays = [
            field.name
            for field in dataclasses.fields(kind)
            if field.type in ("np.ndarray", np.ndarray)
        ]
        assert set(AXES[kind.__name__]) == set(arrays)


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("name", NAMES)
def test_general_readers_open_each_group(parts, path, name, engine):
    value = parts[name]
    with xarray.open_dataset(path, group=name, engine=engine) as data:
        checked = 0
        for field, axes in AXES[type(value).__name__].items():
            array = getattr(value, field)
            np.testing.assert_array_equal(data[field], array)
            # No dimension stands twice in one variable: readers cannot tell.
            dimensions = data[field].dims
            assert len(set(dimensions)) == len(dimensions) == array.ndim
            assert [d.partition("__")[0] for d in dimensions] == list(axes)
            # A reduced model's y has a unit that each closure chooses, and noise of
            # several powers of x in one array has more than one.
            is_model = isinstance(value, ReducedModel | DiffusionModel)
            if not is_model or field in UNITS[type(value).__name__]:
                assert data[field].attrs["units"]
            checked += array.size
        assert checked > 0


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize(
    "group", ["split/resolved", "split/unresolved", "noise/process", "noise/decay"]
)
def test_general_readers_open_groups_in_groups(path, group, engine):
    with xarray.open_dataset(path, group=group, engine=engine) as data:
        assert len(data.data_vars) >= 2


def test_names_of_many_modes_are_kept(tmp_path):
    # Text of half a megabyte, far above the 64 kB of a compact HDF5 attribute.
    count = 30_000
    basis = Basis(
        vectors=np.zeros((1, count)),
        labels=tuple(f"cos {k},{-k}" for k in range(count)),
        partners=np.arange(count),
        variance=np.arange(count) / 7,
    )
    write_all(tmp_path / "a.h5", "", "", "test", {"basis": basis})
    assert_equal(read_one(tmp_path / "a.h5", "test", "basis", Basis), basis)


def test_what_is_measured_is_kept_and_may_be_absent(tmp_path):
    measured = Measured(
        matrix=np.arange(6.0).reshape(3, 2),
        labels=("a", "b", "null"),
        units=("m s-1", "m2 s-1", "s-1"),
        long_names=("one", "two", "three"),
    )
    basis = Basis(
        vectors=np.eye(2),
        labels=("a", "null"),
        partners=np.array([-1, -1]),
        variance=np.ones(2),
        measured=measured,
    )
    without = dataclasses.replace(basis, measured=None)
    parts = {"one": basis, "other": without}
    write_all(tmp_path / "a.h5", "", "", "test", parts)
    for name, expected in parts.items():
        assert_equal(read_one(tmp_path / "a.h5", "test", name, Basis), expected)


def test_numbers_and_flags_keep_their_types(tmp_path):
    @dataclass(frozen=True)
    class Mixed:
        flag: bool
        count: int
        share: float
        word: str
        names: tuple[str, ...]
        table: dict[str, float]

    value = Mixed(True, 3, 1 / 3, "ü", ("a", "b"), {"x": 0.1, "y": -math.inf})
    with h5py.File(tmp_path / "a.h5", "w") as file:
        pack(file.create_group("mixed"), value, "m s-1")
        pack(file.create_group("off"), dataclasses.replace(value, flag=False), "1")
        assert_equal(unpack(file["mixed"], Mixed), value)
        assert unpack(file["off"], Mixed).flag is False
        # General readers drop attributes that are neither numbers nor text.
        for stored in file["mixed"].attrs.values():
            assert isinstance(stored, str | np.integer | np.floating)


# --- Damage -----------------------------------------------------------------


def test_a_part_that_is_not_there_is_named(path, tmp_path):
    with pytest.raises(DataError, match="has no part 'residual'"):
        read_one(path, "test", "residual", ReducedModel)
    with pytest.raises(DataError, match="holds 'test', where 'closures' is needed"):
        read_one(path, "closures", "noise", NoiseFit)
    with pytest.raises(DataError, match="no such file"):
        read_one(tmp_path / "none.h5", "test", "noise", NoiseFit)


@pytest.mark.parametrize("left", [0.0, 0.3, 0.999])
def test_a_cut_file_is_refused(path, tmp_path, left):
    whole = path.read_bytes()
    cut = tmp_path / "cut.h5"
    cut.write_bytes(whole[: int(left * len(whole))])
    with pytest.raises(DataError, match="not a whole HDF5 file"):
        read_one(cut, "test", "noise", NoiseFit)
    assert read_fingerprint(cut) == ""


def spoil_nothing(group):
    """The file is sound, but was not written as what it is read as."""


def lose_an_array(group):
    del group["decay"]["value"]


def lose_a_number(group):
    del group.attrs["window"]


def spoil_a_text(group):
    group.attrs["notes"] = '["cut'


def spoil_a_matrix(group):
    group["process"]["covariance"][0, 0] = np.nan


@pytest.mark.parametrize(
    ("spoil", "kind"),
    [
        (spoil_nothing, Operators),
        (lose_an_array, NoiseFit),
        (lose_a_number, NoiseFit),
        (spoil_a_text, NoiseFit),
        (spoil_a_matrix, NoiseFit),
    ],
)
def test_a_spoilt_part_is_refused(path, tmp_path, spoil, kind):
    spoilt = tmp_path / "spoilt.h5"
    spoilt.write_bytes(path.read_bytes())
    with h5py.File(spoilt, "a") as file:
        spoil(file["noise"])
    words = r"spoilt\.h5: part 'noise' cannot be read .*; remove the file and run"
    with pytest.raises(DataError, match=words):
        read_one(spoilt, "test", "noise", kind)
    # The others are as they were.
    assert read_one(spoilt, "test", "bare", ReducedModel).name == "bare"


# --- Text -------------------------------------------------------------------


def test_what_json_does_not_know_becomes_null(tmp_path):
    path = tmp_path / "a.json"
    content = {
        "value": [1.5, math.inf, -math.inf, math.nan, np.float64("inf")],
        "inner": {"error": math.inf, "text": "inf", "count": 3, "none": None},
        "pair": (1, math.nan),
    }
    write_json(path, "a stamp", content)
    # As a strict reader has it: no Infinity, no NaN.
    found = json.loads(path.read_text(), parse_constant=pytest.fail)
    assert found == {
        "fingerprint": "a stamp",
        "value": [1.5, None, None, None, None],
        "inner": {"error": None, "text": "inf", "count": 3, "none": None},
        "pair": [1, None],
    }
    assert read_json(path) == found
    assert path.read_text().endswith("\n")


def test_json_numbers_read_back_to_the_bit(tmp_path):
    values = np.random.default_rng(1).standard_normal(100) * 1e-7
    write_json(tmp_path / "a.json", "", {"values": plain(values)})
    assert read_json(tmp_path / "a.json")["values"] == values.tolist()


def test_plain_takes_dataclasses_and_arrays_apart():
    finding = Finding(
        name="n",
        assumption="a",
        closures=("x", "y"),
        votes=True,
        statistic="s",
        value=np.float64(1.5),
        error=math.inf,
        quantile=1.96,
        threshold=3.0,
        sense="at most",
        where="m",
        verdict="holds",
        meaning="",
        remedy="",
        more=1.0,
        settle="",
        details={"value": np.arange(2), "flag": np.array([True])},
    )
    found = plain([finding])[0]
    assert found["closures"] == ["x", "y"]
    assert found["details"] == {"value": [0, 1], "flag": [True]}
    assert type(found["value"]) is float
    assert type(found["details"]["flag"][0]) is bool
    assert plain(None) is None


@pytest.mark.parametrize("text", ["", "{", "[1, 2]", "3", "\x00", '{"a": }'])
def test_what_is_no_json_of_ours_is_refused(tmp_path, text):
    path = tmp_path / "a.json"
    path.write_text(text)
    with pytest.raises(DataError, match=r"cannot be read .*; remove it and run"):
        read_json(path)
    assert read_fingerprint(path) == ""


def test_files_that_are_not_there_have_no_fingerprint(tmp_path):
    for name in ("a.h5", "a.json", "a.html"):
        assert read_fingerprint(tmp_path / name) == ""
    with pytest.raises(DataError, match="No such file"):
        read_json(tmp_path / "a.json")


def test_every_file_carries_its_fingerprint(path, tmp_path):
    assert read_fingerprint(path) == "a stamp"
    write_json(tmp_path / "a.json", "another", {})
    assert read_fingerprint(tmp_path / "a.json") == "another"
    html = page(title="t", stamp="third", generator="g", body="")
    (tmp_path / "a.html").write_text(html)
    assert read_fingerprint(tmp_path / "a.html") == "third"
    (tmp_path / "a.html").write_text("<html></html>")
    assert read_fingerprint(tmp_path / "a.html") == ""
    (tmp_path / "a.html").write_bytes(b"\xff\xfe\xff")
    assert read_fingerprint(tmp_path / "a.html") == ""
    for name in ("a.h5", "a.json"):
        (tmp_path / name).write_bytes(b"\xff\xfe\xff")
        assert read_fingerprint(tmp_path / name) == ""


def test_a_json_file_is_replaced_whole(tmp_path):
    path = tmp_path / "a.json"
    write_json(path, "old", {"x": 1})
    with pytest.raises(TypeError):
        write_json(path, "new", {"x": object()})
    assert read_json(path) == {"fingerprint": "old", "x": 1}
    assert [file.name for file in tmp_path.iterdir()] == ["a.json"]
    (tmp_path / "file").write_text("")
    with pytest.raises(RunFolderError, match="cannot be written"):
        write_json(tmp_path / "file" / "a.json", "", {})


def test_units_follow_the_inner_product(tmp_path, parts):
    # In the product of l2 coordinates are streamfunctions, in that of enstrophy
    # vorticities; a user's own model may have no unit at all.
    for unit, expected in {
        "m2 s-1": {"x": "m2 s-1", "tendency": "m2 s-2"},
        "s-1": {"x": "s-1", "tendency": "s-2"},
        "1": {"x": "1", "tendency": "s-1"},
    }.items():
        path = tmp_path / "split.h5"
        write_all(path, "stamp", "Title", "split", {"split": parts["split"]}, unit)
        with h5py.File(path) as file:
            for field, found in expected.items():
                assert file["split"][field].attrs["units"] == found
            variance = file["split/resolved/variance"].attrs["units"]
            assert variance == composed(unit, 2, 0)
