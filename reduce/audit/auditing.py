"""All findings of a truth, the verdicts that follow, and what a report draws."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from eddyshed.solver.errors import DataError

from ..closures.instrumental import instrumental_fit
from ..statistics.correlation import integral_time
from ..thresholds import AuditSettings
from . import (
    balance,
    dependence,
    fitted,
    limit,
    memory,
    normality,
    perturbation,
    record,
    separation,
    sizes,
)
from .curves import abscissa_curve, quantile_curves
from .findings import Assumption, Finding, Measured, judge, times, unknown
from .material import Material
from .verdicts import ClosureVerdict, closure_verdicts, recommendation

SCHEMA = 2  # of audit.json; see Audit


@dataclass(frozen=True, slots=True, kw_only=True)
class Audit:
    """What an audit found; audit.json holds the same, field by field.

    Numbers that are not known are null there: a value that could not be
    computed, an error that the record is too short for, a length of truth that
    cannot be told.

    Attributes
    ----------
    schema : int
        Version of this layout: 1 held `findings` alone; 2 is this one.
    findings : list of Finding
        Each with the fields of `Finding`; ``votes`` is false for those that are
        explanatory.
    closures : list of ClosureVerdict
        ``closure``, ``verdict``, ``reasons``, ``leaning``.
    recommendation : str
        Which closure, at which cutoff; else what to collect or change.
    terms : dict
        ``slow`` and ``fast``: for each term of the two tendencies, by its name,
        rms about its mean ``value`` and ``error`` [state unit s-1].
    curves : dict
        ``quantiles``: ``normal`` (quantile,), and for each resolved mode
        ``value`` and ``error`` (quantile,) of its coupling, in standard deviations.
        ``abscissa``: ``time`` [s] of the records looked at, and ``numerical``
        abscissa there [s-1].
    """

    schema: int
    findings: list[Finding]
    closures: list[ClosureVerdict]
    recommendation: str
    terms: dict
    curves: dict


Group = tuple[tuple[Assumption, ...], Callable[[], Sequence[Measured]]]


def audit(
    settings: AuditSettings,
    material: Material,
    used: Sequence[str],
    rng: np.random.Generator,
) -> Audit:
    """Test what the closures assume.

    Parameters
    ----------
    settings : AuditSettings
        The thresholds.
    material : Material
        The divided truth and what was fitted to it.
    used : sequence of str
        Closures of the study.
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    Audit

    Notes
    -----
    What cannot be measured (a constant mode, no unresolved modes, a record of
    few correlation times) is undecided, with the reason.
    """
    findings = []
    for assumptions, measure in _groups(material, rng):
        thresholds = [float(getattr(settings, a.setting)) for a in assumptions]
        try:
            found = [
                judge(assumption, measured, threshold, used)
                for assumption, measured, threshold in zip(
                    assumptions, measure(), thresholds, strict=True
                )
            ]
        except DataError as error:
            found = [
                unknown(assumption, threshold, used, str(error))
                for assumption, threshold in zip(assumptions, thresholds, strict=True)
            ]
        findings += found
    findings = [_never_fails(finding) for finding in findings]
    verdicts = closure_verdicts(findings, used)
    kept = ", ".join(material.labels[:6]) + (
        ", ..." if len(material.labels) > 6 else ""
    )
    return Audit(
        schema=SCHEMA,
        findings=findings,
        closures=verdicts,
        recommendation=recommendation(
            findings, verdicts, f"{len(material.labels)} modes kept ({kept})"
        ),
        terms=_or_empty(lambda: _terms(material)),
        curves={
            "quantiles": _or_empty(lambda: quantile_curves(material)),
            "abscissa": _or_empty(lambda: abscissa_curve(material)),
        },
    )


def _never_fails(finding: Finding) -> Finding:
    """Too short a record is no verdict on an assumption: it is undecided.

    Its value grows with the record, while the relative error falls with the root.
    """
    lengths = (record.LENGTH.name, record.SAMPLE.name)
    known = math.isfinite(finding.value) and math.isfinite(finding.error)
    if finding.name not in lengths or finding.verdict == "holds" or not known:
        return finding
    reach = finding.quantile * finding.error / finding.value
    more = 1.0
    while finding.value * more * math.exp(-reach / math.sqrt(more)) < finding.threshold:
        more *= 1.02
    settle = times(more, "truth")
    return replace(finding, verdict="undecided", more=more, settle=settle)


def _or_empty(make):
    """What is made, or nothing where there is nothing to make it from."""
    try:
        return make()
    except DataError:
        return {}


def _terms(m: Material):
    return {
        "slow": sizes.sizes(m.terms.slow, m.batches),
        "fast": sizes.sizes(m.terms.fast, m.batches),
    }


def _groups(m: Material, rng: np.random.Generator) -> Iterator[Group]:
    """Assumptions that are measured together, and how; in the order of tables."""
    step, labels = m.split.step, m.labels
    partners = m.split.unresolved.partners
    yield (
        (record.LENGTH, record.SHIFT, record.SPREAD, record.TREND),
        lambda: [
            record.length(m.x, step, labels),
            *record.shifts(m.x, step, labels),
        ],
    )
    yield (
        (separation.SEPARATION,),
        lambda: [separation.separation(m.x, m.unexplained, step, labels)],
    )
    yield (
        (normality.TAILS, normality.SYMMETRY),
        lambda: normality.shape(m.unexplained, step, labels, rng),
    )
    yield (normality.FOURTH,), lambda: [_fourth(m)]
    yield (
        (dependence.MEAN,),
        lambda: [dependence.explained(*m.spread, m.batches, "all modes")],
    )
    yield (
        (perturbation.KAPPA,),
        lambda: [
            perturbation.operator_ratio(m.spread[0], m.operators, m.noise, m.batches)
        ],
    )
    yield (
        (perturbation.FORCING,),
        lambda: [
            perturbation.ratio_of_sizes(
                m.terms.fast["A21 x + B211(x, x)"],
                m.terms.fast_tendency,
                m.batches,
                "all modes",
            )
        ],
    )
    yield (
        (fitted.DECAY, fitted.REPAIR),
        lambda: [_decay(m, partners), fitted.repair(m.noise)],
    )
    yield (record.SAMPLE,), lambda: [_sample(m, partners)]
    yield (balance.STABILITY,), lambda: [_stability(m)]
    # A cubic term decides by itself; the linear part is then no matter.
    if "white" in m.models and not np.any(m.models["white"].drift.cubic):
        yield (balance.WHITE_STABILITY,), lambda: [_white_stability(m)]
    yield (sizes.COUPLING,), lambda: [_coupling(m)]
    yield (
        (limit.LIMIT,),
        lambda: [limit.limit_distance(m.models, m.x, step, _longest(m), labels, rng)],
    )
    # What follows explains, and does not vote.
    yield (normality.JOINT,), lambda: [normality.joint(m.unexplained, step)]
    yield (
        (normality.UNRESOLVED,),
        lambda: [normality.unresolved(m.spread[1], m.batches)],
    )
    yield (dependence.ENERGY,), lambda: [_energy(m)]
    yield (
        (memory.EXPONENTIAL, memory.SPECTRUM, memory.LAGS, memory.WHITENESS),
        lambda: [
            memory.exponential(m.lags, m.noise.process, step, m.fast_labels),
            memory.spectrum(m.fast, step, m.noise.process, m.lags.units, m.fast_labels),
            memory.lag_consistency(m.lags, m.fast_labels),
            memory.whiteness(
                m.fast, step, m.noise.process, m.lags.units, m.fast_labels
            ),
        ],
    )
    yield (perturbation.ABSCISSA,), lambda: [_growth(m)]
    yield (sizes.REPLACED, sizes.QUICK), lambda: _replaced(m)
    yield (fitted.STRUCTURE,), lambda: [_structure(m, partners)]
    yield (balance.MEANS,), lambda: [_balance(m)]
    yield (balance.COUPLED_STABILITY,), lambda: [_coupled(m)]
    yield (
        (record.LEFT_OUT,),
        lambda: [record.left_out_share(m.terms.left_out, m.batches)],
    )


def _fourth(m: Material) -> Measured:
    """Modes that products reach at all."""
    y, covariance = m.spread[1], m.noise.process.covariance
    matrices = m.operators.B122
    mixed = [matrix @ covariance for matrix in matrices]
    expected = 2 * np.array([np.sum(one * one.T) for one in mixed])
    products = np.stack([((y @ matrix) * y).sum(axis=1) for matrix in matrices], -1)
    there = expected > 1e-12 * m.felt.var(axis=(0, 1))
    if not there.any():
        message = "products of unresolved modes reach no resolved mode"
        raise DataError(message)
    names = [label for label, one in zip(m.labels, there, strict=True) if one]
    return normality.fourth_moments(
        products[:, there], expected[there], m.batches, names
    )


def _decay(m: Material, partners) -> Measured:
    _ = m.fast
    return fitted.decay(m.noise, partners, m.fast_labels)


def _sample(m: Material, partners) -> Measured:
    times, length = m.fast_scales.squared, m.split.length
    value = length / (2 * times.value)
    relative = times.error / times.value
    return Measured(
        value=value,
        error=np.where(np.isfinite(relative), value * relative, np.inf),
        places=m.fast_labels,
        freedom=np.maximum(value / 2, 1.0),
        more=float(np.max(40 * times.value / length, initial=1.1)),
    )


def _longest(m: Material) -> float:
    return float(integral_time(m.x, m.split.step).value.max())


def _stability(m: Material) -> Measured:
    fit = instrumental_fit(m.x, m.felt - m.felt.mean(axis=(0, 1)), m.split.step, "any")
    return balance.growth(
        m.operators.A11 + fit.damping.value,
        fit.damping.error,
        _longest(m),
        max(1, m.batches.number - 1),
        "resolved modes",
    )


def _white_stability(m: Material) -> Measured:
    _ = m.fast
    linear = m.models["white"].drift.linear
    return balance.white_growth(linear, m.operators, m.noise, _longest(m))


def _coupled(m: Material) -> Measured:
    _ = m.fast
    matrix, errors = balance.coupled_matrix(m.operators, m.noise)
    return balance.growth(
        matrix, errors, _longest(m), max(1, m.noise.batches - 1), "modes and noise"
    )


def _coupling(m: Material) -> Measured:
    felt = m.felt.reshape(-1, m.felt.shape[2])
    return perturbation.ratio_of_sizes(
        felt, m.split.tendency.reshape(felt.shape), m.batches, "all modes"
    )


def _energy(m: Material) -> Measured:
    x, y = m.spread
    energy = np.sum(y**2, axis=1, keepdims=True)
    return dependence.explained(x, energy, m.batches, "all modes")


def _growth(m: Material) -> Measured:
    return perturbation.growth_share(m.abscissa, m.batches)


def _replaced(m: Material) -> list[Measured]:
    replaced, modulated = m.terms.fast["B222(y, y)"], m.terms.fast["2 B212(x, y)"]
    varied = (replaced.std(axis=0) > 0) & (modulated.std(axis=0) > 0)
    if not varied.any():
        message = "the unresolved modes do not interact, or x does not modulate them"
        raise DataError(message)
    size = perturbation.ratio_of_sizes(replaced, modulated, m.batches, "all modes")
    time = sizes.replaced_time(
        replaced[:, varied],
        m.fast[m.stretches][:, varied],
        m.split.step,
        m.stretch_count,
    )
    return [size, time]


def _structure(m: Material, partners) -> Measured:
    flat = m.fast.reshape(-1, m.fast.shape[2])
    weights = flat.var(axis=0)
    time = float(weights @ m.fast_scales.time.value / weights.sum())
    lag = max(1, round(time / m.split.step))
    return fitted.structure(flat, lag, partners, m.batches)


def _balance(m: Material) -> Measured:
    terms = m.terms
    return balance.mean_balance(
        terms.slow_tendency - terms.slow["in no mode"],
        terms.slow_tendency,
        m.batches,
        m.labels,
    )
