"""What the sections of a config may hold, and the words for it.

A section is a frozen dataclass whose fields are made by :func:`setting`. The
annotation of a field gives its type, the metadata its unit, bounds and meaning.
The same metadata check a config, word its errors and print the reference, so
the three cannot disagree.
"""

from __future__ import annotations

import copy
import math
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import MISSING, dataclass, field, fields, is_dataclass
from functools import cache
from types import NoneType, UnionType
from typing import Any, Union, get_args, get_origin, get_type_hints

from .hooks import FORM, is_hook
from .quantities import example_quantity, format_quantity, parse_quantity, quoted

Names = tuple[str, ...]

LARGEST = 2**63  # integers are below it: TOML 1.0.0, "Integer", has 64 bits
WORDS = {
    int: "a whole number",
    float: "a number",
    str: "text",
    bool: "true or false",
    dict: "a table",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Rules:
    """What :func:`setting` was told about a key; see there."""

    doc: str
    unit: str | None
    minimum: float | None
    maximum: float | None
    above: float | None
    below: float | None
    choices: tuple[Any, ...] | None
    length: tuple[int, int | None]
    kinds: Mapping[str, type] | None
    infinite: bool
    hooks: bool


def setting(
    *,
    doc: str,
    unit: str | None = None,
    default: Any = MISSING,
    minimum: float | None = None,
    maximum: float | None = None,
    above: float | None = None,
    below: float | None = None,
    choices: Sequence[Any] | None = None,
    length: int | tuple[int, int | None] = (0, None),
    kinds: Mapping[str, type] | None = None,
    infinite: bool = False,
    hooks: bool = False,
) -> Any:
    """Field of a section; the name of the field is the key in TOML.

    Parameters
    ----------
    doc : str
        What the key means.
    unit : str, optional
        SI unit of a float (or of floats in a tuple): the config must then give
        a text with a unit, or a plain 0.
    default : optional
        Value, in SI, of an absent key; a class or function is called for it, a
        dict is copied. Without it the key is required.
    minimum, maximum, above, below : float, optional
        Bounds in SI, the last two strict; they hold for each element of a tuple.
    choices : sequence, optional
        The allowed values (of each element).
    length : int or (int, int or None), optional
        Number of elements of a ``tuple[T, ...]``, or the least and the greatest.
    kinds : mapping of str to type, optional
        Sections that the key ``kind`` of the table chooses from.
    infinite : bool
        Whether a float may be infinite, written ``"inf"`` or ``inf``.
    hooks : bool
        Whether a user's own code, ``"package.module:Name"``, may stand in the place
        of a kind or of a choice.

    Returns
    -------
    dataclasses.Field
        Field specifier for a frozen, keyword-only dataclass.
    """
    if kinds is not None and len(set(kinds.values())) < len(kinds):
        message = "each kind must have a class of its own, to be told from the others"
        raise TypeError(message)
    rules = Rules(
        doc=doc,
        unit=unit,
        minimum=minimum,
        maximum=maximum,
        above=above,
        below=below,
        choices=None if choices is None else tuple(choices),
        length=(length, length) if isinstance(length, int) else length,
        kinds=kinds,
        infinite=infinite,
        hooks=hooks,
    )
    metadata = {"rules": rules}
    if default is MISSING:
        return field(metadata=metadata)
    if callable(default):
        return field(default_factory=default, metadata=metadata)
    if isinstance(default, dict):
        return field(default_factory=lambda: copy.deepcopy(default), metadata=metadata)
    return field(default=default, metadata=metadata)


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """A field of a section: its rules, and what its annotation says.

    Attributes
    ----------
    name : str
        The key.
    hint : type
        The annotation without None.
    rules : Rules
        The metadata.
    required : bool
        Whether there is no default.
    default : object
        The default, if there is one.
    named : bool
        Whether it is a table of tables, each under a name of its own.
    tables : dict of (str or None) to type
        Sections by kind (by None if there are no kinds); empty for a value.
    """

    name: str
    hint: Any
    rules: Rules
    required: bool
    default: Any
    named: bool
    tables: dict[str | None, type]


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """A table that a config can have.

    Attributes
    ----------
    path : tuple of str
        Its name; NAME stands for one that is free.
    kind : str or None
        Its kind, if it is one of several.
    table : type
        Its dataclass.
    about : str
        What it means, and whether it can be left out.
    """

    path: Names
    kind: str | None
    table: type
    about: str


@cache
def entries_of(section: type[Any]) -> dict[str, Entry]:
    """Fields of a section by name.

    Raises
    ------
    TypeError
        If a field is not made by :func:`setting`, or its annotation, its rules
        and its default do not go together.
    """
    hints = get_type_hints(section)
    entries = {}
    for item in fields(section):
        where, rules = f"{section.__name__}.{item.name}", item.metadata.get("rules")
        if not isinstance(rules, Rules):
            message = f"{where} is not made by setting()"
            raise TypeError(message)
        options = _options(hints[item.name])
        named = get_origin(options[0]) is dict
        if named:
            options = _options(get_args(options[0])[1])
        tables: dict[str | None, type] = {}
        if rules.kinds is not None:
            tables.update(rules.kinds)
        elif isinstance(options[0], type) and is_dataclass(options[0]):
            tables = {None: options[0]}
        default = item.default
        if item.default_factory is not MISSING:
            default = item.default_factory()
        if not tables and (len(options) > 1 or named):
            message = f"{where}: annotation {hints[item.name]} is not supported"
            raise TypeError(message)
        _check_rules(where, rules, None if tables else options[0], default)
        entries[item.name] = Entry(
            name=item.name,
            hint=options[0],
            rules=rules,
            required=default is MISSING,
            default=default,
            named=named,
            tables=tables,
        )
    return entries


def _check_rules(where: str, rules: Rules, hint: Any, default: Any) -> None:
    """Refuse rules that would be ignored, and a default that they forbid."""
    scalars = set() if hint is None else set(_scalars(hint))
    bounds = (rules.minimum, rules.maximum, rules.above, rules.below)
    problem = None
    if not scalars <= WORDS.keys():
        problem = f"annotation {hint} is not supported"
    elif (rules.unit is not None or rules.infinite) and scalars != {float}:
        problem = "only floats have a unit or can be infinite"
    elif bounds.count(None) < len(bounds) and not scalars & {int, float}:
        problem = "only numbers have bounds"
    elif rules.choices is not None and (rules.unit is not None or not scalars):
        problem = "neither quantities nor tables have choices"
    elif rules.length != (0, None) and get_args(hint)[-1:] != (Ellipsis,):
        problem = "only tuple[T, ...] has a length"
    elif scalars and default is not MISSING and default is not None:
        for value in _flat(default):
            infinite = isinstance(value, float) and not math.isfinite(value)
            if not is_allowed(value, rules) or (infinite and not rules.infinite):
                problem = f"the default {value} is not {allowed(rules) or 'finite'}"
    if problem:
        message = f"{where}: {problem}"
        raise TypeError(message)


def _scalars(hint: Any) -> Iterator[Any]:
    """Innermost hints of a tuple, or the hint itself."""
    if get_origin(hint) is not tuple:
        yield hint
    for item in get_args(hint):
        if item is not Ellipsis:
            yield from _scalars(item)


def _flat(value: Any) -> Iterator[Any]:
    """Innermost elements of nested tuples, or the value itself."""
    if not isinstance(value, tuple):
        yield value
        return
    for item in value:
        yield from _flat(item)


def _options(hint: Any) -> list[Any]:
    """Members of a union other than None; of no union, the hint itself."""
    if get_origin(hint) not in (Union, UnionType):
        return [hint]
    return [option for option in get_args(hint) if option is not NoneType]


def sections_of(
    table: type, path: Names = (), kind: str | None = None, about: str = ""
) -> Iterator[Section]:
    """All tables that a config can have, the whole first; NAME is a free name."""
    yield Section(path=path, kind=kind, table=table, about=about)
    for name, entry in entries_of(table).items():
        inner = (*path, name, "NAME") if entry.named else (*path, name)
        need = "" if entry.required else " (optional)"
        for each, section in entry.tables.items():
            chosen = not entry.named and type(entry.default) is section
            mark = " (default)" if each is not None and chosen else need
            yield from sections_of(section, inner, each, entry.rules.doc + mark)


def label(path: Names, key: str = "") -> str:
    """Where a key or a table stands, such as ``[output.resolved] every``."""
    names = [_bare(name) for name in path]
    table = f"[{'.'.join(names)}] " if names else ""
    return (table + (_bare(key) if key else "")).strip()


def _bare(name: str) -> str:
    """A key as TOML writes it."""
    return name if re.fullmatch("[A-Za-z0-9_-]+", name) else quoted(name)


def element_hints(hint: Any, count: int) -> tuple[Any, ...]:
    """Hints of the elements of a tuple of a given length."""
    arguments = get_args(hint)
    return (arguments[0],) * count if arguments[-1] is Ellipsis else arguments


def sizes(hint: Any, rules: Rules) -> tuple[int, int | None]:
    """Least and greatest number of elements of a tuple."""
    arguments = get_args(hint)
    return rules.length if arguments[-1] is Ellipsis else (len(arguments),) * 2


def list_words(hint: Any, rules: Rules) -> str:
    """A list of the right size, in words."""
    least, most = sizes(hint, rules)
    if most is None:
        return f"list of {least} or more" if least else "list"
    return f"list of {least}" if least == most else f"list of {least} to {most}"


def shown(value: Any, depth: int = 2) -> str:
    """A value of a TOML file as it would be written there, on one line, cut."""
    if isinstance(value, str):
        return quoted(value)
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        if depth == 0:
            return "[...]"
        items = [shown(item, depth - 1) for item in value[:8]]
        return f"[{', '.join(items + ['...'] * (len(value) > 8))}]"
    if isinstance(value, int) and abs(value) >= LARGEST:
        return "an integer beyond 64 bits"
    return str(value)


def allowed(rules: Rules) -> str:
    """The range or the choices of a key; empty if there are none."""
    if rules.choices is not None:
        many = "one of " if len(rules.choices) > 1 else ""
        text = many + ", ".join(shown(choice) for choice in rules.choices)
        return f"{text}, or your own {FORM}" if rules.hooks else text
    bounds = {
        "at least": rules.minimum,
        "above": rules.above,
        "at most": rules.maximum,
        "below": rules.below,
    }
    texts = []
    for word, bound in bounds.items():
        if bound is not None:
            plain = rules.unit is None or bound == 0
            text = bound if plain else format_quantity(bound, str(rules.unit))
            texts.append(f"{word} {text}")
    return " and ".join(texts)


def is_allowed(value: Any, rules: Rules) -> bool:
    """Whether a value is in the range, or among the choices, of a key."""
    return (
        (
            rules.choices is None
            or value in rules.choices
            or (rules.hooks and is_hook(value))
        )
        and (rules.minimum is None or value >= rules.minimum)
        and (rules.above is None or value > rules.above)
        and (rules.maximum is None or value <= rules.maximum)
        and (rules.below is None or value < rules.below)
    )


def example(hint: Any, rules: Rules) -> str:
    """A value that a key takes, as TOML."""
    if get_origin(hint) is tuple:
        items = element_hints(hint, max(1, rules.length[0]))
        return f"[{', '.join(example(item, rules) for item in items)}]"
    if rules.choices is not None:
        return shown(rules.choices[0])
    if hint is str:
        return '"text"'
    if hint is bool:
        return "true"
    if hint is dict:
        return "{ name = 1.0 }"
    if rules.unit is not None:
        everyday = example_quantity(rules.unit)
        if is_allowed(parse_quantity(everyday, rules.unit), rules):
            return f'"{everyday}"'
    bounds = [rules.minimum, rules.above, rules.maximum, rules.below]
    given = [bound for bound in bounds if bound is not None]
    middle = sum(given) / max(1, len(given))
    tries = [1, *given, middle, *(b + 1 for b in given), *(b - 1 for b in given)]
    kept = [x for x in tries if is_allowed(x, rules) and (hint is float or x % 1 == 0)]
    value = hint(kept[0]) if kept else given[0]
    return shown(value) if rules.unit is None else f'"{value} {rules.unit}"'
