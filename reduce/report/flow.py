"""Sections of the report on the truth: its flow, and its split into modes."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.config import as_table
from eddyshed.solver.diagnostics import Budget, budget_of
from eddyshed.solver.quantities import format_quantity

from ..bases.spectrum import distances, sampling_errors
from ..settings import EofSettings
from ..stages import split_notes
from ..statistics.estimate import Estimate
from .evidence import Evidence
from .flow_fields import last_state
from .markup import (
    Note,
    listed,
    number,
    paragraphs,
    section,
    span,
    text,
    unbroken,
    unit,
)
from .measures import block_ranges, energy_rates

DAY = 86400.0
BLOCKS = 400  # of a series: as many as a column of print can show
OCEANS = {
    "barotropic": "one layer of quasi-geostrophic flow on a beta plane",
    "two_layer": "two layers of quasi-geostrophic flow on a beta plane, the eddies of "
    "a current that is imposed",
    "boussinesq": "a vertical slice of a Boussinesq fluid",
}
SPACES = {
    "periodic": "that repeats in both directions",
    "channel": "that repeats along x between walls in the south and the north",
    "basin": "between walls on all four sides",
}
SLICES = {
    "periodic": "that repeats along x and upwards",
    "channel": "that repeats along x between walls below and above",
}


def flow(note: Note, evidence: Evidence) -> str:
    """What the ocean looks like and what it lives on."""
    record = evidence.record
    series, units = record.read_budget(), record.budget_units()
    budget = budget_of(record.times, series, units)
    return section(
        "The flow",
        paragraphs(
            f"The ocean is {text(in_words(evidence))}. {_speed(evidence, series)}"
        ),
        last_state(note, evidence),
        _energy_figure(note, evidence, series, units),
        _budget_table(note, evidence, budget),
    )


def in_words(evidence: Evidence) -> str:
    """Ocean and space, such as ``a vertical slice ..., in a box of 4 m by 1 m ...``."""
    config, directions = evidence.study.config, _directions(evidence.ocean)
    kind = as_table(config)["ocean"]["kind"]
    sides = " by ".join(
        f"{format_quantity(side, 'm')} in {name}"
        for side, name in zip(config.grid.lengths, directions, strict=True)
    )
    spaces = SLICES if directions[1] == "z" else SPACES
    return f"{OCEANS[kind]}, in a box of {sides} {spaces[config.grid.space]}"


def _directions(ocean):
    """What the two directions of the box are called."""
    return getattr(ocean, "directions", ("x", "y"))


def _speed(evidence, series):
    """Sentence on the speed, from the mean of the kinetic energy."""
    kinetic, words = series["energy"], "The root-mean-square speed is"
    if "kinetic_energy" in series:
        kinetic = series["kinetic_energy"]
    elif "potential_energy" in series:
        kinetic = kinetic - series["potential_energy"]
        words = "The root-mean-square speed of the eddies, both layers by mass, is"
    elif np.isfinite(evidence.ocean.settings.deformation_radius):
        words = "The root of twice the energy, the tilt of the surface included, is"
    times = evidence.record.times
    mean = budget_of(times, {"energy": kinetic}, {"energy": "m2 s-2"}).level
    speed = float(np.sqrt(2 * max(mean.value, 0.0)))
    error = mean.error / speed if speed else mean.error
    return f"{words} {number(speed, error)} {unit('m s-1')} (from the mean over time)."


def _energy_figure(note, evidence, series, units):
    """Energy and its budget over time."""
    record = evidence.record
    since = record.times - record.times[0]
    middle, *_ = block_ranges(since, BLOCKS)
    level = block_ranges(series["energy"], BLOCKS)
    rates = energy_rates(record.times, series, units)
    between, *_ = block_ranges((since[1:] + since[:-1]) / 2, BLOCKS)
    drawn = {
        name.replace("_", " "): block_ranges(values, BLOCKS)[0]
        for name, values in rates.items()
    }
    block = span(len(since) * record.step / len(middle))
    return note.figure(
        lambda figures: figures.energy(
            times=middle, level=level, rate_times=between, rates=drawn
        ),
        alt="Two time series: energy above; below, what feeds and drains it: "
        f"{listed(list(drawn)) or 'nothing'}.",
        caption="(a) Energy, averaged over the domain, in blocks of about "
        f"{block}: mean (line), least and greatest value (grey). (b) What feeds the "
        "energy (above zero) and what drains it (below), means of such blocks; the "
        "names are those of the table below.",
    )


def _budget_table(note, evidence, budget: Budget):
    """The mean budget with its errors."""
    stirring = evidence.study.config.stirring
    names = evidence.ocean.budget_units
    rates = [f"rates [{unit(budget.rate_units)}]"]
    for name, mean in budget.terms.items():
        _, meaning = names.get(name, ("", f"energy fed by {name}"))
        meaning = meaning.removesuffix(" (negative)")
        label = text(f"{name.replace('_', ' ')}: {meaning}")
        rates.append([label, number(mean.value, mean.error)])
    change, residual = budget.change, budget.residual
    rates += [
        ["change, end against start", number(change.value, change.error)],
        ["residual", number(residual.value, residual.error)],
    ]
    level = [
        f"level [{unit(budget.units)}]",
        [
            text(names["energy"][1]),
            number(budget.level.value, budget.level.error),
        ],
    ]
    asked = ""
    if stirring is not None:
        asked = (
            " The config asks the stirring for "
            f"{number(stirring.energy_rate, 0.0)} {unit(budget.rate_units)}."
        )
    return note.table(
        ["mean over the record", "value"],
        [level, rates],
        caption=f"Energy budget. Standard errors from {budget.batches} batch means. "
        "The residual, change less all sources and sinks, is what the sampled record "
        "fails to account for: zero but for the interval of the record "
        f"({span(evidence.record.step)}) and the errors of the time step.{asked}",
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
    notes = "".join(
        f"<li>{text(note)}</li>" for note in split_notes(evidence.study.config, divided)
    )
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
        _spectrum(note, evidence)
        if isinstance(evidence.study.config.resolved, EofSettings)
        else "",
        f"<ul>{notes}</ul>" if notes else "",
    )


def _spectrum(note, evidence):
    """How well the empirical orthogonal functions are told apart."""
    divided = evidence.split
    found = sampling_errors(divided.resolved, divided.x, divided.step)
    apart = distances(divided.resolved, divided.unresolved)
    rows = [
        [
            unbroken(label),
            number(found.value[k], found.error[k]),
            number(found.error[k], 0.0),
            number(apart[k], 0.0),
        ]
        for k, label in enumerate(divided.resolved.labels)
    ]
    squared = f"[({unit(evidence.ocean.unit)})<sup>2</sup>]"
    return note.table(
        ["function", f"variance {squared}", "sampling error", "distance to the next"],
        [rows],
        caption="Spectrum of the empirical orthogonal functions, with errors by the "
        "rule of thumb of North et al. (1982, Mon. Weather Rev. 110:699): the root of "
        "two over the number of independent samples, times the variance. Two that are "
        "no further apart than the error are not told from each other.",
    )


def _sum(shares: Estimate) -> str:
    """Sum of shares in percent; errors as of independent modes."""
    error = float(np.sqrt((shares.error**2).sum()))
    return number(100 * float(shares.value.sum()), 100 * error)
