"""Closures: ways to stand in for what was dropped, one file each.

Each module has one function ``close(data: ClosureData) -> ReducedModel`` and
says in its docstring what it assumes. To add one, write the module and add
its name here; the config, the benchmark and the report pick it up.
"""

from __future__ import annotations

from importlib import import_module

# name -> what it is, in a line
CLOSURES = {
    "bare": "truncation: the unresolved modes are set to zero",
    "bare_mean": "truncation: the unresolved modes are held at their mean",
    "damped": "linear damping fitted to the unresolved tendency, without noise",
    "residual": "red noise and linear damping fitted to the unresolved tendency",
    "coloured": "the unresolved modes are simulated as the fitted noise, and "
    "driven and modulated by the resolved ones",
}


def closure(name: str):
    """Return the function that makes a closure.

    Parameters
    ----------
    name : str
        One of `CLOSURES`.

    Returns
    -------
    callable
        ``close(data: ClosureData) -> ReducedModel``
    """
    return import_module(f".{name}", __name__).close
