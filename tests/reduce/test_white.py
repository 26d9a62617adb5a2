"""The white closure: constants, sizes of its terms, notes, and what is left out."""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from closure_cases import no_noise, random_case
from splits import resolved_only
from toys import random_model

from eddyshed.reduce.closures import CLOSURES, DIAGNOSTICS, closure
from eddyshed.reduce.closures.data import ClosureData
from eddyshed.reduce.closures.white import stability_notes
from eddyshed.reduce.diffusion import DiffusionModel
from eddyshed.reduce.homogenised import DRIFT_TERMS, TERMS, white_limit
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.polynomial import Polynomial
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.settings import ClosuresSettings, StudyConfig
from eddyshed.reduce.simulation import simulate, step_rule
from eddyshed.reduce.statistics.correlation import integral_time
from eddyshed.reduce.store import read_one, write_all
from eddyshed.reduce.written import written
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.randomness import stream

UNIT = "[share of rms tendency]"


def test_white_is_the_limit_of_coloured():
    data, _ = random_case(calibrated=False)
    coloured, white = closure("coloured")(data), closure("white")(data)
    limit = white_limit(coloured).equation()
    # They differ in constants only: what is of the first degree in x through the
    # constant of y, and the mean of the quadratic terms.
    np.testing.assert_array_equal(white.noise, limit.noise)
    for degree in ("quadratic", "cubic"):
        np.testing.assert_array_equal(
            getattr(white.drift, degree), getattr(limit.drift, degree)
        )
    assert white.labels == data.split.resolved.labels
    # Cubic, multiplicative: the case is not a trivial one.
    assert np.any(white.drift.cubic)
    assert not white.is_additive


def test_constants_are_those_of_the_truth():
    data, (y,) = random_case(calibrated=False)
    white, op = closure("white")(data), data.operators
    gamma, c = data.noise.process.rate, data.noise.process.covariance
    at_rest = -np.einsum("mjk,jk->m", op.B211, data.covariance_x)
    p = np.linalg.solve(gamma, c)
    # The drift at x = 0, by hand: the covariance is that of the truth, and y follows
    # x so that its mean along the truth vanishes.
    expected = (
        op.F1
        + np.einsum("imn,tm,tn->i", op.B122, y, y, optimize=True) / len(y)
        + op.A12 @ np.linalg.solve(gamma, at_rest)
        + 2 * np.einsum("ijm,mn,jn->i", op.B112, p, op.A12)
    )
    np.testing.assert_allclose(white.drift.constant, expected, rtol=1e-9, atol=1e-9)
    mean = np.linalg.solve(
        gamma, at_rest + np.einsum("mjk,jk->m", op.B211, data.covariance_x)
    )
    np.testing.assert_allclose(mean, 0, atol=1e-13)


@pytest.mark.parametrize("name", ["white", "white_open"])
def test_mean_calibration_makes_the_mean_drift_vanish(name):
    data, _ = random_case()
    white, x = closure(name)(data), data.split.x[0]
    size = np.abs(white.drift(x)).max()
    np.testing.assert_allclose(white.drift(x).mean(axis=0), 0, atol=1e-13 * size)
    free = closure(name)(replace(data, mean_calibration=False))
    shift = white.drift.constant - free.drift.constant
    typical = np.sqrt(np.mean(data.split.tendency[0] ** 2, axis=0))
    share = white.facts[f"mean calibration {UNIT}"]
    assert share == pytest.approx(np.max(np.abs(shift) / typical), rel=1e-9)
    assert share > 0.01
    assert any("mean calibration shifts" in note for note in white.notes)
    assert not any("mean calibration" in note for note in free.notes)
    np.testing.assert_array_equal(white.noise, free.noise)


