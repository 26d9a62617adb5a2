"""The state that a run starts from."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np

from .config import setting
from .errors import DataError
from .files import open_file
from .grid_files import read_fields
from .quantities import nearest, quoted
from .randomness import stream
from .stirring import band_coordinates


@dataclass(frozen=True, slots=True, kw_only=True)
class RestSettings:
    """Start from rest."""


@dataclass(frozen=True, slots=True, kw_only=True)
class NoiseSettings:
    """Start from random phases and amplitudes on a band of wavenumbers."""

    energy: float = setting(unit="m2 s-2", above=0, doc="energy of the initial state")
    band: tuple[float, float] = setting(
        minimum=0,
        doc="smallest and largest total wavenumber excited, in waves per box (half "
        "waves between walls)",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.band[0] > self.band[1]:
            yield f"band = {list(self.band)} runs downwards; give the smaller first"


@dataclass(frozen=True, slots=True, kw_only=True)
class ModeSettings:
    """Start from a single mode."""

    mode: str = setting(
        doc='name of a coordinate of the state, such as "cos 2,1"; an unknown one '
        "is answered with those that are nearest"
    )
    energy: float = setting(unit="m2 s-2", above=0, doc="energy of the initial state")
    phase: float = setting(
        default=0.0,
        doc="angle, in radians, by which the state is turned from the coordinate "
        "towards the other part (cosine or sine) of the same wave",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class FieldSettings:
    """Start from fields on the grid, in a file."""

    path: str = setting(
        doc="a NumPy .npy file of one field, or an HDF5 or netCDF-4 file with a "
        "variable for each field that the ocean steps; under the current folder if "
        "not absolute"
    )
    energy: float | None = setting(
        default=None,
        unit="m2 s-2",
        above=0,
        doc="energy that the state is scaled to; absent: as in the file",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class EarlierSettings:
    """Start from the end of an earlier run of the same ocean on the same grid."""

    path: str = setting(
        doc="truth of the earlier run: a file such as runs/NAME/truth/member-000.h5 "
        "or one of its segments; under the current folder if not absolute"
    )


InitialSettings: TypeAlias = (
    RestSettings | NoiseSettings | ModeSettings | FieldSettings | EarlierSettings
)
INITIAL_KINDS = {
    "rest": RestSettings,
    "noise": NoiseSettings,
    "mode": ModeSettings,
    "field": FieldSettings,
    "run": EarlierSettings,
}


def starting_state(
    initial: InitialSettings, ocean: Any, *, seed: int, member: int
) -> np.ndarray:
    """State at time zero.

    Parameters
    ----------
    initial : InitialSettings
        What to start from.
    ocean : ocean
        In coordinates orthonormal in energy.
    seed, member : int
        Choose the random stream, where one is needed.

    Returns
    -------
    ndarray, shape (size,)

    Raises
    ------
    DataError
        If it does not fit the ocean or its grid, or a file cannot be used.
    """
    try:
        if isinstance(initial, NoiseSettings):
            rng = stream(seed, member, "initial state")
            noise = band_noise(ocean, initial.energy, initial.band, rng)
            return _at_rest(ocean) + noise
        if isinstance(initial, ModeSettings):
            return _single_mode(initial, ocean)
        if isinstance(initial, FieldSettings):
            z = _from_fields(Path(initial.path), ocean)
            if initial.energy is None:
                return z
            rest = _at_rest(ocean)
            return rest + _scaled(z - rest, initial.energy)
        if isinstance(initial, EarlierSettings):
            return _end_of_run(Path(initial.path), ocean)
    except DataError as error:
        message = f"[initial] {error}"
        raise DataError(message) from error
    return _at_rest(ocean)


def _at_rest(ocean):
    """State without eddies: zero, but for a current that the ocean starts with."""
    made = getattr(ocean, "at_rest", None)
    return np.zeros(ocean.size) if made is None else made()


def band_noise(
    ocean: Any, energy: float, band: tuple[float, float], rng: np.random.Generator
) -> np.ndarray:
    """Random state of a given energy on a band of wavenumbers.

    Parameters
    ----------
    ocean : ocean
        In coordinates orthonormal in energy.
    energy : float
        Its energy [m2 s-2].
    band : tuple of float
        Smallest and largest total wavenumber.
    rng : numpy.random.Generator
        Draws it.

    Returns
    -------
    ndarray, shape (size,)

    Raises
    ------
    DataError
        If no coordinate lies in the band.
    """
    where = band_coordinates(ocean.waves, band)
    z = np.zeros(ocean.size)
    z[where] = rng.standard_normal(len(where))
    return _scaled(z, energy)


def file_read(initial: InitialSettings) -> Path | None:
    """File whose bytes decide the start; None if there is none.

    Of an earlier run it is the segment with the last checkpoint, which never
    changes: the index beside it is written anew while that run goes on.
    """
    if isinstance(initial, FieldSettings):
        return Path(initial.path)
    if not isinstance(initial, EarlierSettings):
        return None
    path = Path(initial.path)
    segments = sorted((path.parent / path.stem).glob("segment-*.h5"))
    return segments[-1] if segments else path


def _scaled(z, energy):
    """State of a given energy."""
    now = z @ z / 2
    if now == 0:
        message = f"energy = {energy:.6g} m2 s-2: the state is at rest; leave it out"
        raise DataError(message)
    return z * np.sqrt(energy / now)


def _single_mode(initial, ocean):
    """One coordinate, or it and its partner, excited."""
    if initial.mode not in ocean.labels:
        near = nearest(initial.mode, ocean.labels)
        advice = f"did you mean {quoted(near)}?" if near else ""
        message = (
            f"mode = {quoted(initial.mode)} is no coordinate of this ocean; {advice} "
            f"(there are {ocean.size}: {quoted(ocean.labels[0])} to "
            f"{quoted(ocean.labels[-1])})"
        )
        raise DataError(message)
    index = ocean.labels.index(initial.mode)
    partner = ocean.partners[index]
    if partner < 0 and initial.phase != 0:
        message = (
            f"phase = {initial.phase:g}: mode {quoted(initial.mode)} stands between "
            "walls and has no phase; leave it out"
        )
        raise DataError(message)
    amplitude = np.sqrt(2 * initial.energy)
    z = _at_rest(ocean)
    if partner >= 0:
        z[partner] = amplitude * np.sin(initial.phase)
    z[index] = amplitude * np.cos(initial.phase)
    return z


def _from_fields(path, ocean):
    """State from fields on the grid."""
    names = ocean.prognostic
    found = read_fields(path, names, ocean.space.points)
    return ocean.coordinates(*(ocean.space.to_modes(found[name]) for name in names))


def _end_of_run(path, ocean):
    """Last state of an earlier run: that of its checkpoint, else its last record."""
    with open_file(path) as file:
        if file.attrs["eddyshed_kind"] not in ("truth", "truth segment"):
            message = (
                f"{path}: holds {file.attrs['eddyshed_kind']!r}; a truth run is needed"
            )
            raise DataError(message)
        # The parts of a run leave the labels to the index that shows them as one.
        labels = tuple(file["label"].asstr()[...]) if "label" in file else None
        size = len(file["coordinate"])
        if size != ocean.size or labels not in (None, ocean.labels):
            named = f" ({labels[0]} to {labels[-1]})" if labels else ""
            message = (
                f"{path}: a state of {size} coordinates{named}, this ocean has "
                f"{ocean.size} ({ocean.labels[0]} to {ocean.labels[-1]}); use the "
                "ocean and grid of that run"
            )
            raise DataError(message)
        if ocean.waves is None:  # a model of the user's own has no box
            lengths = here = ()
        else:
            made = json.loads(file.attrs["config_json"])
            lengths, here = tuple(made["grid"]["lengths"]), ocean.space.lengths
        if lengths != here:
            message = (
                f"{path}: a box of {lengths} m, here it is {here} m; "
                "use the box of that run"
            )
            raise DataError(message)
        if "checkpoint" in file:
            return file["checkpoint/state"][...]
        # HDF5 fills what is missing behind a virtual dataset with NaN.
        state = file["state"][-1]
    segments = sorted((path.parent / path.stem).glob("segment-*.h5"))
    if segments:
        return _end_of_run(segments[-1], ocean)
    if not np.all(np.isfinite(state)):
        message = f"{path}: its segments are gone; keep the folder beside the file"
        raise DataError(message)
    return state
