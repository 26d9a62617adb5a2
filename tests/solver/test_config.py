"""The config reader: every error is told, every good config is read as meant."""

from __future__ import annotations

import json
import math
import pickle
import re
import tomllib
from dataclasses import dataclass, fields

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from eddyshed.solver.config import (
    as_table,
    differing_keys,
    fingerprint,
    parse_config,
    read_config,
    reference,
    setting,
)
from eddyshed.solver.errors import ConfigError

section = dataclass(frozen=True, slots=True, kw_only=True)


@section
class Grid:
    points: tuple[int, int] = setting(minimum=8, maximum=512, doc="grid points")
    lengths: tuple[float, float] = setting(unit="m", above=0, doc="size of the box")

    def problems(self):
        if self.points[0] % 2:
            yield f"points = {list(self.points)} must be even"


@section
class Flat:
    drag: float = setting(unit="s-1", default=0, minimum=0, doc="linear drag")
    radius: float = setting(
        unit="m", default=math.inf, above=0, infinite=True, doc="radius of deformation"
    )
    viscosity: float = setting(unit="m2 s-1", default=0.0, doc="lateral viscosity")


@section
class Layered:
    layers: int = setting(minimum=2, doc="number of layers")


@section
class Wave:
    waves: tuple[int, int] = setting(doc="waves per box")
    phase: float = setting(default=0.0, below=6.3, doc="phase in radians")


@section
class Fine:
    every: float = setting(unit="s", above=0, doc="interval")


@section
class Output:
    every: float | None = setting(unit="s", default=None, above=0, doc="interval")
    fine: Fine | None = setting(default=None, doc="a finer stream")
    use: tuple[str, ...] = setting(default=("a",), choices=("a", "bee"), doc="names")
    pairs: tuple[tuple[int, int], ...] = setting(default=(), doc="pairs")
    depths: tuple[float, ...] = setting(
        unit="m", default=(100.0,), length=(1, 3), doc="depths"
    )
    quick: bool = setting(default=False, doc="whether to hurry")


@section
class Study:
    name: str = setting(doc="name of the study")
    grid: Grid = setting(doc="the box")
    ocean: Flat | Layered = setting(
        kinds={"flat": Flat, "layered": Layered}, default=Flat, doc="the flow"
    )
    forcing: dict[str, Wave] = setting(default={}, kinds={"wave": Wave}, doc="sources")
    plain: dict[str, Fine] = setting(default=dict, doc="streams by name")
    output: Output = setting(default=Output, doc="what is written")


GOOD = """
name = "demo"
[grid]
points = [64, 32]
lengths = ["2000 km", "1e6 m"]
[ocean]
kind = "flat"
drag = "0.02 1/d"
[forcing.trade_wind]
kind = "wave"
waves = [0, 1]
"""


def problems_of(text, *overrides):
    with pytest.raises(ConfigError) as caught:
        parse_config(text, Study, "demo.toml", overrides)
    source, problems = caught.value.args
    assert source == "demo.toml"
    assert all(len(problem.splitlines()) == 1 for problem in problems)
    return problems


def test_values_are_in_si_and_defaults_filled():
    document = parse_config(GOOD, Study, "demo.toml")
    config = document.config
    assert (document.source, document.text) == ("demo.toml", GOOD)
    assert config.grid == Grid(points=(64, 32), lengths=(2e6, 1e6))
    # A day has 86400 s (SI Brochure, 9th edition, table 8). Two roundings here, one
    # in the reader: less than two units in the last place apart.
    assert config.ocean.drag == pytest.approx(0.02 / 86400, rel=2**-51)
    assert config.ocean.radius == math.inf
    assert config.forcing == {"trade_wind": Wave(waves=(0, 1), phase=0.0)}
    assert config.output == Output()
    assert pickle.loads(pickle.dumps(document)) == document


