"""A stranger's model, basis and closure, through the command line alone."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

from eddyshed.reduce.cli import main

MODULE = '''
"""A convection model of three variables, and ways to reduce it."""

import numpy as np

from eddyshed.reduce import ReducedModel


class Convection:
    """E. N. Lorenz (1963), J. Atmos. Sci. 20, 130, eq. 25 to 27."""

    size = 3
    energy_conserving = True  # Y and Z feed each other
    labels = ("X", "Y", "Z")

    def __init__(self, prandtl=10.0, heating=28.0, aspect=8 / 3):
        self.matrix = np.array(
            [[-prandtl, prandtl, 0.0], [heating, -1.0, 0.0], [0.0, 0.0, -aspect]]
        )

    def forcing(self, t):
        return np.zeros(3)

    def linear(self, z):
        return z @ self.matrix.T

    def bilinear(self, u, w):
        made = np.zeros(np.broadcast_shapes(u.shape, w.shape))
        made[..., 1] = -(u[..., 0] * w[..., 2] + w[..., 0] * u[..., 2]) / 2
        made[..., 2] = (u[..., 0] * w[..., 1] + w[..., 0] * u[..., 1]) / 2
        return made

    def inner(self, u, w):
        return np.sum(u * w, axis=-1)


class Turned:
    """One direction between X and Y."""

    labels = ("between",)

    def __init__(self, model, angle):
        self.vectors = np.array([[np.cos(angle)], [np.sin(angle)], [0.0]])


class Skewed:
    def __init__(self, model):
        self.vectors = np.ones((3, 1))


class Flat:
    def __init__(self, model):
        self.vectors = np.eye(3)


def wind_down(data, strength=1.0):
    """Damping by hand, with the noise of the unresolved modes on top.

    More is not known.
    """
    nx, process = data.operators.nx, data.noise.process
    return ReducedModel(
        name="whatever",
        x_forcing=np.zeros(nx),
        x_from_x=-strength * np.eye(nx),
        x_from_xx=np.zeros((nx, nx, nx)),
        x_from_y=data.operators.A12,
        rate=process.rate,
        covariance=process.covariance,
    )


def wrong_kind(data):
    return 3.0


def wrong_size(data):
    return ReducedModel(
        name="wide",
        x_forcing=np.zeros(2),
        x_from_x=np.zeros((2, 2)),
        x_from_xx=np.zeros((2, 2, 2)),
    )


class Lopsided(Convection):
    """Its B is not symmetric."""

    def bilinear(self, u, w):
        return super().bilinear(u, w) + u[..., :1] * w
'''

CONFIG = """
name = "stranger"
seed = 5

[ocean]
kind = "mine:Convection"
options = { prandtl = 10.0 }

[initial]
kind = "mode"
mode = "Y"
energy = "10 m2 s-2"

[time]
step = "0.01 s"
spin_up = "10 s"
duration = "100 s"
energy_bound = "1e5 m2 s-2"

[output]
state_every = "0.02 s"

[resolved]
kind = "mine:Turned"
options = { angle = 0.7 }

[closures]
use = ["bare", "residual", "mine:wind_down"]
options = { "mine:wind_down" = { strength = 0.5 } }

