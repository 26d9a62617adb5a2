"""What must hold of the files of a run, however it ended."""

import h5py
import numpy as np
from tiny_truth import assert_same_bits, config_of, contents
from victims import OVERRIDES

from eddyshed.solver.record import open_record
from eddyshed.solver.segments import member_paths, reached_step
from eddyshed.solver.truth import run_member

STEP = 8640.0  # seconds, a tenth of a day


def check_what_is_there(folder, whole, acknowledged):
    """Every file is whole, and together they are the start of the whole run."""
    index, segments = member_paths(folder, 0)
    for path in segments.glob("segment-*.h5"):
        with h5py.File(path) as file:
            file.visititems(lambda _, item: item[...] if hasattr(item, "dims") else 0)
            assert {"state", "random"} <= set(file["checkpoint"])
            assert file["checkpoint"].attrs["step"] == int(path.stem[-12:])
    assert reached_step(folder, 0) >= acknowledged
    if not index.exists():
        # Steps 0 to 4 are spin-up; the index needs a state.
        assert acknowledged < 5
        return
    found = contents(folder)
    assert found.keys() == whole.keys()
    for name, values in found.items():
        # The start, to the bit: nothing doubled, nothing left out, nothing NaN.
        known = whole[name]
        if values.shape != known.shape:
            known = known[: len(values)]
        np.testing.assert_array_equal(values, known, err_msg=name)
        if name.endswith("time"):
            last_sure = np.sum(whole[name] <= acknowledged * STEP * (1 + 1e-12))
            assert len(values) >= last_sure
    if len(found["time"]) > 1:
        open_record(index)


def finish(folder, whole):
    """The run goes on to its end, and no one could tell that it was killed."""
    assert run_member(config_of(*OVERRIDES), 0, folder)
    assert_same_bits(contents(folder), whole)
    left = [path.name for path in folder.rglob("*.partial")]
    assert left == []