def test_table_is_json_with_kinds_and_without_absent_keys():
    table = as_table(parse_config(GOOD, Study, "demo.toml").config)
    assert json.loads(json.dumps(table, allow_nan=False)) == table
    assert table["ocean"]["kind"] == "flat"
    assert table["ocean"]["radius"] == "inf"
    assert table["forcing"]["trade_wind"]["kind"] == "wave"
    assert table["grid"]["points"] == [64, 32]
    assert table["output"].keys() == {"use", "pairs", "depths", "quick"}


def test_defaults_are_not_shared():
    text = GOOD.partition("[forcing")[0]
    first, second = (parse_config(text, Study, "").config for _ in range(2))
    first.plain["x"] = Fine(every=1.0)
    first.forcing["x"] = Wave(waves=(1, 0))
    assert second.plain == second.forcing == {}


# An override of the good config, and below it, indented, the one problem it makes.
PROBLEMS = r"""
name = 3
    name: 3 is not text; write e.g. "text"
grid.points = 64
    [grid] points: 64 is no list; a list of 2 is expected, e.g. [8, 8]
grid.points = [8]
    [grid] points: [8] has 1 element; a list of 2 is expected, e.g. [8, 8]
grid.points = [8, 4]
    [grid] points, element 2: 4 is not allowed; must be at least 8 and at most 512;
    e.g. 8
grid.points = [8, 8.0]
    [grid] points, element 2: 8.0 is not a whole number; write e.g. 8
grid.points = [true, 8]
    [grid] points, element 1: true is not a whole number; write e.g. 8
grid.points = [8, 9223372036854775808]
    [grid] points, element 2: an integer beyond 64 bits, which TOML does not allow;
    give a smaller one
grid.points = [9, 8]
    [grid] points = [9, 8] must be even
grid.lengths = ["6 h", "1 km"]
    [grid] lengths, element 1: "6 h" is a time, but a length is expected, e.g.
    "20 km"
grid.lengths = ["1 km", 2000]
    [grid] lengths, element 2: 2000 has no unit; a length with its unit is expected,
    e.g. "20 km"
grid.lengths = ["1 km", 0]
    [grid] lengths, element 2: 0 is not allowed; must be above 0; e.g. "20 km"
ocean.drag = -1 1/d
    [ocean] drag: "-1 1/d" is not allowed; must be at least 0; e.g. "0.01 1/d"
ocean.drag = nan
    [ocean] drag: nan is not a finite number; write e.g. "0.01 1/d"
ocean.drag = inf
    [ocean] drag: inf is not a finite number; write e.g. "0.01 1/d"
ocean.drag = true
    [ocean] drag: true is not a number; write e.g. "0.01 1/d"
ocean.radius = nan
    [ocean] radius: nan is not a finite number; write e.g. "20 km"
ocean.radius = -inf
    [ocean] radius: -inf is not allowed; must be above 0; e.g. "20 km"
ocean.viscocity = 1 m2/s
    unknown key "viscocity" in [ocean]; did you mean "viscosity"?
ocean.xyz = 1
    unknown key "xyz" in [ocean]; known: drag, radius, viscosity, kind
grid.drag = 1
    unknown key "drag" in [grid]; "drag" belongs to [ocean] kind = "flat"
ocean.layers = 2
    unknown key "layers" in [ocean]; "layers" belongs to [ocean] kind = "layered"
every = 1 h
    unknown key "every" at the top level; "every" belongs to [plain.NAME] and
    [output] and [output.fine]
grids.x = 1
    unknown section "grids" at the top level; did you mean "grid"?
grid.kind = flat
    unknown key "kind" in [grid]; known: points, lengths
ocean.kind = flap
    [ocean] kind = "flap" is unknown; did you mean "flat"? (known: "flat",
    "layered")
ocean.kind = 3
    [ocean] kind = 3 is unknown; known: "flat", "layered"
ocean = {}
    [ocean] kind is missing; give kind = "flat" (known: "flat", "layered")
ocean = {kind = "layered"}
    [ocean] layers is missing: number of layers; e.g. layers = 2
ocean = 3
    ocean: 3 is no table; write its keys under [ocean]
forcing = [1]
    forcing: [1] is no table; write its keys under [forcing.NAME]
forcing.x = 1
    [forcing] x: 1 is no table; write its keys under [forcing.NAME]
forcing.'a b'.kind = x
    [forcing."a b"] kind = "x" is unknown; known: "wave"
forcing.trade_wind.phase = 6.3
    [forcing.trade_wind] phase: 6.3 is not allowed; must be below 6.3; e.g. 1.0
forcing.trade_wind.phase = "1"
    [forcing.trade_wind] phase: "1" is not a number; write e.g. 1.0
output.fine = {}
    [output.fine] every is missing: interval; e.g. every = "6 h"
output.use = 3
    [output] use: 3 is no list; a list is expected, e.g. ["a"]
output.use = ["be"]
    [output] use, element 1: "be" is not allowed; must be one of "a", "bee"; did you
    mean "bee"?
output.pairs = [[1, 2], [3]]
    [output] pairs, element 2: [3] has 1 element; a list of 2 is expected,
    e.g. [1, 1]
output.pairs = [[1, 2.5]]
    [output] pairs, element 1, element 2: 2.5 is not a whole number; write e.g. 1
output.depths = []
    [output] depths: [] has 0 elements; a list of 1 to 3 is expected, e.g. ["20 km"]
output.quick = 1
    [output] quick: 1 is not true or false; write e.g. true
output.every = 1979-05-27
    [output] every: 1979-05-27 is not a number; write e.g. "6 h"
grid.points.x = 3
    override "grid.points.x = 3": grid.points is [64, 32], no table; it has no keys
    of its own
grid.points
    override "grid.points" is no assignment; write section.key=value, such as
    time.step=900 s
=3
    override "=3" is no assignment; write section.key=value, such as time.step=900 s
"""


