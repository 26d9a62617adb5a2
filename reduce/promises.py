"""What a model promises, each promise as a check that can fail.

A check yields one line for each thing that is wrong. Checks know a model by
its members alone; what the members mean is said in
:mod:`eddyshed.reduce.contract`.
"""

from __future__ import annotations

import pickle
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from .contract import Model

WORKING_MEMORY = 2**25  # bytes that one batch of unit states may take
PARTS = ("forcing", "linear", "bilinear", "inner")

# Tolerances, relative to the norms of what is compared.
# A batch or a fused sum only orders additions differently: transforms of up
# to 10^6 points lose three or four of float64's sixteen digits.
ROUND_OFF = 1e-12
# Sums of several evaluations, with derivatives that weight their errors
# towards the short scales. A member that is not linear is off by far more.
ALGEBRA = 1e-10


def unit_states(n: int, width: int) -> Iterator[tuple[slice, np.ndarray]]:
    """Rows of the identity matrix, in batches.

    Parameters
    ----------
    n : int
        Order of the matrix.
    width : int
        Numbers that are worked on for each row; sets the size of a batch.

    Yields
    ------
    where : slice
    units : ndarray, shape (m, n)
        Rows `where`.
    """
    rows = max(1, WORKING_MEMORY // (8 * max(width, n)))
    for first in range(0, n, rows):
        last = min(first + rows, n)
        yield slice(first, last), np.eye(last - first, n, k=first)


def broken_promises(
    model: Model, rng: np.random.Generator, states: np.ndarray | None
) -> list[str]:
    """Try a model and list what is wrong with it.

    Parameters
    ----------
    model : Model
        Anything that claims to be one.
    rng : numpy.random.Generator
        Draws the states that are tried.
    states : ndarray, shape (k, size), or None
        Typical states.

    Returns
    -------
    list of str
        One line for each broken promise. A member whose shapes are wrong, or
        that is not pure, is not tried any further.
    """
    problems = list(_missing(model))
    size = getattr(model, "size", None)
    if not isinstance(size, int | np.integer) or isinstance(size, bool) or size < 1:
        problems.insert(0, f"size: is {size!r}, must be an int of at least 1")
        return problems
    scale = np.ones(size)
    if states is not None:
        power = np.mean(np.square(states), axis=0)
        # A coordinate at rest in all states is tried at the mean amplitude.
        scale = np.sqrt(np.where(power > 0, power, power.mean() or 1.0))
    trial = _Trial(model, rng.standard_normal((4, size)) * scale)
    for name, check in _SHAPES.items():
        if callable(getattr(model, name, None)):
            sound = not _run(check, trial, problems)
            if sound and not _run(_PURITY[name], trial, problems):
                trial.usable.add(name)
    for needs, check in _CHECKS:
        if trial.usable.issuperset(needs):
            _run(check, trial, problems)
    return problems


@dataclass(frozen=True, slots=True)
class _Trial:
    """A model, four states to try it with, shape (4, size), and what works."""

    model: Model
    states: np.ndarray
    usable: set[str] = field(default_factory=set)

    def guarded(self, name: str) -> Callable:
        """A member that can neither change its arguments nor its results."""
        member = getattr(self.model, name)
        return lambda *arguments: np.copy(member(*_copies(arguments)))


def _copies(arguments):
    return tuple(np.copy(a) if isinstance(a, np.ndarray) else a for a in arguments)


def _run(check: Callable, trial: _Trial, problems: list[str]) -> bool:
    """Add what a check finds to the problems; say whether it found any."""
    before = len(problems)
    try:
        problems.extend(check(trial))
    except Exception as error:  # foreign code may raise anything
        what = check.__name__.strip("_").replace("_", " ")
        problems.append(f"{what}: raised {type(error).__name__}: {error}")
    return len(problems) > before


def _missing(model):
    for name in PARTS:
        if not callable(getattr(model, name, None)):
            yield f"{name}: is missing or not callable; add the method"
    if getattr(model, "tendency", None) is not None and not callable(model.tendency):
        yield "tendency: is not callable; make it a method or leave it out"
    declared = getattr(model, "energy_conserving", False)
    if not isinstance(declared, bool | np.bool_):
        yield f"energy_conserving: is {declared!r}, must be True or False"
    named = getattr(model, "labels", None)
    if named is not None:
        size = getattr(model, "size", None)
        is_names = isinstance(named, tuple) and all(isinstance(n, str) for n in named)
        if not is_names or len(named) != size:
            yield f"labels: must be a tuple of {size} str, as many as `size`"


# --- shapes -----------------------------------------------------------------


def _shape(name, result, shape):
    result = np.asarray(result)
    if result.shape != shape:
        yield f"{name}: returned shape {result.shape}, must be {shape}"
    elif result.dtype != np.float64:
        yield f"{name}: returned type {result.dtype}, must be float64"
    elif not np.all(np.isfinite(result)):
        yield f"{name}: returned values that are not finite"


def _forcing(trial):
    forcing = trial.guarded("forcing")
    size = trial.model.size
    found = (_shape("forcing", forcing(t), (size,)) for t in (0.0, 1.0))
    yield from dict.fromkeys(line for lines in found for line in lines)


def _linear(trial):
    yield from _batches_of_one("linear", trial.guarded("linear"), trial)


def _tendency(trial):
    fused = trial.guarded("tendency")
    yield from _batches_of_one("tendency", lambda z: fused(0.0, z), trial)


def _bilinear(trial):
    end = (trial.model.size,)
    yield from _batches_of_two("bilinear", trial.guarded("bilinear"), trial, end)


def _inner(trial):
    yield from _batches_of_two("inner", trial.guarded("inner"), trial, ())


def _batches_of_one(name, function, trial):
    """Batches of states: right shapes, and equal to one state at a time."""
    z = trial.states
    problems = []
    for batch in (z[0], z[:3], z.reshape(2, 2, -1)):
        problems += _shape(name, function(batch), batch.shape)
    if not problems:
        problems += _same(name, function(z), np.array([function(row) for row in z]))
    return problems


def _batches_of_two(name, function, trial, end):
    """The same for two arguments whose leading axes broadcast."""
    z = trial.states
    u, w = z[:3, np.newaxis], z[2:]
    problems = list(_shape(name, function(z[0], z[1]), end))
    problems += _shape(name, function(z[:3], z[0]), (3, *end))
    problems += _shape(name, function(u, w), (3, 2, *end))
    if not problems:
        one_by_one = np.array([[function(a, b) for b in w] for a in z[:3]])
        problems += _same(name, function(u, w), one_by_one)
    return problems


def _same(name, batch, one_by_one):
    if np.linalg.norm(batch - one_by_one) > ROUND_OFF * np.linalg.norm(one_by_one):
        yield f"{name}: a batch of states gives other values than one by one"


_SHAPES = {
    "forcing": _forcing,
    "linear": _linear,
    "bilinear": _bilinear,
    "inner": _inner,
    "tendency": _tendency,
}


# --- algebra ----------------------------------------------------------------


def _norm(trial, states):
    """Largest norm in a batch, in the model's own product if that is one."""
    squares = trial.model.inner(states, states)
    if not np.all(squares >= 0):
        squares = np.sum(np.square(states), axis=-1)
    return float(np.sqrt(np.max(squares)))


def _symmetry_of_inner(trial):
    inner, (u, w, v, _) = trial.model.inner, trial.states
    length_u, length_w, length_v = (np.sqrt(abs(inner(z, z))) for z in (u, w, v))
    if abs(inner(u, w) - inner(w, u)) > ALGEBRA * length_u * length_w:
        yield "inner: is not symmetric; inner(u, w) must equal inner(w, u)"
    excess = inner(1.7 * u - 2.3 * w, v) - 1.7 * inner(u, v) + 2.3 * inner(w, v)
    if abs(excess) > ALGEBRA * (1.7 * length_u + 2.3 * length_w) * length_v:
        yield "inner: is not linear in its first argument"


def _positivity_of_inner(trial):
    if not np.all(trial.model.inner(trial.states, trial.states) > 0):
        yield "inner: is not positive; inner(z, z) must exceed 0 unless z = 0"
        return
    size = trial.model.size
    for where, units in unit_states(size, size):
        squares = trial.model.inner(units, units)
        if not np.all(squares > 0):
            worst = where.start + int(np.argmin(squares))
            yield (
                f"inner: is not positive; a unit state in coordinate {worst} has "
                f"inner(z, z) = {squares.min():.3g}"
            )
            return


def _linearity(trial):
    linear, (u, w, _, _) = trial.model.linear, trial.states
    parts = np.array([1.7 * linear(u), -2.3 * linear(w)])
    excess = _norm(trial, linear(1.7 * u - 2.3 * w) - parts.sum(axis=0))
    if excess > ALGEBRA * _norm(trial, parts):
        yield (
            f"linear: is not linear; A(1.7 u - 2.3 w) is off by {excess:.2g}, where "
            f"its parts have the norm {_norm(trial, parts):.2g}"
        )


def _bilinearity(trial):
    bilinear, (u, w, v, _) = trial.model.bilinear, trial.states
    size = _norm(trial, bilinear(trial.states[:, np.newaxis], trial.states))
    if _norm(trial, bilinear(u, w) - bilinear(w, u)) > ALGEBRA * size:
        yield "bilinear: is not symmetric; B(u, w) must equal B(w, u)"
    both = 1.7 * u - 2.3 * w
    excess = {
        "first": bilinear(both, v) - 1.7 * bilinear(u, v) + 2.3 * bilinear(w, v),
        "second": bilinear(v, both) - 1.7 * bilinear(v, u) + 2.3 * bilinear(v, w),
    }
    for place, off in excess.items():
        if _norm(trial, off) > ALGEBRA * size:
            yield (
                f"bilinear: is not linear in its {place} argument; off by "
                f"{_norm(trial, off):.2g}, where B has the norm {size:.2g}"
            )


def _energy(trial):
    if not getattr(trial.model, "energy_conserving", False):
        return
    z, inner = trial.states, trial.model.inner
    made = trial.model.bilinear(z, z)
    # The product of the norms is the sum of absolute products, up to a factor
    # near one, whatever the inner product.
    largest = np.sqrt(inner(z, z) * inner(made, made))
    share = np.abs(inner(z, made)) / np.where(largest > 0, largest, 1.0)
    if share.max() > ROUND_OFF:
        yield (
            "energy_conserving: is declared, but inner(z, B(z, z)) is "
            f"{share.max():.2g} of its largest possible value; leave it out"
        )


def _fused_tendency(trial):
    model, z = trial.model, trial.states
    parts = [model.linear(z), model.bilinear(z, z)]
    for t in (0.0, 1.0):
        forcing = model.forcing(t)
        excess = _norm(trial, model.tendency(t, z) - forcing - parts[0] - parts[1])
        size = _norm(trial, forcing) + sum(_norm(trial, part) for part in parts)
        if excess > ROUND_OFF * size:
            yield (
                f"tendency: differs from F(t) + A z + B(z, z) at t = {t:g} by "
                f"{excess:.2g}, where the parts have the norm {size:.2g}"
            )
            return


# --- purity -----------------------------------------------------------------


def _arguments(trial):
    """Two sets of arguments for each member."""
    u, w = trial.states[:2]
    return {
        "forcing": ((0.0,), (1.0,)),
        "linear": ((u,), (w,)),
        "bilinear": ((u, w), (w, u)),
        "inner": ((u, w), (w, w)),
        "tendency": ((0.0, u), (1.0, w)),
    }


def _purity_of(name):
    def purity(trial):
        member = getattr(trial.model, name)
        first, second = _arguments(trial)[name]
        given = _copies(first)
        result = member(*given)
        kept = np.copy(result)
        other = member(*_copies(second))
        is_overwritten = not np.array_equal(kept, result)
        again = member(*_copies(first))
        if not all(map(np.array_equal, given, first)):
            yield f"{name}: changes its input; work on a copy"
        if not np.array_equal(kept, again):
            yield f"{name}: gives different bits for the same input"
        if is_overwritten:
            yield f"{name}: a second call changes the first result; return a copy"
        elif _is_shared(result, (other, again)):
            yield f"{name}: returns memory that it keeps; return a copy"
        elif _is_shared(result, given):
            yield f"{name}: returns its input; return a copy"

    return purity


def _is_shared(result, others):
    # Memory that cannot be written to may be shared without harm.
    return getattr(getattr(result, "flags", None), "writeable", False) and any(
        np.shares_memory(result, other) for other in others
    )


_PURITY = {name: _purity_of(name) for name in _SHAPES}


def _pickling(trial):
    copy = pickle.loads(pickle.dumps(trial.model))
    for name, (first, _) in _arguments(trial).items():
        if name in trial.usable:
            before = getattr(trial.model, name)(*first)
            if not np.array_equal(before, getattr(copy, name)(*first)):
                yield f"{name}: differs in a pickled copy of the model"


_CHECKS = (
    (("inner",), _symmetry_of_inner),
    (("inner",), _positivity_of_inner),
    (("linear", "inner"), _linearity),
    (("bilinear", "inner"), _bilinearity),
    (("bilinear", "inner"), _energy),
    (("forcing", "linear", "bilinear", "inner", "tendency"), _fused_tendency),
    ((), _pickling),
)
