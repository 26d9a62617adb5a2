"""Closures: ways to stand in for what was dropped, one file each.

Each module has one function ``close(data: ClosureData)``, which returns a
:class:`~eddyshed.reduce.reduced.ReducedModel` or, where no unresolved mode is
left, a :class:`~eddyshed.reduce.diffusion.DiffusionModel`, and says in its
docstring what it assumes. To add one, write the module and add its name here;
the config, the benchmark and the report pick it up.

A closure of a user's own is any function ``close(data, **options)``, or class
called in the same way, that the config names as ``"package.module:Name"``. It
gets a :class:`~.data.ClosureData` and returns one of the two for the resolved
coordinates of ``data.split``; the first line of its docstring is what reports
say of it.
"""

from __future__ import annotations

from importlib import import_module

from eddyshed.solver.hooks import is_hook, load

# name -> what it is, in a line
CLOSURES = {
    "bare": "truncation: the unresolved modes are set to zero",
    "bare_mean": "truncation: the unresolved modes are held at their mean",
    "damped": "linear damping fitted to the unresolved tendency, without noise",
    "residual": "red noise and linear damping fitted to the unresolved tendency",
    "coloured": "the unresolved modes are simulated as the fitted noise, and "
    "driven and modulated by the resolved ones",
    "white": "the limit of fast noise: damping, noise-induced drift and white noise, "
    "every term derived",
    "coloured_open": "diagnostic: coloured in open loop, with no restoring force from "
    "the unresolved modes",
    "white_open": "diagnostic: white in open loop, with no restoring force from the "
    "unresolved modes",
}
# Made only if the config asks: they show what the feedback does by lacking it.
DIAGNOSTICS = ("coloured_open", "white_open")


def about(name: str) -> str:
    """What a closure is, in a line."""
    if not is_hook(name):
        return CLOSURES[name]
    first, _, _ = (load(name).__doc__ or "").strip().partition("\n")
    return first.rstrip(".") or "a closure of the user's own"


def closure(name: str):
    """Return the function that makes a closure.

    Parameters
    ----------
    name : str
        One of `CLOSURES`. (One of a user's own is a
        :class:`~eddyshed.solver.hooks.Hook`, which is called in the same way.)

    Returns
    -------
    callable
        ``close(data: ClosureData) -> ReducedModel or DiffusionModel``
    """
    return import_module(f".{name}", __name__).close
