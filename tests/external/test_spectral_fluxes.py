"""Spectra and fluxes of real oceans, against convolutions term by term and Fjortoft."""

import numpy as np
import pytest

from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.boussinesq import Boussinesq, BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.spectra import (
    isotropic_spectrum,
    shells,
    spectra_by_part,
    spectral_flux,
    zonal_spectrum,
)

LENGTHS = (2 * np.pi, 3.0)
# A box with walls is half of one that repeats, in which the flow is odd.
PERIODS = {Periodic: (1, 1), Channel: (1, 2), Basin: (2, 2)}


def amplitudes(space, field):
    """Complex amplitude of each wave of a field in the box that repeats.

    By the definition, from the field on the grid, made odd across the walls.
    """
    x, y = space.grid_axes
    periods = PERIODS[type(space)]
    if periods[0] == 2:
        x, field = np.append(-x[::-1], x), np.hstack([-field[:, ::-1], field])
    if periods[1] == 2:
        y, field = np.append(-y[::-1], y), np.vstack([-field[::-1], field])
    (cx, cy), (lx, ly) = space.cutoff, space.lengths
    k = 2 * np.pi / (periods[0] * lx) * np.arange(-cx, cx + 1)
    m = 2 * np.pi / (periods[1] * ly) * np.arange(-cy, cy + 1)
    along = np.exp(-1j * np.outer(k, x)) / len(x)
    across = np.exp(-1j * np.outer(m, y)) / len(y)
    return k, m, across @ field @ along.T


