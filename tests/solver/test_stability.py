"""A step at which linear waves would grow is refused."""

import re

import numpy as np
import pytest
from scipy import linalg

from eddyshed.reduce.cli import main
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import DataError
from eddyshed.solver.exponential import (
    SCHEMES,
    ExponentialDifferencingRK4,
    stepper_of,
)
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.stability import (
    LinearWaves,
    growth_in_a_step,
    refuse_unstable_step,
)
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.truth import run_member

BASIN = """
name = "waves"
[grid]
space = "basin"
points = [12, 8]
lengths = ["3000 km", "2000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
[initial]
kind = "noise"
energy = "1e-12 m2/s2"
band = [1, 20]
[time]
step = "0.1 d"
spin_up = "0 d"
duration = "100 d"
[output]
state_every = "1 d"
"""
HILL = """
coriolis = "1e-4 s-1"
depth = "4 km"
[ocean.topography.hill]
kind = "bump"
height = "500 m"
radius = "400 km"
centre = ["1000 km", "1000 km"]
"""
CASES = {
    "beta in a basin": BASIN,
    "topography in a basin": BASIN.replace("[initial]", HILL + "[initial]"),
    "topography in a channel": BASIN.replace("[initial]", HILL + "[initial]").replace(
        '"basin"', '"channel"'
    ),
    "a current over topography": BASIN.replace(
        "[initial]", "mean_current_evolves = true" + HILL + "[initial]"
    ).replace('"basin"', '"periodic"'),
}


def config_of(text, *overrides):
    return parse_config(text, TruthConfig, "waves.toml", overrides).config


# Hairer & Wanner, Solving Ordinary Differential Equations II, section IV.2: where the
# classical method leaves the circle |R(x)| = 1 on the imaginary axis.
LIMIT = 2 * np.sqrt(2)
KINDS = {SCHEMES[0]: IntegratingFactorRK4, SCHEMES[1]: ExponentialDifferencingRK4}


def explicit_matrix(ocean):
    return ocean.explicit_linear(np.eye(ocean.size)).T


def radius(ocean, scheme, step):
    """Largest modulus of an eigenvalue of the step, written out as a matrix."""
    stepper = KINDS[scheme](LinearWaves(ocean), step)
    columns = np.eye(ocean.size)
    for column in columns:
        stepper.advance(0.0, column)
    return np.abs(linalg.eigvals(columns.T)).max()