@pytest.mark.parametrize("case", re.split(r"\n(?=\S)", PROBLEMS.strip()))
def test_each_problem_is_told(case):
    override, *problem = case.splitlines()
    assert problems_of(GOOD, override) == (" ".join(map(str.strip, problem)),)


def test_missing_keys_and_sections_are_told_with_an_example():
    assert problems_of("[grid]\npoints = [8, 8]\n") == (
        'name is missing: name of the study; e.g. name = "text"',
        '[grid] lengths is missing: size of the box; e.g. lengths = ["20 km", "20 km"]',
    )
    assert problems_of('name = "x"') == (
        "[grid] is missing: the box; write a table [grid] with points, lengths",
    )


def test_all_problems_come_at_once_and_survive_pickling():
    with pytest.raises(ConfigError) as caught:
        parse_config(GOOD, Study, "x.toml", ["name=1", "ocean.drag=1 m", "grid.x=1"])
    error = caught.value
    assert len(error.args[1]) == 3
    assert str(error).startswith("x.toml: 3 problems\n  - ")
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is ConfigError
    assert again.args == error.args
    assert str(again) == str(error)


def test_cross_field_rules_wait_for_their_table():
    # With a bad key in the table there is nothing to apply them to.
    (problem,) = problems_of(GOOD, "grid.points=[9, 8]", "grid.extra=1")
    assert "extra" in problem


