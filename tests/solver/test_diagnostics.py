"""Budgets, spectra and fluxes: identities, and closed forms."""

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pytest
from toys import random_model

from eddyshed.solver.diagnostics import budget_of, gyres
from eddyshed.solver.errors import DataError
from eddyshed.solver.spectra import (
    isotropic_spectrum,
    shells,
    spectra_by_part,
    spectral_flux,
    zonal_spectrum,
)

UNITS = {
    "energy": "m2 s-2",
    "potential_energy": "m2 s-2",
    "energy_fed_by_stirring": "m2 s-2",
    "enstrophy": "s-2",
    "work": "m2 s-3",
    "dissipation": "m2 s-3",
    "enstrophy_work": "s-3",
}


def damped(times, rate=0.3, push=2.0):
    """Energy and its terms for dz/dt = -rate z + push, z(0) = 0."""
    z = push / rate * (1 - np.exp(-rate * times))
    return {"energy": z**2 / 2, "work": push * z, "dissipation": -rate * z**2}


def test_a_closed_budget_closes():
    times = np.linspace(0, 10, 2001)
    found = budget_of(times, damped(times), UNITS)
    assert set(found.terms) == {"work", "dissipation"}
    # Exact change; the terms by hand: integral of the work over the length.
    z_end = 2 / 0.3 * (1 - np.exp(-3))
    work = 4 / 0.3 * (10 - (1 - np.exp(-3)) / 0.3) / 10
    assert found.change.value == pytest.approx(z_end**2 / 20, rel=1e-13)
    # Trapezoidal rule: (step^2 / 12) times the change of slope, here 3e-6 of 8.
    assert found.terms["work"].value == pytest.approx(work, rel=1e-5)
    assert abs(found.residual.value) < 1e-5 * work
    # And it shows a source that nobody counted.
    hidden = budget_of(times, {**damped(times), "work": 0 * times}, UNITS)
    assert hidden.residual.value == pytest.approx(work, rel=1e-4)


def test_what_random_forcing_fed_is_a_difference_not_a_rate():
    times = np.linspace(0, 10, 101)
    series = damped(times)
    series["energy_fed_by_stirring"] = 5 + 0.25 * times
    series["energy"] = series["energy"] + 0.25 * times
    found = budget_of(times, series, UNITS)
    assert found.terms["stirring"].value == pytest.approx(0.25, rel=1e-13)
    assert abs(found.residual.value) < 1e-3


def test_only_rates_of_the_quantity_count():
    times = np.linspace(0, 1, 11)
    series = {
        **damped(times),
        "potential_energy": times,
        "enstrophy": 3 * times,
        "enstrophy_work": np.full(11, 3.0),
    }
    assert set(budget_of(times, series, UNITS).terms) == {"work", "dissipation"}
    found = budget_of(times, series, UNITS, "enstrophy")
    assert set(found.terms) == {"enstrophy_work"}
    assert found.residual.value == pytest.approx(0, abs=1e-14)
    assert found.rate_units == "s-3"


def test_errors_of_the_means_are_right():
    # White rates: the mean of n has standard error deviation / sqrt(n).
    rng = np.random.default_rng(8)
    count = 4001
    series = {"energy": np.zeros(count), "work": rng.standard_normal(count)}
    error = budget_of(np.arange(count) * 1.0, series, UNITS).terms["work"].error
    # From 20 batches it is known to 1 / sqrt(38) = 16 %: four of those.
    assert error == pytest.approx(1 / np.sqrt(count), rel=0.65)


def test_a_short_record_has_no_error_and_none_is_refused():
    series = {"energy": np.array([1.0, 2.0])}
    found = budget_of(np.array([0.0, 1.0]), series, UNITS)
    assert found.change.value == 1
    assert found.change.error == np.inf
    with pytest.raises(DataError, match="at least two records"):
        budget_of(np.array([0.0]), {"energy": np.array([1.0])}, UNITS)
    with pytest.raises(DataError, match="enstrophy budget"):
        budget_of(np.array([0.0, 1.0]), series, UNITS, "enstrophy")


@dataclass(frozen=True)
class Shelled:
    """A toy whose coordinates have wavenumbers."""

    toy: object
    waves: np.ndarray
    space: object

    @property
    def enstrophy_weights(self):
        return 1.0 + np.arange(self.size)

    @property
    def size(self):
        return self.toy.size

    def bilinear(self, u, w):
        return self.toy.bilinear(u, w)


SQUARE = SimpleNamespace(
    lengths=(2 * np.pi, 2 * np.pi), x_is_periodic=True, y_is_periodic=True, n_real=7
)