def convolution(k, m, psi):
    """J(psi, lap psi) wave by wave: sum over p + q = k of (p x q) q^2 psi_p psi_q."""
    result = np.zeros_like(psi)
    rows, columns = psi.shape
    for j in range(rows):
        for i in range(columns):
            for b in range(max(0, j - rows // 2), min(rows, j + rows // 2 + 1)):
                for a in range(
                    max(0, i - columns // 2), min(columns, i + columns // 2 + 1)
                ):
                    d, c = j - b + rows // 2, i - a + columns // 2
                    cross = k[a] * m[d] - m[b] * k[c]
                    square = k[c] ** 2 + m[d] ** 2
                    result[j, i] += cross * square * psi[b, a] * psi[d, c]
    return result


@pytest.mark.parametrize("kind", [Periodic, Channel, Basin])
def test_spectra_and_fluxes_are_those_of_the_convolution(kind):
    space = kind((10, 12), LENGTHS)
    model = Barotropic(BarotropicSettings(beta=2.0, drag=0.1), space)
    z = np.random.default_rng(6).standard_normal(model.size)
    k, m, psi = amplitudes(space, space.to_grid(model.streamfunction(z)))
    square = m[:, np.newaxis] ** 2 + k**2
    # Wave by wave, of the energy sum k^2 |psi|^2 / 2: psi* J is what advection adds.
    energy = square * np.abs(psi) ** 2 / 2
    gain = (psi.conj() * convolution(k, m, psi)).real
    # Rings: the spacings are 1 and 2 pi / 3, halved where there are walls.
    spacing = np.array([1.0, 2 * np.pi / 3]) / PERIODS[kind]
    width = spacing.max()
    ring = np.rint(np.sqrt(square) / width).astype(int)
    rings = range(shells(model).index.max() + 1)
    assert shells(model).width == pytest.approx(width)

    def by_ring(values):
        return np.array([values[ring == n].sum() for n in rings])

    spectrum = isotropic_spectrum(model, z)
    # Round-off of some hundred terms.
    np.testing.assert_allclose(spectrum, by_ring(energy), atol=1e-13 * spectrum.sum())
    assert spectrum.sum() == pytest.approx(z @ z / 2, rel=1e-13)
    if space.x_is_periodic:
        zonal = zonal_spectrum(model, z)
        expected = np.zeros(len(zonal))
        np.add.at(
            expected, abs(np.arange(len(m)) - len(m) // 2), energy[:, k == 0].sum(1)
        )
        np.testing.assert_allclose(zonal, expected, atol=1e-13 * spectrum.sum())
    for quantity, weights in (("energy", 1.0), ("enstrophy", square)):
        flux = spectral_flux(model, z, quantity)
        transfer = by_ring(weights * gain)
        size = by_ring(np.abs(weights * gain)).sum()
        # What a ring gains is what comes in less what goes out.
        divergence = -np.diff(flux, prepend=0.0)
        np.testing.assert_allclose(divergence, transfer, atol=1e-12 * size)
        assert abs(flux[-1]) < 1e-13 * size
        assert np.abs(flux).max() > 0.01 * size


def test_fluxes_of_a_triad_are_in_fjortofts_ratios():
    # Fjortoft (1953), Tellus 5:225: of three waves that conserve energy and enstrophy
    # the middle one gives to both others, or takes from both, in the ratio
    # dE1 : dE3 = k3^2 - k2^2 : k2^2 - k1^2. Squares 1, 5 and 8: 3 : 4.
    model = Barotropic(BarotropicSettings(), Periodic((16, 16), (2 * np.pi,) * 2))
    waves = (((1, 0), 0.8), ((1, 2), 1.1), ((2, 2), 0.5))
    z = model.coordinates(sum(model.space.wave(wave, phase) for wave, phase in waves))
    flux, other = spectral_flux(model, z), spectral_flux(model, z, "enstrophy")
    assert list(shells(model).index[z != 0][::2]) == [1, 2, 3]
    # Across 1.5 passes what the first loses, across 2.5 what the third gains.
    first, third = -flux[1], flux[2]
    assert first / third == pytest.approx(3 / 4, rel=1e-12)
    assert [other[1], other[2]] == pytest.approx([-first, 8 * third], rel=1e-12)
    assert abs(first) > 0.1


def layered():
    settings = TwoLayerSettings(
        upper_depth=1.0,
        lower_depth=4.0,
        deformation_radius=0.4,
        upper_current=1.0,
        beta=1.0,
    )
    return TwoLayer(settings, Channel((12, 10), LENGTHS)), 2


def rotating():
    settings = BoussinesqSettings(
        buoyancy_gradient=4.0, viscosity=0.1, diffusivity=0.1, coriolis=0.5
    )
    return Boussinesq(settings, Periodic((12, 10), LENGTHS)), 3


@pytest.mark.parametrize("make", [layered, rotating])
def test_parts_have_spectra_of_their_own(make):
    model, count = make()
    states = np.random.default_rng(2).standard_normal((2, 3, model.size))
    parts = spectra_by_part(model, states)
    n = model.space.n_real
    assert parts.shape[:3] == (2, 3, count)
    np.testing.assert_allclose(
        parts.sum(axis=-1),
        (states**2).reshape(2, 3, count, n).sum(axis=-1) / 2,
        rtol=1e-13,
    )
    np.testing.assert_allclose(
        parts.sum(axis=2), isotropic_spectrum(model, states), rtol=1e-13
    )


@pytest.mark.parametrize("make", [layered, rotating])
def test_advection_conserves_the_enstrophy_that_is_recorded(make):
    # Of each layer the potential enstrophy, of a slice the enstrophy (Salmon,
    # Lectures on Geophysical Fluid Dynamics, 1998).
    model, _ = make()
    z = np.random.default_rng(3).standard_normal(model.size)
    weighted = model.enstrophy_weights * z
    assert weighted @ z / 2 == pytest.approx(
        model.budget(0.0, z)["enstrophy"], rel=1e-12
    )
    flux = spectral_flux(model, z, "enstrophy")
    size = np.abs(weighted * model.bilinear(z, z)).sum()
    assert abs(flux[-1]) < 1e-13 * size
    assert np.abs(flux).max() > 1e-3 * size