@pytest.mark.parametrize(
    ("override", "path", "value"),
    [
        ("ocean.drag=0.02 1/d", ("ocean", "drag"), 0.02 / 86400),
        ('ocean.drag="0.02 1/d"', ("ocean", "drag"), 0.02 / 86400),
        ("ocean.drag = 0", ("ocean", "drag"), 0.0),
        ("grid.points = [8, 512]", ("grid", "points"), [8, 512]),
        ("ocean.radius=inf", ("ocean", "radius"), "inf"),
        ('ocean.radius="inf"', ("ocean", "radius"), "inf"),
        ("ocean.radius=50 km", ("ocean", "radius"), 5e4),
        ("name=demo two", ("name",), "demo two"),
        ("grid.points=[16, 16]", ("grid", "points"), [16, 16]),
        ("output.use=[]", ("output", "use"), []),
        ("output.fine.every=6 h", ("output", "fine", "every"), 21600.0),
        ("plain.'a b'.every=6 h", ("plain", "a b", "every"), 21600.0),
        ("forcing.trade_wind.phase=1", ("forcing", "trade_wind", "phase"), 1.0),
        ("name=a=b", ("name",), "a=b"),
    ],
)
def test_override_replaces_or_adds(override, path, value):
    table = as_table(parse_config(GOOD, Study, "demo.toml", [override]).config)
    for name in path:
        table = table[name]
    # Exact but for the quotient by 86400: two roundings here, one in the reader.
    close = pytest.approx(value, rel=2**-51) if isinstance(value, float) else value
    assert table == close


def test_override_cannot_smuggle_a_second_key():
    (problem,) = problems_of(GOOD, "ocean.drag=0\nviscosity=1")
    assert problem.startswith('[ocean] drag: "0\\nviscosity=1"')


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("a = 1\nb = 2 m\nc = 3", ["at line 2", '"b = 2 m"', "stand in quotes"]),
        ("[a]\n[a]\nb = 1", ["at line 2", "a table stands there twice"]),
        ("a = " + "[" * 4000, ["a nesting of brackets has no end"]),
        ("a = " + "9" * 5000, ["a number or a nesting"]),
    ],
)
def test_bad_toml_is_told_with_its_line(text, parts):
    (problem,) = problems_of(text)
    assert problem.startswith("is not valid TOML: ")
    assert all(part in problem for part in parts)


def test_unreadable_files_are_told(tmp_path):
    latin = tmp_path / "latin.toml"
    latin.write_bytes(b"a = 1\nname = '\xe9'\n")
    cases = {
        tmp_path / "none.toml": "cannot be read: No such file or directory",
        tmp_path: "cannot be read: Is a directory",
        latin: "is not UTF-8 text (line 2)",
        "nul\0.toml": "cannot be the name of a file",
    }
    for path, text in cases.items():
        with pytest.raises(ConfigError) as caught:
            read_config(path, Study)
        assert str(caught.value).startswith(f"{path}: {text}")


def test_file_is_read_verbatim(tmp_path):
    path = tmp_path / "demo.toml"
    text = GOOD.replace("\n", "\r\n")
    path.write_bytes(text.encode())
    document = read_config(path, Study, ["name=other"])
    assert (document.source, document.text) == (str(path), text)
    assert document.config.name == "other"
    # Some editors put a byte-order mark first; it is no part of the text.
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())
    assert read_config(path, Study).text == text


def test_fingerprint_is_that_of_canonical_json():
    # printf '{"a":[1,2.5],"b":"inf"}' | sha256sum (GNU coreutils)
    assert fingerprint({"b": "inf", "a": [1, 2.5]}) == "454ec8dec8444581"


def test_fingerprint_depends_on_the_values_not_on_their_spelling():
    def of(*overrides):
        return fingerprint(as_table(parse_config(GOOD, Study, "", overrides).config))

    assert of() == of("grid.lengths=['2e6 m', '1000 km']", "ocean.radius=inf")
    # The default of drag was written as the integer 0.
    assert of("ocean={kind='flat'}") == of("ocean={kind='flat', drag=0.0}")
    assert of("ocean.viscosity=-0 m2/s") == of()
    assert of() != of("ocean.drag=0.03 1/d")


