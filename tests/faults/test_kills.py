"""Nothing acknowledged is lost, doubled or unreadable, whenever a run is killed.

More kills than the default few: ``pytest tests/faults --kills 200 -s``, which
also prints where they fell.
"""

import os
import signal
import time
from collections import Counter

import numpy as np
from survivors import check_what_is_there, finish
from victims import PHASES, look


def test_kills_at_random_moments(victims, whole, tmp_path, request):
    rng = np.random.default_rng(20)
    wanted, runs = request.config.getoption("kills"), 0
    fell = Counter()
    folder = tmp_path / "run-0"
    while sum(fell.values()) < wanted:
        pid = victims.start(folder)
        if rng.random() < 0.3:
            # From its start to its end a victim needs one or two seconds.
            time.sleep(rng.uniform(0, 1))
        else:
            victims.await_phase(rng.choice(PHASES[1:-1]))
            time.sleep(rng.uniform(0, 0.02))
        os.kill(pid, signal.SIGKILL)
        code, problem = victims.end()
        acknowledged, phase = look(victims.board)
        check_what_is_there(folder, whole, acknowledged)
        if code == -signal.SIGKILL:
            fell[phase] += 1
        else:
            assert (code, phase) == (0, "finished"), problem
            finish(folder, whole)
            runs += 1
            folder = tmp_path / f"run-{runs}"
    finish(folder, whole)
    print(f"\n{sum(fell.values())} kills, {runs + 1} runs:")  # noqa: T201
    for phase in PHASES:
        print(f"  {fell[phase]:4d} {phase}")  # noqa: T201
    assert sum(fell.values()) == wanted


def test_a_kill_in_each_phase(victims, whole, tmp_path):
    for phase in PHASES[1:-1]:
        victims.start(tmp_path, aim=(phase, 1))
        code, problem = victims.end()
        assert code == -signal.SIGKILL, problem
        acknowledged, where = look(victims.board)
        assert where == phase
        check_what_is_there(tmp_path, whole, acknowledged)
    finish(tmp_path, whole)
