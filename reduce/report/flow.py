"""Sections of the report on the truth: its flow, and its split into modes."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.config import as_table
from eddyshed.solver.quantities import format_quantity

from ..bases.spectrum import distances, sampling_errors
from ..settings import EofSettings
from ..stages import split_notes
from ..statistics.estimate import Estimate
from .evidence import Evidence
from .flow_fields import last_state
from .flow_scales import ERRORS, scales
from .markup import (
    Note,
    listed,
    number,
    numbers,
    paragraphs,
    section,
    span,
    text,
    unbroken,
    unit,
)

DAY = 86400.0
# What is drawn over time of a basin and of convection, by the words at its axis.
DRAWN = {
    "clockwise_gyre": "clockwise",
    "anticlockwise_gyre": "anticlockwise",
    "nusselt_number": "Nusselt number",
}
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
    if evidence.ocean.waves is None:
        words = f"The model is {text(in_words(evidence))}."
        return section("The model", paragraphs(words))
    return section(
        "The flow",
        paragraphs(f"The ocean is {text(in_words(evidence))}. {_speed(evidence)}"),
        last_state(note, evidence),
        scales(note, evidence),
        _energy_figure(note, evidence),
        _budget_table(note, evidence),
        _measures(note, evidence),
    )


def in_words(evidence: Evidence) -> str:
    """Ocean and space, such as ``a vertical slice ..., in a box of 4 m by 1 m ...``."""
    config, directions = evidence.study.config, _directions(evidence.ocean)
    kind = as_table(config)["ocean"]["kind"]
    if kind not in OCEANS:
        return (
            f"{kind}, a model of the user's own, of {evidence.ocean.size} coordinates"
        )
    sides = " by ".join(
        f"{format_quantity(side, 'm')} in {name}"
        for side, name in zip(config.grid.lengths, directions, strict=True)
    )
    spaces = SLICES if directions[1] == "z" else SPACES
    return f"{OCEANS[kind]}, in a box of {sides} {spaces[config.grid.space]}"


def _directions(ocean):
    """What the two directions of the box are called."""
    return getattr(ocean, "directions", ("x", "y"))


def _speed(evidence):
    """Sentence on the speed, from the mean of the kinetic energy."""
    flow, words = evidence.flow, "The root-mean-square speed is"
    kinetic = flow.measure.get("kinetic_energy")
    if "potential_energy" in flow.measure:
        words = "The root-mean-square speed of the eddies, both layers by mass, is"
    elif kinetic is None and np.isfinite(evidence.ocean.settings.deformation_radius):
        words = "The root of twice the energy, the tilt of the surface included, is"
    if kinetic is None:
        mean, spread = flow.budget["energy"].level, flow.budget["energy"].level_error
    else:
        mean, spread = kinetic.mean, kinetic.mean_error
    speed = float(np.sqrt(2 * max(mean, 0.0)))
    error = spread / speed if speed else spread
    return f"{words} {number(speed, error)} {unit('m s-1')} (from the mean over time)."


def _energy_figure(note, evidence):
    """Energy and its budget over time."""
    budget, sampling = evidence.flow.budget["energy"], evidence.flow.sampling
    rates = {
        name.replace("_", " "): budget.rate_block[0, k]
        for k, name in enumerate(budget.names)
        if budget.rate_block[0, k].any()
    }
    block = span(sampling.recorded * sampling.step / len(budget.time))
    return note.figure(
        lambda figures: figures.energy(budget, rates),
        alt="Two time series: energy above; below, what feeds and drains it: "
        f"{listed(list(rates)) or 'nothing'}.",
        caption="(a) Energy, averaged over the domain, in blocks of about "
        f"{block}: mean (line), least and greatest value (grey). (b) What feeds the "
        "energy (above zero) and what drains it (below), means of such blocks; the "
        f"names are those of the table below.{_of_the_first(evidence)}",
        numbers=numbers(
            [f"mean energy [{unit(budget.units)}]", "least", "greatest"],
            [
                [
                    number(budget.level, budget.level_error),
                    number(float(budget.level_least.min()), 0.0),
                    number(float(budget.level_greatest.max()), 0.0),
                ]
            ],
        ),
    )


def _of_the_first(evidence):
    """Said where a figure shows one member of several."""
    return " The first member is shown." if evidence.flow.sampling.members > 1 else ""


def _budget_table(note, evidence):
    """The mean budgets with their errors."""
    stirring = evidence.study.config.stirring
    groups = []
    for budget in evidence.flow.budget.values():
        groups.append(
            [
                f"level [{unit(budget.units)}]",
                [text(budget.meaning), number(budget.level, budget.level_error)],
            ]
        )
        rates = [f"rates [{unit(budget.rate_units)}]"]
        for k, (name, meaning) in enumerate(
            zip(budget.names, budget.meanings, strict=True)
        ):
            label = f"{name.replace('_', ' ')}: {meaning.removesuffix(' (negative)')}"
            rates.append([text(label), number(budget.term[k], budget.term_error[k])])
        rates += [
            ["change, end against start", number(budget.change, budget.change_error)],
            ["residual", number(budget.residual, budget.residual_error)],
        ]
        groups.append(rates)
    asked = ""
    if stirring is not None:
        asked = (
            " The config asks the stirring for "
            f"{number(stirring.energy_rate, 0.0)} {unit('m2 s-3')}."
        )
    return note.table(
        ["mean over the record", "value"],
        groups,
        caption=f"Budgets of {listed(list(evidence.flow.budget))}: sources are "
        f"positive, sinks negative. Standard errors{ERRORS}. The residual, change less "
        "all sources and sinks, is what the sampled record fails to account for: zero "
        f"but for the interval of the record ({span(evidence.flow.sampling.step)}) and "
        f"the errors of the time step.{asked}",
    )


def _measures(note, evidence):
    """What else was measured: gyres, Nusselt number, parts of the energy."""
    flow = evidence.flow
    measures = {**flow.gyre, **flow.measure}
    if not measures:
        return ""
    shown = {words: measures[name] for name, words in DRAWN.items() if name in measures}
    rows = [
        [
            text(measure.meaning.removesuffix(" (negative)")),
            unit(measure.units) if measure.units != "1" else "",
            number(measure.mean, measure.mean_error),
            number(measure.least, 0.0),
            number(measure.greatest, 0.0),
        ]
        for measure in measures.values()
    ]
    sampled = ""
    if flow.gyre:
        sampled = (
            f" Gyres were measured on {flow.sampling.sampled} states, one every "
            f"{span(flow.sampling.interval)}; transports are per unit depth, times "
            f"the depth in metres they are in {unit('m3 s-1')}."
        )
    table = note.table(
        ["measure", "unit", "mean", "least", "greatest"],
        [rows],
        words=(0, 1),
        caption="Other measures of the flow over the record. Standard "
        f"errors{ERRORS}.{sampled}",
    )
    if not shown:
        return table
    names = listed(list(shown))
    what = "Transport of the gyres" if flow.gyre else "Nusselt number"
    first = next(iter(shown.values()))
    lasts = len(first.time) > 1
    block = span(float(first.time[1] - first.time[0])) if lasts else "the record"
    figure = note.figure(
        lambda figures: figures.over_time(shown),
        alt=f"{what} over time: {names}, with the mean of the record.",
        caption=f"{what} over time, in blocks of about {block}: mean (line), least and "
        "greatest value (grey); dashed: mean over the record, given with its error in "
        f"the table below.{_of_the_first(evidence)}",
    )
    return f"{figure}\n{table}"


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
