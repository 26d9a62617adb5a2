"""Sections of the report on the truth: its flow, and its split into modes."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.quantities import format_quantity

from ..estimate import Estimate
from .evidence import Evidence
from .markup import Note, number, paragraphs, section, span, unbroken, unit
from .measures import (
    EnergyBudget,
    batch_states,
    block_ranges,
    eastward_profile,
    energy_budget,
    of_batches,
    refined,
)

DAY = 86400.0
MAP_POINTS = 192  # of the map, by Fourier series from what the grid holds
CONTOURS = 12  # of the streamfunction, about
BLOCKS = 400  # of a series: as many as a column of print can show


def flow(note: Note, evidence: Evidence) -> str:
    """What the ocean looks like and what it lives on."""
    budget_series = evidence.record.read_budget()
    budget = energy_budget(evidence.record.times, budget_series)
    speed = np.sqrt(2 * budget.energy.value)
    error = budget.energy.error / speed if speed else budget.energy.error
    return section(
        "The flow",
        paragraphs(
            f"The root-mean-square speed is {number(float(speed), float(error))} "
            f"{unit('m s-1')} (from the mean energy)."
        ),
        _map(note, evidence),
        _energy_figure(note, evidence, budget_series),
        _budget_table(note, evidence, budget),
    )


def _map(note, evidence):
    """Map of the last state and the jets."""
    ocean, record = evidence.ocean, evidence.record
    last = record.read(len(record.times) - 1, len(record.times))[0]
    fields = ocean.fields(last)
    psi = refined(fields["streamfunction"], MAP_POINTS)
    interval = round_number(float(np.ptp(psi)) / CONTOURS)
    levels = (
        interval * np.arange(np.ceil(psi.min() / interval), psi.max() / interval)
        if interval
        else np.empty(0)
    )
    parts = np.array([_profile(ocean, z) for z in batch_states(record)])
    profile = of_batches(parts, _profile(ocean, evidence.split.mean))
    strongest = int(np.abs(profile.value).argmax())
    _, ly = evidence.study.config.grid.lengths
    where = format_quantity(round(strongest * ly / len(profile.value), -3), "m")
    when = span(float(record.times[-1] - record.times[0]))
    return note.figure(
        lambda figures: figures.flow(
            vorticity=refined(fields["vorticity"], MAP_POINTS),
            streamfunction=psi,
            levels=levels,
            lengths=evidence.study.config.grid.lengths,
            profile=profile,
            last_profile=_profile(ocean, last),
        ),
        alt="Left, a map of relative vorticity in kilometres with contours of the "
        "streamfunction; right, eastward velocity averaged along x, by latitude. The "
        f"strongest time-mean jet, {profile.value[strongest]:+.2g} ± "
        f"{profile.error[strongest]:.1g} m/s, lies at y = {where}.",
        caption=f"(a) Relative vorticity of the last recorded state, {when} into the "
        "record: orange, which prints light, turns anticlockwise (above zero), blue "
        "clockwise. Contours: streamfunction, every "
        f"{interval:g}&nbsp;{unit('m2 s-1')}, dashed below zero. (b) Eastward "
        "velocity averaged along x: time mean (black, with two standard errors to "
        f"either side from {len(parts)} batch means) and that of the state in (a) "
        "(dashed).",
    )


def _profile(ocean, z):
    """Eastward velocity by latitude, at as many points as the map has."""
    return refined(eastward_profile(ocean, z)[:, np.newaxis], MAP_POINTS)[:, 0]


def _energy_figure(note, evidence, series):
    """Energy and its budget over time."""
    record = evidence.record
    since = record.times - record.times[0]
    middle, *_ = block_ranges(since, BLOCKS)
    level = block_ranges(series["energy"], BLOCKS)
    work, *_ = block_ranges(series["work"], BLOCKS)
    loss, *_ = block_ranges(-series["dissipation"], BLOCKS)
    block = span(len(since) * record.step / len(middle))
    return note.figure(
        lambda figures: figures.energy(times=middle, level=level, work=work, loss=loss),
        alt="Two time series: energy above; below, the work of the forcing and the "
        "loss to friction.",
        caption="(a) Energy, averaged over the domain, in blocks of about "
        f"{block}: mean (line), least and greatest value (grey). (b) Work of the "
        "steady forcing and loss to friction, means of the same blocks.",
    )


def _budget_table(note, evidence, budget: EnergyBudget):
    """The mean budget with its errors."""
    stirring = evidence.study.config.stirring
    energy, power = unit("m2 s-2"), unit("m2 s-3")
    rows = [
        [f"energy [{energy}]", number(*_floats(budget.energy))],
        [f"work of the steady forcing [{power}]", number(*_floats(budget.work))],
        [f"dissipation [{power}]", number(*_floats(budget.dissipation))],
        [f"change, end against start [{power}]", number(*_floats(budget.change))],
        [f"residual [{power}]", number(*_floats(budget.residual))],
    ]
    if stirring is None:
        after = (
            "The residual, change less work less dissipation, is what the sampled "
            "record fails to account for: zero but for the interval of the record "
            f"({span(evidence.record.step)}) and the errors of the "
            "time step."
        )
    else:
        after = (
            "The residual, change less work less dissipation, is what the stirring "
            f"fed; the config asks for {number(stirring.energy_rate, 0.0)} {power}."
        )
    return note.table(
        ["mean over the record", "value"],
        [rows],
        caption=f"Energy budget. Standard errors from {budget.batches} batch means. "
        f"{after}",
    )


def split(note: Note, evidence: Evidence) -> str:
    """What is kept and what is not."""
    divided, truth = evidence.split, evidence.truth
    total, resolved = divided.total_variance, divided.resolved
    lost = 100 * divided.shares[2]
    shares = Estimate(truth.variance.value / total, truth.variance.error / total)
    # The noise was fitted to the unresolved series: it knows their errors.
    unresolved = Estimate(
        evidence.noise.variance.value / total, evidence.noise.variance.error / total
    )
    rows = [
        [
            unbroken(label),
            number(truth.variance.value[k], truth.variance.error[k]),
            number(100 * shares.value[k], 100 * shares.error[k]),
            number(
                truth.integral_time.value[k], truth.integral_time.error[k], scale=DAY
            ),
        ]
        for k, label in enumerate(resolved.labels)
    ]
    return section(
        "The split",
        paragraphs(
            f"{resolved.n_modes} modes are resolved and hold {_sum(shares)} % of the "
            "variance of the truth; noise stands in for "
            f"{divided.unresolved.n_modes} more, with {_sum(unresolved)} %. In this "
            f"record {lost:.2g} % lies in no mode and is left out."
        ),
        note.figure(
            lambda figures: figures.spectrum(resolved=shares, unresolved=unresolved),
            alt="Share of variance against rank, on logarithmic axes, resolved modes "
            "as filled squares, unresolved ones as open circles.",
            caption="Variance by mode, ranked, as a share of that of the truth; bars "
            "are two standard errors to either side. Filled squares: resolved; open "
            f"circles: unresolved. {lost:.2g} % lies in modes not shown.",
        ),
        note.table(
            [
                "mode",
                f"variance [({unit(evidence.ocean.unit)})<sup>2</sup>]",
                "share [%]",
                "integral time [d]",
            ],
            [rows],
            caption="The resolved modes in the truth. Integral time: that of the "
            "correlation function up to where it falls below 0.05.",
        ),
    )


def round_number(value: float) -> float:
    """The largest of 1, 2 or 5 times a power of ten that is not above a value."""
    if value <= 0:
        return 0.0
    power = 10.0 ** np.floor(np.log10(value))
    return float(power * max(step for step in (1, 2, 5) if step * power <= value))


def _floats(estimate: Estimate) -> tuple[float, float]:
    """Value and error of a single estimate."""
    return float(estimate.value), float(estimate.error)


def _sum(shares: Estimate) -> str:
    """Sum of shares in percent; errors as of independent modes."""
    error = float(np.sqrt((shares.error**2).sum()))
    return number(100 * float(shares.value.sum()), 100 * error)
