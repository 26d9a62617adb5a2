"""Reduced models beside the truth: how they are run, and how they may fail."""

import json
from types import SimpleNamespace

import numpy as np
import pytest
from splits import resolved_only

from eddyshed.reduce.benchmark import (
    LOST_BOUND,
    SPIN_UP_TIMES,
    compare,
    run_closure,
    truth_side,
)
from eddyshed.reduce.closures import CLOSURES
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.settings import BenchmarkSettings
from eddyshed.reduce.simulated import Simulated, load, save
from eddyshed.reduce.statistics.correlation import correlation_function
from eddyshed.solver.errors import DataError

STEP, SEED = 0.5, 5
MEAN = np.array([3.0, -1.0])
# A slow mode driven by fast noise: dx = -a x + y, of two equal modes.
DAMPING, RATE, VARIANCE = 0.1, 1.0, 0.05


def settings(**changes):
    return SimpleNamespace(
        benchmark=BenchmarkSettings(**{"members": 8, **changes}), seed=SEED
    )


def reduced(damping=DAMPING, **changes):
    fields = {
        "name": "residual",
        "x_forcing": np.zeros(2),
        "x_from_x": -damping * np.eye(2),
        "x_from_xx": np.zeros((2, 2, 2)),
        "x_from_y": np.eye(2),
        "rate": RATE * np.eye(2),
        "covariance": VARIANCE * np.eye(2),
    }
    return ReducedModel(**{**fields, **changes})


def silent(**changes):
    """A model without noise."""
    fields = {"x_from_y": None, "rate": None, "covariance": None, "name": "bare"}
    return reduced(**{**fields, **changes})


@pytest.fixture(scope="module")
def truth():
    """A record of the model itself, by its exact joint process."""
    a, g = DAMPING, RATE
    cross = VARIANCE / (a + g)
    rate = np.kron([[a, -1], [0, g]], np.eye(2))
    covariance = np.kron([[cross / a, cross], [cross, VARIANCE]], np.eye(2))
    process = OrnsteinUhlenbeck(rate=rate, covariance=covariance)
    x = process.simulate(8000, STEP, np.random.default_rng(31))[0][:, :2]
    return truth_side(resolved_only(x - x.mean(axis=0), step=STEP, mean=MEAN), SEED)


def run(model, truth, **changes):
    seen = []
    found = run_closure(
        settings(**changes), model, truth, progress=lambda *both: seen.append(both)
    )
    assert seen[-1][0] == seen[-1][1]
    return found


def test_the_truth_is_in_its_own_coordinates(truth):
    assert truth.series.shape == (1, 8000, 2)
    np.testing.assert_allclose(truth.series - MEAN, truth.split.fine_x, atol=1e-14)
    assert truth.step == STEP
    np.testing.assert_allclose(truth.summary.mean.value, MEAN, atol=1e-13)
    # Lags are dense at first and reach three times the slowest integral time.
    assert truth.lags[:5].tolist() == [0, 1, 2, 3, 4]
    assert np.all(np.diff(truth.lags) > 0)
    time = truth.summary.integral_time.value.max()
    assert truth.lags[-1] == round(3 * time / STEP)
    expected = correlation_function(truth.series, 7999)[truth.lags]
    np.testing.assert_allclose(truth.correlations(truth.series), expected, atol=1e-12)


