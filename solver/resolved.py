"""Configs as tables: resolved values, their fingerprint, the reference of all keys."""

from __future__ import annotations

import hashlib
import json
import math
import textwrap
from collections.abc import Mapping
from typing import Any, get_args, get_origin

from .hooks import Hook
from .quantities import dimension_name, format_quantity
from .schema import (
    WORDS,
    Entry,
    Rules,
    allowed,
    element_hints,
    entries_of,
    example,
    label,
    list_words,
    sections_of,
    shown,
)


def as_table(config: Any) -> dict[str, Any]:
    """Resolved values of a config or a section, as JSON holds them.

    Parameters
    ----------
    config : dataclass
        A config.

    Returns
    -------
    dict
        Numbers in SI, lists for tuples, "inf" for infinity, the kind of each
        table that has one; absent optional keys are left out.
    """
    table: dict[str, Any] = {}
    section: type = type(config)
    for name, entry in entries_of(section).items():
        value = getattr(config, name)
        if value is None:
            continue
        if not entry.tables:
            table[name] = _plain(value, entry.hint)
        elif entry.named:
            table[name] = {key: _kind_table(one, entry) for key, one in value.items()}
        else:
            table[name] = _kind_table(value, entry)
    return table


def fingerprint(table: Mapping[str, Any]) -> str:
    """First 16 hexadecimal digits of the SHA-256 of a table's canonical JSON."""
    text = json.dumps(table, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def differing_keys(
    old: Mapping[str, Any], new: Mapping[str, Any], prefix: str = ""
) -> list[str]:
    """Keys in which two resolved configs differ.

    Parameters
    ----------
    old, new : mapping
        Results of :func:`as_table`.
    prefix : str
        What stands before each key.

    Returns
    -------
    list of str
        Such as ``ocean.drag: was 1e-07, now 2e-07``.
    """
    lines = []
    for key in [*new, *(key for key in old if key not in new)]:
        was, now = old.get(key), new.get(key)
        if was == now:
            continue
        # A table against nothing is told key by key, unless it is empty.
        was_table = {} if was is None and now else was
        now_table = {} if now is None and was else now
        if isinstance(was_table, dict) and isinstance(now_table, dict):
            lines += differing_keys(was_table, now_table, f"{prefix}{key}.")
        else:
            texts = ("absent" if x is None else json.dumps(x) for x in (was, now))
            lines.append("{}{}: was {}, now {}".format(prefix, key, *texts))
    return lines


def _kind_table(value: Any, entry: Entry) -> dict[str, Any]:
    """Resolved values of one section, with its kind if it has one."""
    if isinstance(value, Hook):
        return value.table()
    kinds = {section: kind for kind, section in entry.tables.items()}
    kind = kinds[type(value)]
    return ({} if kind is None else {"kind": kind}) | as_table(value)


def _plain(value: Any, hint: Any) -> Any:
    """Value as JSON holds it; a float stays one if a default gave an int."""
    if isinstance(value, tuple | list):
        hints = element_hints(hint, len(value))
        return [_plain(*pair) for pair in zip(value, hints, strict=True)]
    if hint is float:
        return str(float(value)) if math.isinf(value) else float(value)
    return value


def reference(root: type) -> str:
    """Every key of a config: what it takes, its default and its meaning.

    Parameters
    ----------
    root : type
        Dataclass of the whole config.

    Returns
    -------
    str
        Plain text in sections, at most 88 columns wide.
    """
    blocks = []
    for section in sections_of(root):
        lines = []
        if section.path:
            kind = "" if section.kind is None else f' kind = "{section.kind}"'
            head = f"{label(section.path)}{kind}: {section.about}"
            lines += textwrap.wrap(head, 88)
        for name, entry in entries_of(section.table).items():
            if not entry.tables:
                head = f"  {name}: {_described(entry.hint, entry.rules)}"
                lines += textwrap.wrap(
                    f"{head}; {_default_text(entry)}", 88, subsequent_indent=" " * 4
                )
                indent = " " * 6
                lines += textwrap.wrap(
                    entry.rules.doc, 88, initial_indent=indent, subsequent_indent=indent
                )
        blocks.append("\n".join(lines))
    return "\n\n".join(blocks) + "\n"


def _described(hint: Any, rules: Rules) -> str:
    """What a key takes, in words."""
    if get_origin(hint) is tuple:
        return f"{list_words(hint, rules)}, each {_described(get_args(hint)[0], rules)}"
    if rules.choices is not None:
        return allowed(rules)
    kind = WORDS[hint]
    if hint is float and rules.unit is not None:
        kind = f"{dimension_name(rules.unit)}, e.g. {example(hint, rules)}"
    if rules.infinite:
        kind += ', or "inf"'
    return f"{kind}, {allowed(rules)}" if allowed(rules) else kind


def _default_text(entry: Entry) -> str:
    """Default of a key, in words."""
    if entry.required:
        return "required"
    if entry.default is None:
        return "optional"
    return f"default {_as_toml(entry.default, entry.rules.unit)}"


def _as_toml(value: Any, unit: str | None) -> str:
    """A default as one would write it in a config."""
    if isinstance(value, tuple):
        return f"[{', '.join(_as_toml(item, unit) for item in value)}]"
    if unit is not None:
        return f'"{format_quantity(value, unit)}"' if value else "0"
    return shown(value)
