"""Functions of a truth that does not fit: three ways to the same, within a budget."""

import json
import re
import subprocess
import sys

import h5py
import numpy as np
import pytest
from scipy import linalg
from toys import random_weights

from eddyshed.reduce.bases.eof import eof_basis
from eddyshed.reduce.memory import OWN_BYTES
from eddyshed.reduce.settings import EofSettings
from eddyshed.solver.errors import DataError
from eddyshed.solver.files import add_scale, add_time


class Record:
    """A truth in memory that counts how much of it is read at once."""

    def __init__(self, states):
        self.states = states
        self.times = np.arange(len(states))
        self.size = states.shape[1]
        self.largest = 0

    def read(self, start, stop):
        self.largest = max(self.largest, stop - start)
        return self.states[start:stop].copy()


class Plain:
    """A model of which only the inner product matters."""

    def __init__(self, size, weights=None):
        self.size, self.weights = size, weights

    def inner(self, u, w):
        return np.sum(u * (w if self.weights is None else w @ self.weights), axis=-1)


def steep(shape, slope, seed=3):
    """States whose standard deviations fall by ten to the slope, and their mean."""
    rng = np.random.default_rng(seed)
    rank = min(shape)
    directions = linalg.qr(rng.standard_normal((shape[1], rank)), mode="economic")[0]
    deviations = 10.0 ** (-slope * np.arange(rank) / rank)
    series = rng.standard_normal((shape[0], rank)) * deviations
    return series @ directions.T + rng.standard_normal(shape[1])


def eofs(records, modes, memory, share=0.9, weights=None):
    states = np.concatenate([record.states for record in records])
    model = Plain(states.shape[1], weights)
    return eof_basis(
        EofSettings(modes=modes),
        model,
        records,
        states.mean(axis=0),
        share=share,
        memory=memory,
    )


