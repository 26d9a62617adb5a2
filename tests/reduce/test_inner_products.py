"""A study in another inner product, from its config to its report."""

import json
from pathlib import Path

import numpy as np
import pytest

from eddyshed.reduce.cli import main
from eddyshed.reduce.preflight import model_of
from eddyshed.reduce.settings import StudyConfig
from eddyshed.reduce.split import Split
from eddyshed.reduce.store import read_one
from eddyshed.solver.config import read_config

TINY = Path(__file__).parents[1] / "tiny.toml"
SHORT = (
    "time.spin_up=160 d",
    "time.duration=2400 d",
    "unresolved.variance=0.6",
    "noise.window=40 d",
    'closures.use=["residual"]',
    "benchmark.members=2",
    "benchmark.duration=800 d",
)


def study(runs, product, command):
    """Run a short study in a product; the truth is shared by all of them."""
    overrides = [*SHORT, f'resolved.inner_product="{product}"']
    arguments = [part for one in overrides for part in ("--set", one)]
    assert main([command, str(TINY), "--runs", str(runs), "--quiet", *arguments]) == 0
    split = read_one(runs / "tiny" / "split.h5", "split", "split", Split)
    benchmark = json.loads((runs / "tiny" / "benchmark.json").read_text())
    model = model_of(read_config(TINY, StudyConfig, overrides).config)
    return split, benchmark, model


@pytest.mark.slow
def test_a_study_in_enstrophy(tmp_path, capsys):
    # The q of one wave is K times its velocity: each coordinate is K times what it
    # is in energy, its variance K^2 times, and times are the same.
    plain, first, _ = study(tmp_path, "energy", "benchmark")
    assert "variance [(m s-1)^2]" in capsys.readouterr().out
    split, second, model = study(tmp_path, "enstrophy", "study")
    shown = capsys.readouterr()
    assert "variance [(s-1)^2]" in shown.out
    assert "m s-1" not in shown.out
    page = (tmp_path / "tiny" / "report.html").read_text(encoding="utf-8")
    assert "variance [(s<sup>\N{MINUS SIGN}1</sup>)<sup>2</sup>]" in page
    k = np.sqrt(model.space.k_squared[:2])
    np.testing.assert_allclose(split.x, plain.x * k, rtol=1e-12)
    np.testing.assert_allclose(split.fine_x, plain.fine_x * k, rtol=1e-12)
    np.testing.assert_allclose(split.tendency, plain.tendency * k, rtol=1e-9)
    assert (first["unit"], second["unit"]) == ("m s-1", "s-1")
    for name, factor in (("integral_time", 1.0), ("variance", k**2)):
        one, other = (
            np.array(benchmark["truth"]["summary"][name]["value"])
            for benchmark in (first, second)
        )
        np.testing.assert_allclose(other, factor * one, rtol=1e-9)


@pytest.mark.parametrize("product", ["l2", "enstrophy"])
def test_a_product_that_the_ocean_lacks_is_refused_at_once(product, tmp_path, capsys):
    config = Path(__file__).parents[2] / "configs" / "convection.toml"
    override = f"resolved.inner_product={product}"
    arguments = ["study", str(config), "--runs", str(tmp_path), "--set", override]
    assert main(arguments) == 2
    shown = capsys.readouterr().err
    assert f'[resolved] inner_product = "{product}": this ocean has "energy"' in shown
    assert not (tmp_path / "convection" / "truth").exists()
