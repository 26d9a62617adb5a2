"""The victims, and what a run that nobody disturbs records."""

import sys
from pathlib import Path

import pytest
from tiny_truth import config_of, contents

from eddyshed.solver.truth import run_member

# Makes `from victims import ...` work.
sys.path.insert(0, str(Path(__file__).parent))
from victims import OVERRIDES, Victims


@pytest.fixture(scope="session")
def victims(tmp_path_factory):
    made = Victims(tmp_path_factory.mktemp("victims"))
    yield made
    made.close()


@pytest.fixture(scope="session")
def whole(tmp_path_factory):
    """What a run that nobody disturbs records."""
    folder = tmp_path_factory.mktemp("whole")
    assert run_member(config_of(*OVERRIDES), 0, folder)
    return contents(folder)
