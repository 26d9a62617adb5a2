"""Each finding on systems that keep an assumption, and that break it alone.

A light version of ``python -m tests.benchmarks.audit_calibration``, which
draws hundreds of records and prints shares.
"""

import zlib

import numpy as np
import pytest
from audit_systems import SYSTEMS
from scipy import stats

REPLICAS = 12
CHANCE = 1e-4  # that a test fails although the finding is as good as it should be


def verdicts(name, degree, length, replicas=REPLICAS):
    rng = np.random.default_rng([zlib.crc32(name.encode()), len(degree)])
    system = SYSTEMS[name][0]
    return [system(degree, length, rng).verdict for _ in range(replicas)]


@pytest.mark.parametrize("name", SYSTEMS)
def test_what_is_kept_does_not_fail(name):
    # At most 5 % false alarms.
    found = verdicts(name, "keeps", SYSTEMS[name][2])
    assert stats.binom.sf(found.count("fails") - 1, REPLICAS, 0.05) > CHANCE
    # In the long record it is seen to hold, most of the time.
    assert found.count("holds") >= REPLICAS / 2


@pytest.mark.parametrize("name", [name for name in SYSTEMS if SYSTEMS[name][1]])
def test_what_lies_on_the_threshold_seldom_fails(name):
    found = verdicts(name, "edge", SYSTEMS[name][2])
    assert stats.binom.sf(found.count("fails") - 1, REPLICAS, 0.05) > CHANCE


@pytest.mark.parametrize("name", SYSTEMS)
def test_what_is_broken_is_found(name):
    # At least 90 % of the time.
    found = verdicts(name, "breaks", SYSTEMS[name][2])
    assert stats.binom.cdf(found.count("fails"), REPLICAS, 0.9) > CHANCE


@pytest.mark.parametrize("name", ["separation", "record: means", "fourth moments"])
def test_more_data_leave_less_undecided(name):
    length = SYSTEMS[name][2]
    open_short = verdicts(name, "keeps", length / 4).count("undecided")
    open_long = verdicts(name, "keeps", 4 * length).count("undecided")
    assert open_short > open_long == 0