@pytest.mark.parametrize("name", CASES)
def test_what_is_stepped_explicitly_does_no_work_and_has_a_bound(name):
    ocean = build_ocean(config_of(CASES[name]))
    matrix = explicit_matrix(ocean)
    # Round-off of transforms.
    scale = np.abs(matrix).max()
    np.testing.assert_allclose(matrix, -matrix.T, atol=1e-12 * scale)
    assert linalg.norm(matrix, 2) <= ocean.fastest_frequency * (1 + 1e-12)


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("name", CASES)
def test_waves_stay_below_the_limit_and_grow_above(name, scheme):
    # Without friction, and without beta where waves are turned exactly, nothing but
    # the explicit part is left, and both schemes are the classical method.
    exact = [] if "basin" in name else ["ocean.beta=0"]
    ocean = build_ocean(config_of(CASES[name], *exact))
    limit = LIMIT / linalg.norm(explicit_matrix(ocean), 2)
    for factor, allowed in ((0.99, True), (1.01, False)):
        step = factor * limit
        # Waves that topography leaves alone neither grow nor decay: round-off.
        assert (radius(ocean, scheme, step) <= 1 + 1e-12) == allowed
        z = np.random.default_rng(1).standard_normal(ocean.size)
        stepper, start = KINDS[scheme](LinearWaves(ocean), step), z @ z
        for _ in range(300):
            stepper.advance(0.0, z)
        # By the stability function the fastest wave grows by 7 % in a step, e^20.
        assert z @ z < start if allowed else z @ z > 1e6 * start
        if allowed:
            stepper_of(scheme, ocean, step)
            continue
        with pytest.raises(DataError, match="beyond the limit of stability") as caught:
            stepper_of(scheme, ocean, step)
        named = float(re.search(r"at most (\S+) s", str(caught.value)).group(1))
        # Three digits, after a search to a percent; growth of a thousandth in a
        # step is reached a tenth of a percent above the limit.
        assert 0.98 * limit < named < 1.001 * limit
        stepper_of(scheme, ocean, named)


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize(
    ("name", "friction"),
    [
        ("topography in a channel", ()),
        ("topography in a channel", ("ocean.drag=0.02 1/d",)),
        ("a current over topography", ()),
    ],
)
def test_exact_turning_and_friction_move_the_limit(name, friction, scheme):
    # With beta, which these spaces turn exactly, the limit is no longer that of the
    # explicit part; the step written out as a matrix tells.
    ocean = build_ocean(config_of(CASES[name], *friction))
    plain = LIMIT / linalg.norm(explicit_matrix(ocean), 2)
    seen = set()
    for factor in (0.1, 1.3):
        step = factor * plain
        expected = np.log(radius(ocean, scheme, step))
        # Never above the truth but for the oscillations of non-orthogonal modes, and
        # less by what is left of others that grow almost as fast.
        found = growth_in_a_step(KINDS[scheme], ocean, step)
        assert found < expected + 0.1 * abs(expected) + 1e-3
        if expected > 0.02:
            assert found > 0.5 * expected
            with pytest.raises(DataError, match="beyond the limit"):
                stepper_of(scheme, ocean, step)
        elif expected < 1e-4:
            stepper_of(scheme, ocean, step)
        seen.add(bool(expected > 0.02))
    assert seen == {False, True} or friction


def test_friction_that_holds_the_waves_is_believed():
    # |R(3i)| = 1.5 by the stability function 1 + x + x^2/2 + x^3/6 + x^4/24; a drag of
    # 1 in a step takes a factor e off.
    ocean = build_ocean(config_of(BASIN))
    step = 3.0 / linalg.norm(explicit_matrix(ocean), 2)
    damped = build_ocean(config_of(BASIN, f"ocean.drag={1 / step} 1/s"))
    for scheme in SCHEMES:
        assert radius(damped, scheme, step) < 1
        stepper_of(scheme, damped, step)
        assert radius(ocean, scheme, step) == pytest.approx(1.5, abs=0.1)
        with pytest.raises(DataError, match="beyond the limit"):
            stepper_of(scheme, ocean, step)


def test_oceans_whose_linear_part_is_exact_have_no_limit():
    ocean = build_ocean(config_of(BASIN.replace('"basin"', '"channel"')))
    assert ocean.explicit_linear(np.zeros(ocean.size)) is None
    stepper_of(SCHEMES[0], ocean, 1e9)
    refuse_unstable_step(IntegratingFactorRK4, object(), 1e9)


def test_check_and_runs_refuse_it(tmp_path, capsys):
    overrides = ["time.step=20 d", "time.duration=1000 d", "output.state_every=20 d"]
    config = config_of(BASIN, *overrides)
    with pytest.raises(DataError, match=r"\[time\] step = 1\.728e\+06 s is beyond"):
        run_member(config, 0, tmp_path / "truth")
    assert not (tmp_path / "truth").exists()
    path = tmp_path / "waves.toml"
    path.write_text(BASIN + '[resolved]\nkind = "eof"\nmodes = 2\n')
    arguments = [part for one in overrides for part in ("--set", one)]
    for command in ("check", "truth"):
        where = [] if command == "check" else ["--runs", str(tmp_path / "runs")]
        assert main([command, str(path), *where, *arguments]) == 2
        assert "beyond the limit of stability" in capsys.readouterr().err
    assert not (tmp_path / "runs").exists()