def test_sizes_are_those_along_the_truth():
    data, y = random_case(calibrated=False)
    # A full rate turns, so that no term vanishes.
    noise = fit_ornstein_uhlenbeck(y, data.split.step, window=8.0, structure="full")
    data = replace(data, noise=noise)
    white, x = closure("white")(data), data.split.x[0]
    typical = np.sqrt(np.mean(data.split.tendency[0] ** 2, axis=0))
    assert set(white.facts) == {
        f"{term} {UNIT}" for term in ("slow", "mean calibration", *TERMS)
    }
    for term in DRIFT_TERMS:
        without = closure("white")(replace(data, leave_out=(term,)))
        made = white.drift(x) - without.drift(x)
        rms = np.sqrt(np.mean(made**2, axis=0))
        expected = np.max(rms / typical)
        assert white.facts[f"{term} {UNIT}"] == pytest.approx(expected, rel=1e-8), term
        assert without.facts[f"{term} {UNIT}"] == white.facts[f"{term} {UNIT}"]
        assert expected > 1e-3
        assert any(term in note for note in without.notes)
    time = integral_time(data.coupling, data.split.step).value
    for term in ("linear_noise", "quadratic_noise"):
        without = closure("white")(replace(data, leave_out=(term,)))
        made = white.diffusion(x) - without.diffusion(x)
        variance = np.einsum("tii->i", made) / len(x)
        expected = np.max(np.sqrt(variance / (2 * time)) / typical)
        assert white.facts[f"{term} {UNIT}"] == pytest.approx(expected, rel=1e-8)
        np.testing.assert_array_equal(
            without.drift.linear, white.drift.linear, err_msg=term
        )


def test_everything_can_be_left_out():
    data, _ = random_case(calibrated=False)
    alone = closure("white")(replace(data, leave_out=TERMS))
    op = data.operators
    assert not alone.noise.any()
    np.testing.assert_array_equal(alone.drift.constant, op.F1)
    np.testing.assert_array_equal(alone.drift.linear, op.A11)
    with pytest.raises(DataError, match=r"no term 'memory'.*levy_area_drift"):
        closure("white")(replace(data, leave_out=("memory",)))


def test_open_loops_differ_by_the_feedback_alone():
    data, _ = random_case()
    coloured, opened = closure("coloured")(data), closure("coloured_open")(data)
    for name in ("y_forcing", "y_from_x", "y_from_xx", "y_from_xy"):
        assert not getattr(opened, name).any()
    for name in ("x_forcing", "x_from_x", "x_from_xy", "x_from_yy", "rate"):
        np.testing.assert_array_equal(getattr(opened, name), getattr(coloured, name))
    data = replace(data, mean_calibration=False)
    closed = closure("white")(
        replace(data, leave_out=("linear_feedback", "quadratic_feedback"))
    )
    opened = closure("white_open")(data)
    np.testing.assert_array_equal(opened.noise, closed.noise)
    for degree in ("constant", "linear", "quadratic", "cubic"):
        np.testing.assert_array_equal(
            getattr(opened.drift, degree), getattr(closed.drift, degree)
        )
    assert not opened.drift.cubic.any()
    for model in (closure("coloured_open")(data), opened):
        assert any(note.startswith("open loop:") for note in model.notes)


def test_open_loop_says_how_fast_it_grows():
    # The bounds hold the growth of x.x by drift and noise together, at any large x.
    data, _ = random_case()
    model = closure("white_open")(data)
    (note,) = (note for note in model.notes if note.startswith("far from rest"))
    low, high = re.search(r"at (\S+) to (\S+) s-1", note).groups()
    low, high = float(low), float(high)
    rng = np.random.default_rng(111)
    for x in 1e6 * rng.standard_normal((50, model.nx)):
        change = 2 * x @ model.drift(x) + np.trace(model.diffusion(x))
        # The quadratic term does no work but for round-off, a share of 1e6.
        assert low - 0.1 < change / (x @ x) < high + 0.1
    assert ("without end" in note) == (low > 0)


def test_open_loops_are_made_only_if_asked_for():
    assert set(DIAGNOSTICS) <= set(CLOSURES)
    assert not set(DIAGNOSTICS) & set(ClosuresSettings().use)
    assert "white" in ClosuresSettings().use
    for name in DIAGNOSTICS:
        assert CLOSURES[name].startswith("diagnostic")


