"""Every example in a docstring runs and prints what it says."""

import doctest
import importlib
import pkgutil

import pytest

import eddyshed.reduce
import eddyshed.solver

MODULES = [
    info.name
    for package in (eddyshed.solver, eddyshed.reduce)
    for info in pkgutil.walk_packages(package.__path__, package.__name__ + ".")
]


@pytest.mark.parametrize("name", MODULES)
def test_examples(name):
    result = doctest.testmod(importlib.import_module(name))
    assert result.failed == 0


def test_modules_were_found():
    # Both packages and their sub-packages: an empty walk would pass for ever.
    assert {"eddyshed.solver.spaces.periodic", "eddyshed.reduce.bases.eof"} <= set(
        MODULES
    )