def test_differing_keys_name_both_values():
    old = {"ocean": {"kind": "flat", "drag": 1e-7}, "forcing": {}, "same": 1, "z": {}}
    new = {
        "ocean": {"kind": "flat", "drag": 2e-7, "x": [1]},
        "forcing": {"w": {"n": 1}},
        "same": 1.0,
    }
    assert differing_keys(old, new) == [
        "ocean.drag: was 1e-07, now 2e-07",
        "ocean.x: was absent, now [1]",
        "forcing.w.n: was absent, now 1",
        "z: was {}, now absent",
    ]
    assert differing_keys(new, new) == []


def test_reference_tells_every_key():
    text = reference(Study)
    assert max(map(len, text.splitlines())) <= 88
    for line in (
        "  name: text; required",
        "[grid]: the box",
        "  points: list of 2, each a whole number, at least 8 and at most 512; "
        "required",
        '  lengths: list of 2, each a length, e.g. "20 km", above 0; required',
        '[ocean] kind = "flat": the flow (default)',
        '  drag: a rate (s-1), e.g. "0.01 1/d", at least 0; default 0',
        '  radius: a length, e.g. "20 km", or "inf", above 0; default "inf"',
        "      lateral viscosity",
        '[ocean] kind = "layered": the flow (optional)',
        '[forcing.NAME] kind = "wave": sources (optional)',
        "[output.fine]: a finer stream (optional)",
        '  every: a time, e.g. "6 h", above 0; optional',
        '  use: list, each one of "a", "bee"; default ["a"]',
        '  depths: list of 1 to 3, each a length, e.g. "20 km"; default ["100 m"]',
        "  quick: true or false; default false",
    ):
        assert line in text.splitlines()


@pytest.mark.parametrize(
    ("annotation", "options", "message"),
    [
        ("list[int]", {}, "is not supported"),
        ("int | str", {}, "is not supported"),
        ("dict[str, int]", {}, "is not supported"),
        ("int", {"unit": "m"}, "only floats have a unit"),
        ("str", {"minimum": 1}, "only numbers have bounds"),
        ("float", {"unit": "m", "choices": (1.0,)}, "neither quantities nor"),
        ("tuple[int, int]", {"length": 3}, "has a length"),
        ("float", {"minimum": 1, "default": 0.5}, "the default 0.5 is not at least 1"),
        ("float", {"default": math.inf}, "the default inf is not finite"),
    ],
)
def test_rules_that_do_not_fit_are_refused(annotation, options, message):
    key = setting(doc="", **options)
    made = type("Made", (), {"__annotations__": {"key": annotation}, "key": key})
    with pytest.raises(TypeError, match=message):
        reference(section(made))


def test_kinds_must_be_told_apart():
    with pytest.raises(TypeError, match="a class of its own"):
        setting(doc="", kinds={"a": Fine, "b": Fine})


def toml(value):
    """TOML of a tree, all strings in Unicode escapes (TOML 1.0.0, "String")."""
    if isinstance(value, str):
        return '"' + "".join(f"\\U{ord(letter):08X}" for letter in value) + '"'
    if isinstance(value, dict):
        items = (f"{toml(key)} = {toml(item)}" for key, item in value.items())
        return "{" + ", ".join(items) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    return str(value).lower() if isinstance(value, bool) else repr(value)


texts = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
finite = st.floats(allow_nan=False, allow_infinity=False)
positive = st.floats(min_value=1e-300, max_value=1e300)
tables = (Study, Grid, Flat, Layered, Wave, Output)
known_keys = st.sampled_from(
    ["kind", *(item.name for table in tables for item in fields(table))]
)
known_values = st.sampled_from(["flat", "layered", "wave", "6 h", "20 km", "inf", "a"])
anything = st.recursive(
    st.integers() | st.floats() | st.booleans() | texts | known_values,
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(known_keys | texts, inner, max_size=5)
    ),
    max_leaves=12,
)


def is_read(text, *overrides):
    """Whether a text is a good config; if not, it must be told as it should."""
    try:
        config = parse_config(text, Study, "demo.toml", overrides).config
    except ConfigError:
        return not problems_of(text, *overrides)
    json.dumps(as_table(config), allow_nan=False)
    return True