# --- Stability --------------------------------------------------------------


def cubic(nx=2):
    return Polynomial(constant=np.zeros(nx), cubic=-np.ones((nx,) * 4))


def test_the_sign_of_the_cubic_is_judged_by_the_rate():
    stable = np.array([[1.0, 5.0], [-5.0, 1.0]])
    # Eigenvalues 1 and 1, but a symmetric part of eigenvalues 1 +- 2.
    skewed = np.array([[1.0, 4.0], [0.0, 1.0]])
    assert stability_notes(cubic(), stable, conserving=True) == []
    (note,) = stability_notes(cubic(), skewed, conserving=True)
    assert "may feed large departures" in note
    assert "-1 s-1" in note
    (note,) = stability_notes(cubic(), stable, conserving=False)
    assert "does not declare" in note


def test_linear_growth_is_said_where_no_cubic_holds_it():
    rate = np.eye(2)
    grows = Polynomial(constant=np.zeros(2), linear=[[0.25, 1.0], [0.0, -1.0]])
    (note,) = stability_notes(grows, rate, conserving=True)
    assert "grows at 0.25 s-1" in note
    assert "linearly unstable" in note
    decays = Polynomial(constant=np.zeros(2), linear=[[-0.25, 9.0], [0.0, -1.0]])
    assert stability_notes(decays, rate, conserving=True) == []
    assert stability_notes(cubic(), rate, conserving=True) == []


def test_an_unstable_closure_is_made_runs_and_is_lost():
    # The model grows, says so, and its members are lost.
    data, _ = random_case()
    data = replace(data, leave_out=("linear_feedback", "quadratic_feedback"))
    grown = data.operators.A11 + 5 * np.eye(3)
    data = replace(data, operators=replace(data.operators, A11=grown))
    model = closure("white")(data)
    assert any("linearly unstable" in note for note in model.notes)
    # It is the equation's own growth, and what the noise induces: nothing was tuned.
    np.testing.assert_allclose(
        model.drift.linear - white_limit_linear(data), grown, rtol=0, atol=1e-12
    )
    scale = data.split.x[0].std(axis=0)
    step, every = step_rule(model, scale, interval=0.5)
    run = simulate(
        model,
        data.split.x[0, :4],
        step=step,
        n_steps=20 * every,
        every=every,
        streams=[stream(112, member, "test") for member in range(4)],
        bound=100 * float(np.abs(data.split.x).max()),
    )
    assert len(run.lost) == 4


def white_limit_linear(data):
    """Linear noise-induced drift of the closure."""
    still = replace(data, operators=replace(data.operators, A11=np.zeros((3, 3))))
    return closure("white")(still).drift.linear


# --- Without unresolved modes, without sampling -----------------------------


def test_without_noise_it_is_the_truncation():
    x = np.random.default_rng(113).standard_normal((500, 3))
    model = random_model(np.random.default_rng(114), 3)
    data = ClosureData(
        model=model,
        split=resolved_only(x, rate=np.ones_like(x)),
        operators=galerkin(model, np.eye(3), np.zeros((3, 0)), np.zeros(3)),
        noise=no_noise(),
        covariance_y=np.zeros((0, 0)),
        covariance_xy=np.zeros((3, 0)),
        mean_calibration=False,
    )
    white = closure("white")(data)
    assert not white.noise.any()
    np.testing.assert_array_equal(white.drift.linear, data.operators.A11)


# --- Config, files and words ------------------------------------------------


def test_an_unknown_term_is_one_clear_error():
    text = (Path(__file__).parents[1] / "tiny.toml").read_text(encoding="utf-8")
    text += '\n[closures.white]\nleave_out = ["levy_area"]\n'
    with pytest.raises(ConfigError) as caught:
        parse_config(text, StudyConfig, "tiny.toml")
    words = str(caught.value)
    assert "closures.white" in words
    assert "levy_area" in words
    for term in TERMS:
        assert term in words


