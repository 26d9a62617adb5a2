"""How forcing varies in time: exact values, and what is refused."""

import math

import pytest

from eddyshed.solver.time_functions import Ramp, Seasonal, Steady, Step, break_times


def test_seasonal_values():
    season = Seasonal(period=12.0, amplitude=0.5, phase=math.pi / 3)
    # 1 + cos(2 pi t / 12 + pi / 3) / 2 by hand.
    assert season.factor(0.0) == pytest.approx(1.25, rel=1e-15)
    assert season.factor(1.0) == pytest.approx(1.0, abs=1e-15)
    assert season.factor(4.0) == pytest.approx(0.5, rel=1e-15)
    # A million periods later it is the same but for the last bits of the time.
    assert season.factor(12e6 + 4.0) == pytest.approx(0.5, rel=1e-8)


def test_ramp_values():
    ramp = Ramp(start=10.0, end=30.0, before=2.0, after=-1.0)
    times = (0.0, 10.0, 15.0, 20.0, 30.0, 1e9)
    assert [ramp.factor(t) for t in times] == [2.0, 2.0, 1.25, 0.5, -1.0, -1.0]


def test_step_values():
    step = Step(at=10.0, before=0.25, after=3.0)
    assert [step.factor(t) for t in (0.0, 9.999, 10.0, 11.0)] == [0.25, 0.25, 3.0, 3.0]
    assert Steady().factor(7.0) == 1.0


@pytest.mark.parametrize("count", [3, 7, 49, 777, 123457])
def test_a_step_jumps_at_the_step_it_names(count):
    # 0.1 has no exact binary form: count * 0.1 and the decimal text of the product
    # may differ in their last bit, and the jump must not move because of it.
    length = 0.1 * 86400
    at = float(f"{count * 8640}")
    step = Step(at=at)
    assert step.factor(count * length) == 1.0
    assert step.factor((count - 1) * length + length * (1 - 2.0**-28)) == 0.0


def test_times_of_breaks():
    assert break_times(Ramp(start=1.0, end=2.0)) == {"start": 1.0, "end": 2.0}
    assert break_times(Step(at=3.0)) == {"at": 3.0}
    assert break_times(Seasonal(period=1.0, amplitude=0.1)) == {}


def test_a_ramp_that_ends_before_it_starts_is_refused():
    problems = list(Ramp(start=5.0, end=5.0).problems())
    assert len(problems) == 1
    assert "must be before" in problems[0]