@given(tree=st.dictionaries(known_keys | texts, anything, max_size=6))
def test_random_tables_meet_no_other_error(tree):
    text = "\n".join(f"{toml(key)} = {toml(value)}" for key, value in tree.items())
    tomllib.loads(text)  # else the syntax would hide what is tested
    assert tree.keys() >= {"name", "grid"} or not is_read(text)


@given(key=known_keys, inner=known_keys, value=anything)
def test_random_overrides_meet_no_other_error(key, inner, value):
    sections = {"grid", "ocean", "forcing", "plain", "output"}
    assert key in sections or not is_read(GOOD, f"{key}.{inner}={toml(value)}")
    is_read(GOOD, f"{key}={toml(value)}")


@given(text=st.text())
def test_random_text_is_no_config(text):
    assert not is_read(text)
    assert is_read(GOOD, f"name={text}") or text.strip()


wave = st.fixed_dictionaries(
    {"waves": st.lists(st.integers(-99, 99), min_size=2, max_size=2)},
    optional={"phase": st.floats(-1e9, 6.2)},
)
fine = st.fixed_dictionaries({"every": positive})
pair = st.lists(st.integers(-(2**63) + 1, 2**63 - 1), min_size=2, max_size=2)
even = st.integers(4, 256).map(lambda half: 2 * half)
studies = st.fixed_dictionaries(
    {
        "name": texts,
        "grid": st.fixed_dictionaries(
            {
                "points": st.lists(even, min_size=2, max_size=2),
                "lengths": st.lists(positive, min_size=2, max_size=2),
            }
        ),
        "forcing": st.dictionaries(texts, wave, max_size=3),
        "plain": st.dictionaries(texts, fine, max_size=2),
    },
    optional={
        "ocean": st.fixed_dictionaries(
            {"kind": st.just("flat"), "drag": positive, "viscosity": finite}
        )
        | st.fixed_dictionaries(
            {"kind": st.just("layered"), "layers": st.integers(2, 2**63 - 1)}
        ),
        "output": st.fixed_dictionaries(
            {
                "pairs": st.lists(pair, max_size=3),
                "depths": st.lists(finite, min_size=1, max_size=3),
                "use": st.lists(st.sampled_from(["a", "bee"]), max_size=3),
                "quick": st.booleans(),
            },
            optional={"every": positive, "fine": fine},
        ),
    },
)

UNITS_OF = {
    "lengths": "m",
    "depths": "m",
    "every": "s",
    "drag": "s-1",
    "viscosity": "m2 s-1",
}


def with_units(tree, name=""):
    """The tree with each SI number of a key that has a unit written as text."""
    if isinstance(tree, dict):
        return {key: with_units(item, key) for key, item in tree.items()}
    if isinstance(tree, list):
        return [with_units(item, name) for item in tree]
    return f"{tree!r} {UNITS_OF[name]}" if name in UNITS_OF else tree


@settings(deadline=None)  # building a tree takes longer than reading it
@given(tree=studies)
def test_random_config_comes_back(tree):
    forcing = {name: {"kind": "wave", **one} for name, one in tree["forcing"].items()}
    written = with_units({**tree, "forcing": forcing})
    text = "\n".join(f"{key} = {toml(value)}" for key, value in written.items())
    table = as_table(parse_config(text, Study, "demo.toml").config)
    flat = {"kind": "flat", "drag": 0.0, "viscosity": 0.0, "radius": "inf"}
    if tree.get("ocean", flat)["kind"] == "flat":
        ocean = {**flat, **tree.get("ocean", {})}
    else:
        ocean = tree["ocean"]
    output = {"use": ["a"], "pairs": [], "depths": [100.0], "quick": False}
    assert table == {
        **tree,
        "forcing": {name: {"phase": 0.0, **one} for name, one in forcing.items()},
        "ocean": ocean,
        "output": {**output, **tree.get("output", {})},
    }
