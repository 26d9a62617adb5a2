"""The public names exist, say what they are, and cost nothing until used."""

import inspect
import subprocess
import sys

import pytest

import eddyshed.reduce
import eddyshed.solver

NAMES = [
    (package, name)
    for package in (eddyshed.solver, eddyshed.reduce)
    for name in package.__all__
]


@pytest.mark.parametrize(("package", "name"), NAMES)
def test_public_names(package, name):
    thing = getattr(package, name)
    assert thing.__name__ == name
    assert thing.__module__.startswith("eddyshed.")
    assert len(inspect.getdoc(thing)) > 20
    assert name in dir(package)


@pytest.mark.parametrize(
    ("package", "name"), [p for p in NAMES if inspect.isfunction(getattr(*p))]
)
def test_public_functions_document_their_parameters(package, name):
    function = getattr(package, name)
    text = inspect.getdoc(function)
    for parameter in inspect.signature(function).parameters:
        assert parameter in text, f"{name} does not say what {parameter} is"


def test_unknown_names_are_refused():
    with pytest.raises(AttributeError, match="has no attribute 'nonsense'"):
        _ = eddyshed.reduce.nonsense


def test_importing_the_packages_loads_nothing():
    script = (
        "import sys, eddyshed.solver, eddyshed.reduce;"
        "heavy = {'numpy', 'scipy', 'h5py', 'pyfftw'};"
        "print(sorted(heavy & set(sys.modules)))"
    )
    result = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert result.stdout.strip() == "[]"