def test_each_kind_of_model_reads_back_as_itself(tmp_path):
    data, _ = random_case()
    made = {name: closure(name)(data) for name in ("coloured", "white")}
    path = tmp_path / "closures.h5"
    write_all(path, "stamp", "Title", "closures", made)
    kinds = (ReducedModel, DiffusionModel)
    for name, kind in zip(made, kinds, strict=True):
        back = read_one(path, "closures", name, *kinds)
        assert type(back) is kind
        assert back.notes == made[name].notes
        assert back.facts == made[name].facts
    np.testing.assert_array_equal(back.noise, made["white"].noise)
    np.testing.assert_array_equal(back.drift.cubic, made["white"].drift.cubic)
    assert back.labels == data.split.resolved.labels
    with pytest.raises(DataError, match="cannot be read"):
        read_one(path, "closures", "white", ReducedModel)


def test_an_equation_is_written_in_both_senses():
    noise = np.zeros((3, 2, 3, 2))
    noise[0, 0, 0, 0] = 0.5
    noise[2, 0, 2, 0] = 2.0  # a11 = 0.5 + 2 x2^2
    noise[1, 1, 1, 1] = 4.0  # a22 = 4 x1^2
    noise[2, 0, 1, 1] = noise[1, 1, 2, 0] = -2.0  # a12 = -2 x1 x2
    model = DiffusionModel(
        name="white",
        drift=Polynomial(
            constant=[0.25, 0.0],
            linear=[[-1.0, 1e-9], [0.0, 3.0]],
            quadratic=[[[0, 1], [1, 0]], [[-1.5, 0], [0, 0]]],
            cubic=np.einsum("ij,k,l->ijkl", -np.eye(2), [0, 1], [0, 1]),
        ),
        noise=noise,
        labels=("jet", "wave"),
    )
    text = written(model, np.ones(2))
    lines = [line.strip() for line in text.splitlines()]
    assert "x1 = jet, typically 1" in lines
    # The derivative of the noise along itself takes x1 and x2 by half of
    # noise[1 + j, i, p, j]: 1/2 noise[2, 0, 1, 1] x1 and 1/2 noise[1, 1, 2, 0] x2.
    ito, stratonovich = (
        lines.index("In the sense of Ito:"),
        lines.index("In the sense of Stratonovich (same noise):"),
    )
    assert lines[ito + 2] == "dx1/dt = 0.25 - 1 x1 + 2 x1 x2 - 1 x1 x2^2 + noise"
    assert lines[ito + 3] == "dx2/dt = 3 x2 - 1.5 x1^2 - 1 x2^3 + noise"
    assert lines[stratonovich + 2] == "dx1/dt = 0.25 + 2 x1 x2 - 1 x1 x2^2 + noise"
    assert lines[stratonovich + 3] == "dx2/dt = 4 x2 - 1.5 x1^2 - 1 x2^3 + noise"
    assert "a1,1 = 0.5 + 2 x2^2" in lines
    assert "a1,2 = - 2 x1 x2" in lines
    assert "a2,2 = 4 x1^2" in lines


def test_negligible_terms_are_not_written():
    noise = np.zeros((3, 2, 3, 2))
    noise[0, 0, 0, 0] = noise[0, 1, 0, 1] = 1.0
    noise[0, 0, 0, 1] = noise[0, 1, 0, 0] = 1e-4
    model = DiffusionModel(
        name="white",
        drift=Polynomial(constant=np.zeros(2), linear=[[-1.0, 1e-5], [1e-5, -1.0]]),
        noise=noise,
    )
    text = written(model, np.ones(2))
    assert "a1,2" not in text
    assert "dx1/dt = - 1 x1 + noise" in text
    # At typical sizes: a small coefficient of a large coordinate counts.
    assert "1e-05 x2" in written(model, np.array([1.0, 1e4]))
    assert "the same, for the noise does not change" in text