[benchmark]
members = 2
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A folder as a stranger has it: a module and a config."""
    place = tmp_path_factory.mktemp("stranger")
    (place / "mine.py").write_text(MODULE)
    (place / "config.toml").write_text(CONFIG)
    return place


def eddyshed(folder, *arguments):
    command = [Path(sys.executable).with_name("eddyshed"), *arguments]
    return subprocess.run(
        command,
        cwd=folder,
        env={**os.environ, "PYTHONDONTWRITEBYTECODE": "1"},
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )


@pytest.fixture(scope="module")
def study(folder):
    result = eddyshed(folder, "study", "config.toml", "--allow-hooks", "--quiet")
    assert result.returncode == 0, result.stderr
    return folder / "runs" / "stranger", result.stdout


def test_a_stranger_brings_model_basis_and_closure(study):
    place, printed = study
    assert "mine:wind_down" in printed
    report = (place / "report.html").read_text()
    assert "mine:Convection, a model of the user" in report
    assert "Damping by hand, with the noise of the unresolved modes on top" in report
    with h5py.File(place / "closures.h5") as file:
        made = file["mine:wind_down"]
        np.testing.assert_array_equal(made["x_from_x"], [[-0.5]])
        assert made.attrs["name"] == "mine:wind_down"
        # d/dt of c X + s Y holds c s (prandtl + heating) - c^2 prandtl - s^2 along
        # itself, less s c Zbar from the mean of Z, which the study found.
        c, s = np.cos(0.7), np.sin(0.7)
        with h5py.File(place / "split.h5") as split:
            mean = split["split/mean"][...]
            assert split["split/resolved"].attrs["labels"] == '["between"]'
        expected = c * s * (10 + 28 - mean[2]) - 10 * c**2 - s**2
        np.testing.assert_allclose(file["operators/A11"][...], [[expected]], rtol=1e-12)
    # What is known of the flow: the mean of Z lies near its value at rest,
    # heating - 1, from below; dZ/dt has mean zero, so <X Y> = aspect <Z> exactly.
    assert 20 < mean[2] < 27
    with h5py.File(place / "truth" / "member-000.h5") as file:
        state = file["state"][...]
        assert file["label"].asstr()[...].tolist() == ["X", "Y", "Z"]
        energy = file["energy"][...]
    np.testing.assert_allclose(energy, (state**2).sum(axis=1) / 2, rtol=1e-14)
    flux = (state[:, 0] * state[:, 1]).mean()
    # The mean of dZ/dt is that of the ends over 100 s: a range of 50 at most.
    assert abs(flux - 8 / 3 * state[:, 2].mean()) < 50 / 100 + 0.1
    entries = json.loads((place / "benchmark.json").read_text())["closures"]
    assert [entry["name"] for entry in entries] == [
        "bare",
        "residual",
        "mine:wind_down",
    ]
    assert entries[2]["summary"] is not None


def test_fingerprints_hold_the_bytes_of_the_module(study, folder):
    arguments = ("reduce", "config.toml", "--allow-hooks")
    again = eddyshed(folder, *arguments)
    assert "reduce: up to date" in again.stderr
    stronger = 'closures.options={"mine:wind_down"={strength=1.0}}'
    other = eddyshed(folder, *arguments, "--set", stronger)
    assert "was made from other settings" in other.stderr
    module = folder / "mine.py"
    text = module.read_text()
    try:
        module.write_text(text + "\n# a remark\n")
        changed = eddyshed(folder, *arguments)
        # The truth belongs to the old module: it is not overwritten.
        assert changed.returncode == 2
        assert "ocean.sha256: was" in changed.stderr
    finally:
        module.write_text(text)


def test_foreign_code_runs_only_if_it_is_allowed(folder):
    (folder / "loud.py").write_text("print('I ran')\n")
    result = eddyshed(folder, "check", "config.toml", "--set", "ocean.kind=loud:Model")
    assert result.returncode == 2
    assert "I ran" not in result.stdout
    assert "--allow-hooks" in result.stderr
    assert "loud:Model" in result.stderr
    assert "mine:wind_down" in result.stderr


@pytest.mark.parametrize(
    ("override", "complaint"),
    [
        ("ocean.kind=nowhere:Model", "module nowhere cannot be imported .* run in the"),
        ("ocean.kind=mine:Model", r"has no class or function Model; it has Convection"),
        ("ocean.kind=mine:a.b", "no name of a hook; write kind = "),
        ("ocean.kind=mine", "unknown; .*or your own"),
        ("ocean.options={heat=1.0}", r"unexpected keyword .*options given: heat"),
        ("ocean.rayleigh=28.0", 'unknown key "rayleigh" .*options = { rayleigh'),
        ("ocean.kind=mine:Lopsided", "breaks .*promise.*bilinear"),
        ("ocean.kind=mine:wind_down", "unexpected keyword argument .prandtl"),
        ("ocean.options={when=2020-01-01}", "holds a date"),
        ("resolved={kind='mine:Skewed'}", "off from orthonormal by"),
        ("resolved={kind='mine:Flat'}", r"shape \(3, 3\), must be \(3, n\)"),
        ("resolved={kind='fourier', up_to=2}", "needs a space"),
        ("closures.use=['mine:none']", "no class or function none"),
        ("output.fields_every=0.1 s", "needs a grid"),
        ("initial={kind='noise', energy='1 m2 s-2', band=[1, 2]}", "use kind = .mode"),
        ("closures.use=['bare']", "no closure of your own among those in use"),
    ],
)
def test_what_is_wrong_with_a_hook_is_said_before_anything_runs(
    override, complaint, folder, monkeypatch, capsys
):
    monkeypatch.chdir(folder)
    monkeypatch.syspath_prepend(str(folder))
    if "closures.use=['mine" in override:
        override += "\nclosures.options={}"
    sets = [part for one in override.splitlines() for part in ("--set", one)]
    code = main(["check", "config.toml", "--allow-hooks", *sets])
    said = " ".join(capsys.readouterr().err.split())
    assert code == 2, said
    assert re.search(complaint, said), said


@pytest.mark.parametrize(
    ("name", "complaint"),
    [
        ("wrong_kind", "returned a float, must be a ReducedModel"),
        ("wrong_size", "a model of 2 coordinates, must have the 1 resolved"),
    ],
)
def test_what_a_closure_returns_is_looked_at(
    name, complaint, study, folder, monkeypatch, capsys
):
    monkeypatch.chdir(folder)
    monkeypatch.syspath_prepend(str(folder))
    sets = ("--set", f"closures.use=['mine:{name}']", "--set", "closures.options={}")
    assert main(["reduce", "config.toml", "--allow-hooks", "--quiet", *sets]) == 2
    assert complaint in capsys.readouterr().err
