"""A user's own code, named in a config as ``"package.module:Name"``.

A hook is anything that can be called: a class or a function in a module that
Python can import. It is called with what its place in the config asks for and
with the keys of its table `options`. Only the command line decides whether
foreign code may run (``--allow-hooks``); here it is looked up.
"""

from __future__ import annotations

import hashlib
import importlib
import json
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any

from .errors import ContractError, DataError

PATTERN = re.compile(r"[A-Za-z_]\w*(\.[A-Za-z_]\w*)*:[A-Za-z_]\w*")
FORM = '"package.module:Name"'


@dataclass(frozen=True, slots=True, kw_only=True)
class Hook:
    """A name in a config that stands for a user's own code.

    Attributes
    ----------
    name : str
        ``package.module:Name``.
    options : dict
        Keyword arguments for it.
    """

    name: str
    options: dict[str, Any] = field(default_factory=dict)

    def table(self) -> dict[str, Any]:
        """What a result depends on: the name, the options, the module's bytes."""
        return {
            "kind": self.name,
            "options": self.options,
            "sha256": digest(self.name),
        }

    def __call__(self, *arguments: Any) -> Any:
        """Call the user's code.

        Raises
        ------
        DataError
            If it cannot be found.
        ContractError
            If it raises anything.
        """
        made = load(self.name)
        try:
            return made(*arguments, **self.options)
        except Exception as error:  # foreign code may raise anything
            given = ", ".join(self.options) or "none"
            message = (
                f'hook "{self.name}" raised {type(error).__name__}: {error} (options '
                f"given: {given}); mend its module, or its options"
            )
            raise ContractError(message) from error


def is_hook(text: Any) -> bool:
    """Whether a text has the form of a hook's name."""
    return isinstance(text, str) and PATTERN.fullmatch(text) is not None


def read_hook(
    given: dict[str, Any], kind: str, where: str
) -> tuple[Hook | None, list[str]]:
    """Read a table of a config whose kind names a user's own code.

    Parameters
    ----------
    given : dict
        The table.
    kind : str
        Its kind.
    where : str
        What it is called in messages, such as ``[ocean]``.

    Returns
    -------
    Hook or None
        None if there are problems.
    list of str
        The problems.
    """
    problems = [
        f'unknown key "{key}" in {where}; what a hook is to know stands in a table: '
        f"options = {{ {key} = ... }}"
        for key in given
        if key not in ("kind", "options")
    ]
    if not is_hook(kind):
        problems.append(
            f'{where} kind = "{kind}" is no name of a hook; write kind = {FORM}'
        )
    options = given.get("options", {})
    problem = options_problem(options)
    if problem:
        problems.append(f"{where} options: {problem}")
    return (None if problems else Hook(name=kind, options=options)), problems


def options_problem(options: Any) -> str | None:
    """What is wrong with a table of options; None if nothing is."""
    if not isinstance(options, dict):
        return f"{options!r} is no table; write options = {{ name = value }}"
    try:
        json.dumps(options, allow_nan=False)
    except (TypeError, ValueError):
        return (
            "holds a date, an infinity or what is not a number; give numbers, texts, "
            "lists and tables"
        )
    return None


@cache
def load(name: str) -> Callable[..., Any]:
    """Look up what a hook's name stands for.

    Raises
    ------
    DataError
        If the module cannot be imported or has no such name.
    """
    module_name, _, attribute = name.partition(":")
    try:
        module = importlib.import_module(module_name)
    except Exception as error:  # foreign code may raise anything
        missing = isinstance(error, ModuleNotFoundError)
        advice = (
            "run in the folder that holds it, or install its package"
            if missing and module_name.startswith(str(error.name))
            else "mend it so that Python can import it"
        )
        message = (
            f'hook "{name}": module {module_name} cannot be imported '
            f"({type(error).__name__}: {error}); {advice}"
        )
        raise DataError(message) from error
    found = getattr(module, attribute, None)
    if not callable(found):
        known = [
            key
            for key, value in vars(module).items()
            if callable(value) and getattr(value, "__module__", "") == module_name
        ]
        message = (
            f'hook "{name}": module {module_name} ({module.__file__}) has no class or '
            f"function {attribute}; it has {', '.join(known) or 'none'}"
        )
        raise DataError(message)
    return found


@cache
def digest(name: str) -> str:
    """SHA-256 of the file of a hook's module, as it was when first asked for.

    Raises
    ------
    DataError
        If the module cannot be imported or has no file.
    """
    load(name)
    module = importlib.import_module(name.partition(":")[0])
    path = getattr(module, "__file__", None)
    if path is None:
        message = f'hook "{name}": its module has no file; put it into a .py file'
        raise DataError(message)
    return hashlib.sha256(Path(path).read_bytes()).hexdigest()