def test_a_good_model_is_run_and_scored(truth):
    found = run(reduced(), truth)
    # Twice as long as the truth in all, at its interval, after the spin-up.
    assert found.series.shape == (8, 2 * 8000 // 8 + 1, 2)
    assert found.step == STEP
    time = truth.summary.integral_time.value.max()
    assert found.start == STEP * np.ceil(SPIN_UP_TIMES * time / STEP)
    assert found.lost == ()
    assert found.cost > 0
    entry = compare(settings(), "residual", truth, found)
    assert entry["verdict"]["word"] in ("indistinguishable", "close")
    assert entry["what"] == CLOSURES["residual"]
    assert len(entry["scores"]) == 4
    # A step by the rule is short enough, and half of it says so.
    assert entry["step"]["agrees"]
    assert entry["step"]["compared"] == 4
    assert "changes nothing beyond sampling" in entry["step"]["sentence"]
    assert entry["lost"] == []
    # Plain data, as the file needs it.
    assert json.loads(json.dumps(entry)) == entry
    # The variance of filtered red noise (Gardiner, ch. 3): within four errors.
    variance = VARIANCE / (DAMPING * (DAMPING + RATE))
    estimate = entry["summary"]["variance"]
    off = np.abs(np.array(estimate["value"]) - variance)
    assert np.all(off < 4 * np.array(estimate["error"]))


def test_a_duration_can_be_given(truth):
    found = run(reduced(), truth, duration=100.0, members=3)
    assert found.series.shape == (3, 201, 2)


def test_runs_repeat_to_the_bit_and_members_do_not_matter(truth):
    one = run(reduced(), truth, duration=50.0)
    again = run(reduced(), truth, duration=50.0)
    np.testing.assert_array_equal(one.series, again.series)
    other = run_closure(
        SimpleNamespace(benchmark=settings(duration=50.0).benchmark, seed=SEED + 1),
        reduced(),
        truth,
        progress=lambda *both: None,
    )
    assert not np.any(other.series == one.series)
    # Another closure has noise of its own.
    renamed = run(reduced(name="coloured"), truth, duration=50.0)
    assert not np.any(renamed.series == one.series)


def test_members_start_in_states_of_the_truth(truth):
    # Without any tendency they stay there.
    still = silent(damping=0.0)
    found = run(still, truth, duration=10.0)
    states = {
        tuple(row) for row in (truth.split.x[0] + truth.split.resolved_mean).tolist()
    }
    starts = {tuple(member[0]) for member in found.series.tolist()}
    assert starts <= states
    assert len(starts) == 8


# --- Failures ---------------------------------------------------------------


def failed(entry):
    assert entry["verdict"]["word"] == "failed"
    assert entry["summary"] is None
    assert entry["scores"] == []
    assert entry["verdict"]["count"] == 0
    return entry["verdict"]["reason"]


def test_a_model_that_blows_up_has_failed(truth):
    found = run(reduced(damping=-0.01), truth)
    entry = compare(settings(), "residual", truth, found)
    assert len(found.lost) == 8
    first = min(when for _, when in found.lost)
    assert failed(entry) == (
        "8 of 8 members blew up, beyond 10 times the largest excursion of the truth, "
        f"the first on day {first / 86400:.4g} of its clock"
    )
    assert entry["lost"] == [list(pair) for pair in found.lost]
    # Lost beyond ten times the largest excursion of the truth, and stopped there.
    largest = np.linalg.norm(truth.split.x, axis=2).max()
    size = np.linalg.norm(found.series - MEAN, axis=2)
    assert np.nanmax(size) <= LOST_BOUND * largest
    assert np.isnan(size[:, -1]).all()


def test_one_lost_member_is_enough(truth):
    found = run(reduced(), truth, duration=50.0)
    lost = Simulated(
        series=found.series,
        start=found.start,
        step=found.step,
        lost=((3, 172800.0), (5, 86400.0)),
        cost=found.cost,
    )
    reason = failed(compare(settings(), "coloured", truth, lost))
    assert reason.startswith("2 of 8 members blew up")
    assert reason.endswith("the first on day 1 of its clock")


def test_a_model_at_rest_has_failed(truth):
    # One mode decays by a dozen e-folding times in the spin-up, the other moves.
    damped = reduced(
        x_from_x=np.diag([-DAMPING, -0.5]), x_from_y=np.array([[1.0, 0], [0, 0]])
    )
    reason = failed(
        compare(settings(), "bare", truth, run(damped, truth, duration=200.0))
    )
    assert reason == "slow 1 comes to rest: it has no variance"


def test_a_model_without_noise_at_rest_is_scored_by_its_mean(truth):
    # It rests at its fixed point: 0.2 / 0.1 and 0.01 / 0.1 from the truth's mean.
    deviation = np.sqrt(truth.summary.variance.value)
    forced = silent(x_forcing=np.array([0.2 * deviation[0], 0.01]) * DAMPING)
    found = run(forced, truth, duration=500.0, members=4)
    verdict = compare(settings(), "damped", truth, found)["verdict"]
    assert verdict["word"] == "at rest"
    assert verdict["count"] == 2
    # Both lie within the tolerance of 0.25; a shift by a third does not.
    assert verdict["within_tolerance"] == 2
    assert "of slow 0, off by 0.2" in verdict["reason"]
    assert "response to forcing" in verdict["reason"]
    far = silent(x_forcing=np.array([-0.33 * deviation[0], 0.0]) * DAMPING)
    found = run(far, truth, duration=500.0, members=4)
    verdict = compare(settings(), "damped", truth, found)["verdict"]
    assert verdict["within_tolerance"] == 1
    assert "of slow 0, off by 0.33" in verdict["reason"]


def test_members_at_rest_in_different_places_are_at_rest(truth):
    # dx = x / 2 - x y, dy = x^2 - y: two points of rest, each reached by some.
    tensor = np.zeros((2, 2, 2))
    tensor[0, 0, 1] = tensor[0, 1, 0] = -0.5
    tensor[1, 0, 0] = 1.0
    bistable = silent(x_from_x=np.diag([0.5, -1.0]), x_from_xx=tensor)
    found = run(bistable, truth, duration=100.0)
    ends = found.series[:, -1, 0] - MEAN[0]
    np.testing.assert_allclose(np.abs(ends), np.sqrt(0.5), atol=1e-9)
    assert set(np.sign(ends)) == {-1, 1}
    verdict = compare(settings(), "bare", truth, found)["verdict"]
    assert verdict["word"] == "at rest"
    assert verdict["reason"].startswith("without noise slow 0 comes to rest")


def test_a_mode_that_never_moves_cannot_be_compared(truth):
    x = truth.split.x.copy()
    x[..., 1] = 0.0
    with pytest.raises(DataError, match="mode 1 is constant"):
        truth_side(resolved_only(x, step=STEP), SEED)


# --- The file of a simulation -----------------------------------------------


def test_simulations_are_kept(truth, tmp_path):
    found = run(reduced(damping=-0.2), truth, duration=50.0)
    path = tmp_path / "simulated" / "residual.h5"
    save(path, "stamp", "Title", found)
    again = load(path, "stamp")
    np.testing.assert_array_equal(again.series, found.series)
    assert np.isnan(again.series).any()
    for name in ("start", "step", "lost", "cost"):
        assert getattr(again, name) == getattr(found, name)
    assert load(path, "another") is None
    assert load(tmp_path / "none.h5", "stamp") is None
    path.write_bytes(path.read_bytes()[:-100])
    assert load(path, "stamp") is None