# States, coordinates, and bytes beside the program's own: enough for a matrix of
# the order of the smaller, or for the few vectors that are wanted only.
WAYS = {
    "covariance": (500, 200, 4e6, "from the covariance"),
    "snapshots": (200, 500, 4e6, "from the inner products of 200 states"),
    "long and iterated": (500, 200, 1e6, "by subspace iteration"),
    "wide and iterated": (200, 500, 1.5e6, "by subspace iteration"),
}


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("dense", [False, True])
def test_each_way_gives_the_functions(way, dense, caplog):
    count, size, spare, words = WAYS[way]
    states = steep((count, size), 3)
    rng = np.random.default_rng(1)
    weights = random_weights(rng, size) / size if dense else None
    parts = states[: count // 2], states[count // 2 :]
    records = [Record(part) for part in parts]
    with caplog.at_level("INFO", "eddyshed"):
        resolved, rest = eofs(records, 5, OWN_BYTES + spare, weights=weights)
    assert words in caplog.text
    weights = np.eye(size) if weights is None else weights
    root = linalg.cholesky(weights)
    anomalies = (states - states.mean(axis=0)) @ root.T
    _, singular, expected = np.linalg.svd(anomalies, full_matrices=False)
    exact = singular**2 / count
    # The residual of an iterated function bounds the error of its variance, which
    # goes with its square; it ends when a millionth of the variance is at stake.
    iterated = "iterated" in way
    np.testing.assert_allclose(
        resolved.variance, exact[:5], rtol=1e-6 if iterated else 1e-12
    )
    found = root @ np.hstack([resolved.vectors, rest.vectors])
    np.testing.assert_allclose(found.T @ found, np.eye(found.shape[1]), atol=1e-12)
    overlap = np.abs(np.sum(found[:, :5].T * expected[:5], axis=1))
    assert np.all(1 - overlap < (1e-4 if iterated else 1e-12))
    # The share is held, by as many as it takes.
    left = exact[5:].sum()
    projected = anomalies @ found
    held = np.square(projected).sum() / count - exact[:5].sum()
    assert held >= 0.9 * left * (1 - 1e-3 if iterated else 1 - 1e-12)
    needed = int(np.searchsorted(exact[5:].cumsum(), 0.9 * left)) + 1
    assert rest.n_modes == needed or (iterated and needed <= rest.n_modes <= needed + 1)
    # The same bits the second time, and never all of the truth at once.
    again, _ = eofs(
        [Record(part) for part in parts],
        5,
        OWN_BYTES + spare,
        weights=None if not dense else weights,
    )
    np.testing.assert_array_equal(again.vectors, resolved.vectors)
    if iterated:
        assert records[0].largest <= spare / 8 / (8 * size)


def test_more_functions_than_fit_are_refused():
    states = steep((200, 3000), 0.5)  # nearly as much in each direction
    with pytest.raises(DataError, match=r"would do") as caught:
        eofs([Record(states)], 5, OWN_BYTES + 6e6, share=0.999)
    # What the message says would do, does.
    (said,) = re.findall(r"variance = (0\.\d+) would do", str(caught.value))
    eofs([Record(states)], 5, OWN_BYTES + 6e6, share=float(said))
    states = steep((400, 1000), 0.5)
    with pytest.raises(DataError, match=r"or raise \[limits\] memory") as caught:
        eofs([Record(states)], 5, OWN_BYTES + 4e6, share=0.999)
    (said,) = re.findall(r"ask for variance = (0\.\d+)", str(caught.value))
    eofs([Record(states)], 5, OWN_BYTES + 4e6, share=float(said))
    with pytest.raises(DataError, match="60 functions of 1000 coordinates and room"):
        eofs([Record(states)], 60, OWN_BYTES + 4e6)


# --- Measured -----------------------------------------------------------------

CHILD = r"""
import json, re, sys
import numpy as np
from pathlib import Path
from eddyshed.reduce import contract
from eddyshed.reduce.split import split_truth, unresolved_series
from eddyshed.reduce import stages  # all that the command loads
from eddyshed.solver.record import open_record
from types import SimpleNamespace
from eddyshed.reduce.settings import EofSettings, LimitsSettings, UnresolvedSettings

class Still:
    def __init__(self, size):
        self.size = size
    def forcing(self, t):
        return np.zeros(self.size)
    def linear(self, z):
        return -z
    def bilinear(self, u, w):
        return np.zeros(np.broadcast(u, w).shape)
    def inner(self, u, w):
        return np.einsum("...a,...a", u, w)

def high_water():
    # Peak resident memory of this process [B]: what getrusage tells a new process
    # starts at the peak of the one that it came from.
    status = Path("/proc/self/status").read_text()
    return 1024 * int(re.search(r"VmHWM:\s*(\d+) kB", status)[1])

# Finding the inner product takes as many products as there are coordinates.
contract._diagonal = lambda model: np.ones(model.size)
path, memory, share = Path(sys.argv[1]), float(sys.argv[2]), float(sys.argv[3])
before = high_water()
record = open_record(path)
model = Still(record.size)
config = SimpleNamespace(
    resolved=EofSettings(modes=4),
    unresolved=UnresolvedSettings(variance=share),
    limits=LimitsSettings(memory=memory),
)
split = split_truth(config, model, [record])
y = unresolved_series(split, model, [record], memory)
peak = high_water()
print(json.dumps({
    "before": before, "peak": peak, "modes": split.unresolved.n_modes,
    "variance": split.resolved.variance.tolist(), "shares": split.shares,
}))
"""


def write_truth(path, count, size, rank=12, seed=5):
    """A truth of known functions, a piece at a time; returns their variances."""
    rng = np.random.default_rng(seed)
    directions = linalg.qr(rng.standard_normal((size, rank)), mode="economic")[0]
    deviations = 2.0 ** -np.arange(rank)
    # Series that are orthogonal to the last digit: cosines of whole periods.
    times = np.arange(count)
    series = np.sqrt(2) * np.cos(
        2 * np.pi * np.outer(times + 0.5, np.arange(1, rank + 1)) / count
    )
    series *= deviations
    with h5py.File(path, "w") as file:
        file.attrs.update(
            {
                "eddyshed_kind": "truth",
                "eddyshed_schema": 1,
                "complete": True,
                "steps_done": 1,
                "steps_total": 1,
                "config_json": "{}",
            }
        )
        add_time(file, "time", times.astype(float))
        add_scale(file, "coordinate", np.arange(size), long_name="index")
        half = count // 2
        layout = h5py.VirtualLayout(shape=(count, size), dtype=float)
        for part, (start, stop) in enumerate(((0, half), (half, count))):
            name = path.with_name(f"part-{part}.h5")
            with h5py.File(name, "w") as inner:
                held = inner.create_dataset("state", (stop - start, size), float)
                for first in range(start, stop, 200):
                    last = min(first + 200, stop)
                    held[first - start : last - start] = (
                        series[first:last] @ directions.T
                    )
            layout[start:stop] = h5py.VirtualSource(
                name.name, "state", shape=(stop - start, size)
            )
        file.create_virtual_dataset("state", layout)
        for axis, scale in zip(file["state"].dims, ("time", "coordinate"), strict=True):
            axis.attach_scale(file[scale])
    return deviations**2


@pytest.mark.slow
@pytest.mark.skipif(sys.platform != "linux", reason="Linux tells a process its peak")
def test_memory_stays_within_the_budget(tmp_path):
    # Four times the budget; neither of the two matrices would fit.
    count, size, path, memory = 6400, 20_000, tmp_path / "truth.h5", 2.56e8
    truth_bytes = 8 * count * size
    assert truth_bytes >= 4 * memory
    variance = write_truth(path, count, size)
    done = subprocess.run(
        [sys.executable, "-c", CHILD, str(path), str(memory), "0.99"],
        capture_output=True,
        text=True,
        check=True,
    )
    found = json.loads(done.stdout)
    assert found["peak"] < 1.2 * memory
    # And the functions are those that were put in, to the round-off of a long sum.
    np.testing.assert_allclose(found["variance"], variance[:4], rtol=1e-6)
