"""Every config that is shipped can be read, and its ocean built."""

from pathlib import Path

import numpy as np
import pytest

from eddyshed.reduce.settings import StudyConfig
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import read_config

CONFIGS = sorted((Path(__file__).parents[1] / "configs").glob("*.toml"))


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.stem)
def test_shipped_config(path):
    config = read_config(path, StudyConfig).config
    assert config.name == path.stem  # so that its run folder is found by its name
    assert "invented" in path.read_text(encoding="utf-8")
    ocean = build_ocean(config)
    assert ocean.size == len(ocean.labels)
    assert np.all(np.isfinite(ocean.forcing(0.0)))
