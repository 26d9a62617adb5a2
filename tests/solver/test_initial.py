"""States that a run may start from, and what is refused."""

import h5py
import numpy as np
import pytest

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.initial import starting_state
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.truth import run_member

TINY = """
name = "tiny"
[grid]
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
drag = "0.01 1/d"
[initial]
{initial}
[time]
step = "0.1 d"
spin_up = "0 d"
duration = "3 d"
[output]
state_every = "1 d"
"""


def config_of(initial, *overrides):
    text = TINY.format(initial=initial)
    return parse_config(text, TruthConfig, "tiny.toml", overrides).config


def start(initial, *overrides, member=0):
    config = config_of(initial, *overrides)
    ocean = build_ocean(config)
    return ocean, starting_state(config.initial, ocean, seed=config.seed, member=member)


def psi_on_grid(shape=(16, 16)):
    y, x = (np.arange(n) * 2 * np.pi / n for n in shape)
    return 1e3 * (np.cos(2 * x)[None, :] + np.sin(x)[None, :] * np.cos(3 * y)[:, None])


def test_rest():
    _, z = start('kind = "rest"')
    assert not z.any()


def test_noise_has_its_energy_band_and_stream():
    initial = 'kind = "noise"\nenergy = "0.001 m2/s2"\nband = [2, 3]'
    ocean, z = start(initial)
    assert z @ z / 2 == pytest.approx(1e-3, rel=1e-14)
    total = np.hypot(*ocean.waves[z != 0].T)
    assert (total.min(), total.max()) == (2, 3)
    np.testing.assert_array_equal(z, start(initial)[1])
    assert not np.array_equal(z, start(initial, member=1)[1])
    assert not np.array_equal(z, start(initial, "seed=2")[1])


def test_single_mode_is_a_cosine_with_its_phase_and_energy():
    mode = 'kind = "mode"\nmode = "cos 2,1"\nenergy = "0.02 m2/s2"\nphase = 0.7'
    ocean, z = start(mode)
    psi = ocean.fields(z)["streamfunction"]
    angle = np.arange(16) * 2 * np.pi / 16
    shape = np.cos(2 * angle[None, :] + angle[:, None] + 0.7)
    # Kinetic energy <|grad psi|^2> / 2 = a^2 K^2 / 4.
    amplitude = np.sqrt(4 * 0.02 / (5 * (2 * np.pi / 1e6) ** 2))
    np.testing.assert_allclose(psi, amplitude * shape, atol=1e-12 * amplitude)


def test_unknown_mode_is_answered_with_the_nearest():
    with pytest.raises(DataError, match=r'\[initial\] mode = "cos 2;1".*did you mean'):
        start('kind = "mode"\nmode = "cos 2;1"\nenergy = "1 m2/s2"')


@pytest.mark.parametrize("suffix", ["npy", "h5"])
def test_field_from_a_file(tmp_path, suffix):
    path = tmp_path / f"start.{suffix}"
    psi = psi_on_grid()
    if suffix == "npy":
        np.save(path, psi)
    else:
        with h5py.File(path, "w") as file:
            file["streamfunction"] = psi
    ocean, z = start(f'kind = "field"\npath = "{path}"')
    np.testing.assert_allclose(ocean.fields(z)["streamfunction"], psi, atol=1e-9)
    _, scaled = start(f'kind = "field"\npath = "{path}"\nenergy = "0.5 m2/s2"')
    assert scaled @ scaled / 2 == pytest.approx(0.5, rel=1e-14)
    np.testing.assert_allclose(scaled / np.linalg.norm(scaled), z / np.linalg.norm(z))


def test_bad_files_are_one_clear_error_each(tmp_path):
    def refused(path, match):
        with pytest.raises(DataError, match=match) as caught:
            start(f'kind = "field"\npath = "{path}"')
        assert str(path) in str(caught.value)
        assert str(caught.value).startswith("[initial]")

    shape, gap = tmp_path / "shape.npy", tmp_path / "gap.npy"
    np.save(shape, psi_on_grid((16, 18)))
    refused(shape, r"shape \(16, 18\).*\(16, 16\) \(y, x\)")
    field = psi_on_grid()
    field[3, 3] = np.nan
    np.save(gap, field)
    refused(gap, "not finite")
    words = tmp_path / "words.npy"
    np.save(words, np.full((16, 16), "x"))
    refused(words, "numbers of shape")
    text = tmp_path / "text.npy"
    text.write_text("no array")
    refused(text, "cannot be read as a NumPy array")
    refused(tmp_path / "missing.npy", "cannot be read as a NumPy array")
    refused(tmp_path / "missing.h5", "cannot be read as HDF5")
    other = tmp_path / "other.h5"
    with h5py.File(other, "w") as file:
        file["psi"] = field
    refused(other, 'no variable "streamfunction"; found: psi')


def test_fields_at_rest_cannot_be_scaled(tmp_path):
    np.save(tmp_path / "rest.npy", np.zeros((16, 16)))
    with pytest.raises(DataError, match="at rest"):
        start(f'kind = "field"\npath = "{tmp_path}/rest.npy"\nenergy = "1 m2/s2"')


NOISE = 'kind = "noise"\nenergy = "0.001 m2/s2"\nband = [1, 3]'


def test_end_of_an_earlier_run_goes_on_from_it(tmp_path):
    run_member(config_of(NOISE), 0, tmp_path / "long")
    run_member(config_of(NOISE, "time.duration=2 d"), 0, tmp_path / "short")
    index = tmp_path / "short" / "member-000.h5"
    later = config_of(f'kind = "run"\npath = "{index}"', "time.duration=1 d")
    run_member(later, 0, tmp_path / "later")
    with (
        h5py.File(tmp_path / "long" / "member-000.h5") as long,
        h5py.File(tmp_path / "later" / "member-000.h5") as other,
    ):
        # Nothing here depends on time, so it is the longer run to the bit.
        np.testing.assert_array_equal(other["state"][0], long["state"][2])
        np.testing.assert_array_equal(other["state"][1], long["state"][3])
    segment = sorted(index.parent.glob("member-000/segment-*.h5"))[-1]
    _, z = start(f'kind = "run"\npath = "{segment}"')
    with h5py.File(index) as file:
        np.testing.assert_array_equal(z, file["state"][-1])


def test_an_earlier_run_of_another_grid_or_box_is_refused(tmp_path):
    run_member(config_of(NOISE), 0, tmp_path)
    earlier = f'kind = "run"\npath = "{tmp_path}/member-000.h5"'
    with pytest.raises(DataError, match=r"coordinates.*use the ocean and grid of that"):
        start(earlier, "grid.points=[20, 20]")
    with pytest.raises(DataError, match="use the box of that run"):
        start(earlier, 'grid.lengths=["2000 km", "1000 km"]')
    with pytest.raises(DataError, match="no such file"):
        start(f'kind = "run"\npath = "{tmp_path}/nothing.h5"')


@pytest.mark.parametrize(
    ("initial", "match"),
    [
        ('kind = "mode"\nenergy = "1 m2/s2"', r"\[initial\] mode is missing"),
        ('kind = "field"', r"\[initial\] path is missing"),
        ('kind = "mod"', r'did you mean "mode"'),
        ('kind = "noise"\nenergy = "1 m2/s2"\nband = [3, 2]', "runs downwards"),
    ],
)
def test_bad_sections(initial, match):
    with pytest.raises(ConfigError, match=match):
        config_of(initial)
