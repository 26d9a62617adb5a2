"""Strict reading of configs: TOML to frozen dataclasses, all problems told at once."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Generic, TypeVar, get_origin

from .errors import ConfigError
from .hooks import FORM, read_hook
from .quantities import dimension_name, nearest, parse_quantity, quoted
from .resolved import as_table, differing_keys, fingerprint, reference
from .schema import (
    LARGEST,
    WORDS,
    Entry,
    Names,
    Rules,
    allowed,
    element_hints,
    entries_of,
    example,
    is_allowed,
    label,
    list_words,
    sections_of,
    setting,
    shown,
    sizes,
)

__all__ = [
    "Document",
    "as_table",
    "differing_keys",
    "fingerprint",
    "parse_config",
    "read_config",
    "reference",
    "setting",
]

Root = TypeVar("Root")


@dataclass(frozen=True, slots=True, kw_only=True)
class Document(Generic[Root]):
    """A config as it was read.

    Attributes
    ----------
    source : str
        Where it came from.
    text : str
        The TOML text, verbatim: without the overrides.
    config : Root
        The values, overrides included.
    """

    source: str
    text: str
    config: Root


def read_config(
    path: str | Path, root: type[Root], overrides: Sequence[str] = ()
) -> Document[Root]:
    """Read a config from a file.

    Parameters
    ----------
    path : path
        A TOML file in UTF-8.
    root : type
        Dataclass of the whole config.
    overrides : sequence of str
        As for :func:`parse_config`.

    Returns
    -------
    Document
        The config.

    Raises
    ------
    ConfigError
        If the file cannot be read; or as :func:`parse_config`.
    """
    source = str(path)
    try:
        text = Path(path).read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        problem = f"is not UTF-8 text (line {line}); save it as UTF-8"
        raise ConfigError(source, (problem,)) from error
    except OSError as error:
        problem = f"cannot be read: {error.strerror}; give the path of a TOML file"
        raise ConfigError(source, (problem,)) from error
    except ValueError as error:
        problem = f"cannot be the name of a file ({error}); give that of a TOML file"
        raise ConfigError(source, (problem,)) from error
    return parse_config(text, root, source, overrides)


def parse_config(
    text: str, root: type[Root], source: str, overrides: Sequence[str] = ()
) -> Document[Root]:
    """Read a config from a text.

    Parameters
    ----------
    text : str
        TOML.
    root : type
        Dataclass of the whole config.
    source : str
        Where the text came from, for the errors.
    overrides : sequence of str
        Assignments ``section.key=value`` that replace or add keys. What is no
        TOML value is taken as text, so that quotes can be left out.

    Returns
    -------
    Document
        The config.

    Raises
    ------
    ConfigError
        With all problems that were found.
    """
    try:
        given = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        raise ConfigError(source, (_syntax_problem(text, error),)) from error
    reader = _Reader(root)
    for assignment in overrides:
        reader.override(given, assignment)
    config = reader.table(given, root, (), None)
    if reader.problems:
        raise ConfigError(source, tuple(reader.problems))
    return Document(source=source, text=text, config=config)


class _Reader:
    """Turns tables into sections and collects what is wrong with them."""

    def __init__(self, root: type):
        self.root = root
        self.problems: list[str] = []

    def table(self, given: Any, section: type, path: Names, kind: str | None) -> Any:
        """Read one section; None if there were problems."""
        before = len(self.problems)
        entries = entries_of(section)
        for key, value in given.items():
            if key not in entries:
                self.problems.append(self.unknown(key, value, section, path, kind))
        values = {}
        for name, entry in entries.items():
            if name in given:
                values[name] = self.entry(given[name], entry, path)
            elif entry.required:
                self.problems.append(_missing(entry, path))
        if len(self.problems) > before:
            return None
        built = section(**values)
        rules_across_keys = getattr(built, "problems", None)
        if callable(rules_across_keys):
            self.problems += [f"{label(path)} {p}".strip() for p in rules_across_keys()]
        return built

    def entry(self, given: Any, entry: Entry, path: Names) -> Any:
        """Read the value, the table or the named tables of one key."""
        if not entry.tables:
            where = label(path, entry.name)
            return self.value(given, entry.hint, entry.rules, where)
        inner = (*path, entry.name)
        if not entry.named:
            return self.chosen(given, entry, inner)
        if not isinstance(given, dict):
            self.problems.append(
                _no_table(given, label(path, entry.name), (*inner, "NAME"))
            )
            return None
        return {
            name: self.chosen(one, entry, (*inner, name)) for name, one in given.items()
        }

    def chosen(self, given: Any, entry: Entry, path: Names) -> Any:
        """Read a table whose section the key `kind` chooses, if it has kinds."""
        if not isinstance(given, dict):
            written = (*path[:-1], "NAME") if entry.named else path
            where = label(path[:-1], path[-1])
            self.problems.append(_no_table(given, where, written))
            return None
        if None in entry.tables:
            return self.table(given, entry.tables[None], path, None)
        kinds = [kind for kind in entry.tables if kind is not None]
        kind = given.get("kind")
        if entry.rules.hooks and isinstance(kind, str) and ":" in kind:
            hook, problems = read_hook(given, kind, label(path))
            self.problems += problems
            return hook
        if not isinstance(kind, str) or kind not in entry.tables:
            where = label(path, "kind")
            near = nearest(kind, kinds) if isinstance(kind, str) else None
            known = f"known: {', '.join(map(quoted, kinds))}"
            if entry.rules.hooks:
                known += f", or your own {FORM}"
            self.problems.append(
                f'{where} is missing; give kind = "{kinds[0]}" ({known})'
                if kind is None
                else f"{where} = {shown(kind)} is unknown; "
                + (f'did you mean "{near}"? ({known})' if near else known)
            )
            return None
        rest = {key: value for key, value in given.items() if key != "kind"}
        return self.table(rest, entry.tables[kind], path, kind)

    def value(self, given: Any, hint: Any, rules: Rules, where: str) -> Any:
        """Read a scalar, or a list element by element."""
        if get_origin(hint) is not tuple:
            value, problem = _scalar(given, hint, rules)
            if problem:
                self.problems.append(f"{where}: {problem}")
            return value
        least, most = sizes(hint, rules)
        count = len(given) if isinstance(given, list) else -1
        if count < least or (most is not None and count > most):
            found = f"has {count} element{'s' * (count != 1)}"
            if count < 0:
                found = "is no list"
            self.problems.append(
                f"{where}: {shown(given)} {found}; a {list_words(hint, rules)} is "
                f"expected, e.g. {example(hint, rules)}"
            )
            return None
        return tuple(
            self.value(item, each, rules, f"{where}, element {index}")
            for index, (item, each) in enumerate(
                zip(given, element_hints(hint, count), strict=True), start=1
            )
        )

    def unknown(
        self, key: str, value: Any, section: type, path: Names, kind: str | None
    ) -> str:
        """What to say of a key that a section does not have."""
        known = [*entries_of(section), *(["kind"] if kind is not None else [])]
        homes = [
            label(other.path) + (f' kind = "{other.kind}"' if other.kind else "")
            for other in sections_of(self.root)
            if key in entries_of(other.table)
        ]
        near = nearest(key, known)
        advice = []
        if near:
            advice.append(f'did you mean "{near}"?')
        if homes:
            places = " and ".join(
                dict.fromkeys(home or "the top level" for home in homes)
            )
            advice.append(f"{quoted(key)} belongs to {places}")
        if not advice:
            advice.append(f"known: {', '.join(known)}" if known else "it takes no keys")
        what = "section" if isinstance(value, dict) else "key"
        place = f"in {label(path)}" if path else "at the top level"
        return f"unknown {what} {quoted(key)} {place}; {'; '.join(advice)}"

    def override(self, given: dict[str, Any], assignment: str) -> None:
        """Put ``section.key=value`` into the tables read from the file."""
        name, equals, text = assignment.partition("=")
        names: list[str] = []
        try:
            # As TOML reads it, so that a name may be dotted and quoted.
            found: Any = tomllib.loads(f"{name} = 0") if equals else {}
        except (ValueError, RecursionError):
            found = {}
        while isinstance(found, dict) and len(found) == 1:
            (inner,) = found
            names.append(inner)
            found = found[inner]
        if not names:
            self.problems.append(
                f"override {quoted(assignment)} is no assignment; write "
                "section.key=value, such as time.step=900 s"
            )
            return
        for depth, inner in enumerate(names[:-1], start=1):
            given = given.setdefault(inner, {})
            if not isinstance(given, dict):
                self.problems.append(
                    f"override {quoted(assignment)}: {'.'.join(names[:depth])} is "
                    f"{shown(given)}, no table; it has no keys of its own"
                )
                return
        given[names[-1]] = _override_value(text.strip())


def _override_value(text: str) -> Any:
    """Value of an override: TOML if it is such, else text."""
    try:
        found = tomllib.loads(f"value = {text}")
    except (ValueError, RecursionError):
        return text
    return found["value"] if len(found) == 1 else text


def _scalar(given: Any, hint: Any, rules: Rules) -> tuple[Any, str | None]:
    """Value of a scalar key, and what is wrong with it if something is."""
    number = isinstance(given, int | float) and not isinstance(given, bool)
    value: Any = given
    if isinstance(given, int) and number and abs(given) >= LARGEST:
        return None, f"{shown(given)}, which TOML does not allow; give a smaller one"
    if hint is float and rules.infinite and given in ("inf", "-inf"):
        value = float(given)
    elif hint is float and rules.unit is not None and isinstance(given, str):
        try:
            value = parse_quantity(given, rules.unit)
        except ValueError as error:
            return None, str(error)
    elif hint is float and number:
        value = given + 0.0
    elif not isinstance(given, hint) or (hint is int and not number):
        problem = f"{shown(given)} is not {WORDS[hint]}"
        return None, f"{problem}; write e.g. {example(hint, rules)}"
    if isinstance(value, float) and not math.isfinite(value):
        if math.isnan(value) or not rules.infinite:
            problem = f"{shown(given)} is not a finite number"
            return None, f"{problem}; write e.g. {example(hint, rules)}"
    elif hint is float and rules.unit is not None and number and value:
        return None, (
            f"{shown(given)} has no unit; {dimension_name(rules.unit)} with its unit "
            f"is expected, e.g. {example(hint, rules)}"
        )
    if is_allowed(value, rules):
        return value, None
    near = None
    if isinstance(value, str) and rules.choices is not None:
        near = nearest(value, rules.choices)
    advice = f'did you mean "{near}"?' if near else f"e.g. {example(hint, rules)}"
    return None, f"{shown(given)} is not allowed; must be {allowed(rules)}; {advice}"


def _no_table(given: Any, where: str, written: Names) -> str:
    """What to say of a value where a table belongs."""
    return f"{where}: {shown(given)} is no table; write its keys under {label(written)}"


def _missing(entry: Entry, path: Names) -> str:
    """What to say of a required key that is absent."""
    if not entry.tables:
        text = f"{entry.name} = {example(entry.hint, entry.rules)}"
        return f"{label(path, entry.name)} is missing: {entry.rules.doc}; e.g. {text}"
    where = label((*path, entry.name, *(("NAME",) if entry.named else ())))
    kinds = [quoted(kind) for kind in entry.tables if kind is not None]
    needs = [f"kind = {' or '.join(kinds)}"] if kinds else []
    if len(entry.tables) == 1:
        (section,) = entry.tables.values()
        needs += [name for name, inner in entries_of(section).items() if inner.required]
    text = f"; write a table {where}" + (f" with {', '.join(needs)}" if needs else "")
    return f"{label((*path, entry.name))} is missing: {entry.rules.doc}{text}"


def _syntax_problem(text: str, error: Exception) -> str:
    """What to say of a text that is no TOML."""
    if not isinstance(error, tomllib.TOMLDecodeError):
        # Python's own limits on digits and on recursion.
        return "is not valid TOML: a number or a nesting of brackets has no end"
    reason = str(error)
    problem = f"is not valid TOML: {reason}"
    number = re.search(r"at line ([0-9]+)", reason)
    if number is not None:
        line = text.split("\n")[int(number[1]) - 1].strip()
        problem += f": {quoted(line)}"
    if reason.startswith(("Invalid value", "Expected newline", "Unclosed array")):
        problem += '; text, and a number with a unit, stand in quotes: step = "900 s"'
    if reason.startswith(("Cannot overwrite", "Cannot declare", "Cannot mutate")):
        problem += "; a key or a table stands there twice"
    return problem
