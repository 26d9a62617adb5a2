"""What is kept of a flow, and its file: a group for each part, open to any reader."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from eddyshed.solver.files import open_file

from ..store import read_one, write_all

KIND = "flow"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sampling:
    """What the numbers come from.

    Attributes
    ----------
    members : int
        Truth runs.
    recorded : int
        States recorded by each. Budgets and mean fields use them all.
    sampled : int
        States of each that spectra, fluxes and gyres were evaluated on.
    step, interval : float
        Between recorded and between sampled states [s].
    batches : int
        Stretches of the record that the errors of mean fields come from.
    """

    members: int
    recorded: int
    sampled: int
    step: float
    interval: float
    batches: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spectrum:
    """Energy by total wavenumber.

    Attributes
    ----------
    names : tuple of str
        Parts of the state that have a spectrum of their own; one for one layer.
    wavenumber : ndarray, shape (wavenumber,)
        In the middle of each ring [m-1].
    energy, energy_error : ndarray, shape (wavenumber,)
        In each ring [m2 s-2], and its standard error; they sum to the energy.
    part, part_error : ndarray, shape (part, wavenumber)
        The same of each part.
    width : float
        Of a ring [m-1].
    complete : int
        Rings that the truncation leaves whole.
    slope, slope_error : float
        Of a power law through rings `slope_from` to `slope_to`; NaN if none is
        straight.
    slope_from, slope_to : int
        Its first and last ring.
    """

    names: tuple[str, ...]
    wavenumber: np.ndarray
    energy: np.ndarray
    energy_error: np.ndarray
    part: np.ndarray
    part_error: np.ndarray
    width: float
    complete: int
    slope: float
    slope_error: float
    slope_from: int
    slope_to: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ZonalSpectrum:
    """Energy of the flow that does not vary in x, by wavenumber across.

    Attributes
    ----------
    wavenumber : ndarray, shape (wavenumber,)
        [m-1]
    energy, energy_error : ndarray, shape (wavenumber,)
        At each [m2 s-2].
    width : float
        Spacing of the wavenumbers [m-1].
    """

    wavenumber: np.ndarray
    energy: np.ndarray
    energy_error: np.ndarray
    width: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Flux:
    """What advection carries to smaller scales.

    Attributes
    ----------
    units : str
        Of the flux.
    wavenumber : ndarray, shape (wavenumber,)
        Outer edge of each ring [m-1].
    flux, flux_error : ndarray, shape (wavenumber,)
        Across it [units], above zero to smaller scales.
    """

    units: str
    wavenumber: np.ndarray
    flux: np.ndarray
    flux_error: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Field:
    """A field on the grid, made finer by the functions that it is a sum of.

    Attributes
    ----------
    units : str
        Of the field.
    x, y : ndarray, shapes (x,), (y,)
        Grid coordinates [m]; y is the height in a slice.
    snapshot : ndarray, shape (y, x)
        At the end of the record of the first member.
    mean, mean_error : ndarray, shape (y, x)
        Over all records.
    """

    units: str
    x: np.ndarray
    y: np.ndarray
    snapshot: np.ndarray
    mean: np.ndarray
    mean_error: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Profile:
    """A quantity averaged along x.

    Attributes
    ----------
    name, units : str
        Of the quantity.
    y : ndarray, shape (y,)
        [m]
    snapshot : ndarray, shape (y,)
        At the end of the record of the first member.
    mean, mean_error : ndarray, shape (y,)
        Over all records.
    """

    name: str
    units: str
    y: np.ndarray
    snapshot: np.ndarray
    mean: np.ndarray
    mean_error: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeanBudget:
    """A quantity, its sources and its sinks, in the mean and over time.

    Attributes
    ----------
    units, rate_units : str
        Of the quantity, and of all rates.
    meaning : str
        What the quantity is.
    names, meanings : tuple of str
        The terms.
    level, level_error : float
        Mean of the quantity.
    change, change_error : float
        Its value at the end less that at the start, over the length.
    residual, residual_error : float
        Change less the sum of the terms.
    term, term_error : ndarray, shape (term,)
        Means of the terms: sources are positive, sinks negative.
    time : ndarray, shape (time,)
        Middle of each block of the record since its start [s].
    level_block, level_least, level_greatest : ndarray, shape (member, time)
        Mean, least and greatest value of the quantity in it.
    rate_time : ndarray, shape (rate_time,)
        Middle of each block of the rates [s].
    rate_block : ndarray, shape (member, term, rate_time)
        Mean of each term in it.
    """

    units: str
    rate_units: str
    meaning: str
    names: tuple[str, ...]
    meanings: tuple[str, ...]
    level: float
    level_error: float
    change: float
    change_error: float
    residual: float
    residual_error: float
    term: np.ndarray
    term_error: np.ndarray
    time: np.ndarray
    level_block: np.ndarray
    level_least: np.ndarray
    level_greatest: np.ndarray
    rate_time: np.ndarray
    rate_block: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Measure:
    """A number that a flow has at each time.

    Attributes
    ----------
    units, meaning : str
        What it is.
    mean, mean_error, least, greatest : float
        Over all records.
    time : ndarray, shape (time,)
        Middle of each block of the record since its start [s].
    block, block_least, block_greatest : ndarray, shape (member, time)
        Mean, least and greatest value in it.
    """

    units: str
    meaning: str
    mean: float
    mean_error: float
    least: float
    greatest: float
    time: np.ndarray
    block: np.ndarray
    block_least: np.ndarray
    block_greatest: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Flow:
    """All that is kept of a flow.

    Attributes
    ----------
    sampling : Sampling
    spectrum : Spectrum
    zonal : ZonalSpectrum or None
        None where every mode varies in x.
    profile : Profile or None
        Of one layer, or of a slice, that repeats along x.
    flux : dict of Flux
        Of ``energy`` and ``enstrophy``.
    field : dict of Field
        By the names that the ocean gives them.
    budget : dict of MeanBudget
        Of ``energy`` and ``enstrophy``.
    measure : dict of Measure
        Whatever else the ocean records with its budget.
    gyre : dict of Measure
        Strength and place of the gyres of a basin.
    """

    sampling: Sampling
    spectrum: Spectrum
    zonal: ZonalSpectrum | None
    profile: Profile | None
    flux: Mapping[str, Flux]
    field: Mapping[str, Field]
    budget: Mapping[str, MeanBudget]
    measure: Mapping[str, Measure]
    gyre: Mapping[str, Measure]


SINGLE = {
    "sampling": Sampling,
    "spectrum": Spectrum,
    "zonal": ZonalSpectrum,
    "profile": Profile,
}
SEVERAL = {
    "flux": Flux,
    "field": Field,
    "budget": MeanBudget,
    "measure": Measure,
    "gyre": Measure,
}


def write_flow(path: Path, stamp: str, title: str, flow: Flow) -> None:
    """Write a flow into a file, one group for each part.

    Parameters
    ----------
    path : Path
        ``flow.h5`` of a run folder.
    stamp : str
        Fingerprint of what it was made from.
    title : str
        CF title.
    flow : Flow
    """
    parts = {
        name: value for name in SINGLE if (value := getattr(flow, name)) is not None
    }
    parts |= {
        f"{name}/{key}": value
        for name in SEVERAL
        for key, value in getattr(flow, name).items()
    }
    write_all(path, stamp, title, KIND, parts)


def read_flow(path: Path) -> Flow:
    """Read what `write_flow` wrote.

    Raises
    ------
    DataError
        If the file is missing, damaged or of another kind.
    """
    with open_file(path, kind=KIND) as file:
        keys = {name: list(file[name]) if name in file else [] for name in SEVERAL}
        found = [name for name in SINGLE if name in file]
    # What every flow has is asked for even if it is not there, so that it is missed.
    asked = {"sampling", "spectrum", *found}
    parts = {
        name: read_one(path, KIND, name, cls) if name in asked else None
        for name, cls in SINGLE.items()
    }
    several = {
        name: {key: read_one(path, KIND, f"{name}/{key}", cls) for key in keys[name]}
        for name, cls in SEVERAL.items()
    }
    return Flow(**parts, **several)