@pytest.fixture
def shelled():
    rng = np.random.default_rng(4)
    waves = np.array([[0, 1], [0, 1], [1, 0], [3, 4], [0, 2], [2, -2], [-3, 4]])
    return Shelled(random_model(rng, 7), waves, SQUARE), rng.standard_normal((3, 7))


def test_spectra_sum_to_the_energy(shelled):
    model, states = shelled
    energy = (states**2).sum(axis=-1) / 2
    spectrum = isotropic_spectrum(model, states)
    assert list(shells(model).index) == [1, 1, 1, 5, 2, 3, 5]
    np.testing.assert_array_equal(spectra_by_part(model, states)[:, 0], spectrum)
    np.testing.assert_allclose(spectrum.sum(axis=-1), energy, rtol=1e-14)
    np.testing.assert_allclose(
        spectrum[:, 5], (states[:, 3] ** 2 + states[:, 6] ** 2) / 2, rtol=1e-14
    )
    zonal = zonal_spectrum(model, states)
    expected = np.stack(
        [0 * energy, (states[:, :2] ** 2).sum(axis=1) / 2, states[:, 4] ** 2 / 2],
        axis=1,
    )
    np.testing.assert_allclose(zonal, expected, rtol=1e-14)


def test_no_zonal_flow_between_walls(shelled):
    model, states = shelled
    walled = Shelled(model.toy, np.abs(model.waves) + 1, SQUARE)
    with pytest.raises(DataError, match="periodic in x"):
        zonal_spectrum(walled, states)


def test_flux_is_what_large_scales_lose(shelled):
    model, states = shelled
    flux = spectral_flux(model, states)
    tendency = model.bilinear(states, states)
    low = shells(model).index <= 2
    lost = -(states * tendency)[:, low].sum(axis=1)
    np.testing.assert_allclose(flux[:, 2], lost, rtol=1e-12)
    # Advection conserves energy: nothing leaves the last shell, to round-off.
    assert np.all(np.abs(flux[:, -1]) < 1e-13 * np.abs(states * tendency).sum(axis=1))
    assert np.all(np.abs(flux[:, 2]) > 1e-3)


def test_rings_are_as_wide_as_the_wider_spacing():
    # 4 by 1 with walls in y: waves of pi / 2 along, half waves of pi across.
    space = SimpleNamespace(
        lengths=(4.0, 1.0), x_is_periodic=True, y_is_periodic=False, n_real=4
    )
    waves = np.array([[0, 1], [2, 1], [5, 1], [1, 3]])
    found = shells(Shelled(None, waves, space))
    assert found.width == pytest.approx(np.pi)
    # Over pi: 1, sqrt(2), sqrt(29) / 2 = 2.69, sqrt(37) / 2 = 3.04.
    assert list(found.index) == [1, 1, 3, 3]
    np.testing.assert_allclose(found.wavenumbers, np.pi * np.arange(4))
    # The first wave that lacks is (6, 0) at 3: rings up to 2.5 are whole.
    assert found.complete == 3


def test_gyres_between_the_points_of_a_grid():
    # A paraboloid is found exactly, wherever its top lies.
    x, y = np.linspace(0, 3, 7), np.linspace(0, 2, 9)
    psi = 5 - (x - 1.3) ** 2 - 2 * (y[:, None] - 0.9) ** 2
    found = gyres(x, y, psi)
    assert found.greatest == pytest.approx(5, rel=1e-14)
    assert found.greatest_at == pytest.approx((1.3, 0.9), rel=1e-13)
    assert found.least == psi.min()  # in a corner, where no parabola is laid


def test_gyres_of_a_known_streamfunction():
    # psi = 3 sin(pi x / L) sin(2 pi y / L) with its strong half in the south, and
    # a weaker one reversed in the north.
    x = y = np.linspace(0, 8.0, 9)
    shape = np.where(y < 4, 3.0, 2.0) * np.sin(2 * np.pi * y / 8)
    psi = shape[:, None] * np.sin(np.pi * x / 8)[None, :]
    found = gyres(x, y, psi)
    assert found.greatest == pytest.approx(3, rel=1e-14)
    assert found.least == pytest.approx(-2, rel=1e-14)
    assert found.greatest_at == (4.0, 2.0)
    assert found.least_at == (4.0, 6.0)
    assert found.boundary_transport == found.greatest
    assert found.boundary_width == 4.0
    assert gyres(x, y, -psi).boundary_transport == pytest.approx(-3, rel=1e-14)
    with pytest.raises(DataError, match="does not fit"):
        gyres(x, y[1:], psi)
