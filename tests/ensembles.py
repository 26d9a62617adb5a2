"""A small ensemble that tests share, and how two of them are compared."""

import time
from pathlib import Path

import h5py
import numpy as np

from eddyshed.reduce.settings import StudyConfig
from eddyshed.solver.config import read_config
from eddyshed.solver.locks import is_held, member_lock, noted
from eddyshed.solver.segments import member_paths

CONFIG = Path(__file__).with_name("ensemble.toml")
# Some seconds of work for each member, with a checkpoint now and then.
LONG = ("time.duration=600 d", "output.checkpoint_every=50 d")


def config_of(*overrides):
    return read_config(CONFIG, StudyConfig, overrides).config


def contents(path):
    """All numbers in a file, by name."""
    with h5py.File(path) as file:
        return {
            name: file[name][...]
            for name in file
            if file[name].dtype.kind == "f" or name.endswith("coordinate")
        }


def assert_same_bits(one, other, members):
    """Two truth folders hold the same numbers for some members."""
    for member in members:
        a, b = (contents(member_paths(f, member)[0]) for f in (one, other))
        assert a.keys() == b.keys()
        assert len(a["state"]) > 1
        for name in a:
            np.testing.assert_array_equal(a[name], b[name], err_msg=f"{member}: {name}")


def wait_for(what, seconds=60):
    """Wait until something is so."""
    deadline = time.monotonic() + seconds
    while not what():
        assert time.monotonic() < deadline, "waited in vain"
        time.sleep(0.02)


def at_work(folder, least_step=1):
    """Members that a process is stepping now."""
    locks = {m: member_lock(folder, m) for m in range(config_of().ensemble.members)}
    return [
        member
        for member, lock in locks.items()
        if is_held(lock) and noted(lock).get("step", 0) >= least_step
    ]
