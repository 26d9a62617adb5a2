"""A truth run of a second, with every stream, that tests of files share.

Import as ``from tiny_truth import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from eddyshed.solver.config import parse_config
from eddyshed.solver.segments import member_paths
from eddyshed.solver.settings import TruthConfig

TEXT = """
name = "tiny"
seed = 3
[grid]
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "6 d"
[forcing.wind]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [0, 2]
[stirring]
energy_rate = "1e-9 m2/s3"
band = [2, 3]
[initial]
kind = "noise"
energy = "0.001 m2/s2"
band = [1, 3]
[time]
step = "0.1 d"
spin_up = "5 d"
duration = "40 d"
[output]
state_every = "1 d"
boxes_every = "0.5 d"
fields_every = "10 d"
checkpoint_every = "6 d"
[output.resolved]
every = "0.5 d"
up_to = 2
[output.boxes.gyre]
field = "vorticity"
x = ["800 km", "100 km"]
y = ["0 km", "500 km"]
[output.boxes.jet]
field = "eastward_velocity"
y = ["400 km", "600 km"]
"""


def config_of(*overrides: str) -> TruthConfig:
    """The config, with overrides as of ``--set``."""
    return parse_config(TEXT, TruthConfig, "tiny.toml", overrides).config


def contents(folder: Path) -> dict[str, np.ndarray]:
    """All series that a run recorded, by name."""
    with h5py.File(member_paths(folder, 0)[0]) as file:
        return {
            name: item[...]
            for name, item in file.items()
            if item.dtype.kind == "f" or name.endswith("coordinate")
        }


def assert_same_bits(one: dict, other: dict) -> None:
    """Fail unless two `contents` are equal to the bit."""
    assert one.keys() == other.keys()
    for name, values in one.items():
        np.testing.assert_array_equal(values, other[name], err_msg=name)
