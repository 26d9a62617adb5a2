"""The barotropic ocean's linear part in every space, against dense matrices."""

import numpy as np
import pytest
from scipy import linalg

from eddyshed.reduce.contract import check_model
from eddyshed.solver.errors import DataError
from eddyshed.solver.exponential import ExponentialDifferencingRK4
from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

SPACES = {"periodic": Periodic, "channel": Channel, "basin": Basin}
BOX = (2.0, 3.0)
CURRENT = {"periodic": 0.3, "channel": -0.2, "basin": 0.0}


def ocean(name, points=(12, 10), *, bottom=True, forced=True, **parameters):
    space = SPACES[name](points, BOX)
    rng = np.random.default_rng(4)
    smooth = 1 / (1 + space.k_squared / space.k_squared.min())
    settings = {
        "beta": 2.0,
        "deformation_radius": 0.7,
        "drag": 0.1,
        "viscosity": 1e-3,
        "hyperviscosity_time": 3.0,
        "mean_current": CURRENT[name],
    } | parameters
    source, topography = (rng.standard_normal(space.n_real) * smooth for _ in "ab")
    return Barotropic(
        BarotropicSettings(**settings),
        space,
        source if forced else None,
        5 * topography if bottom else None,
    )


def run(model, z, step, steps, scheme=IntegratingFactorRK4):
    end, stepper = z.copy(), scheme(model, step)
    for _ in integrate(stepper, end, first_step=0, last_step=steps, energy_bound=1e6):
        pass
    return end


@pytest.mark.parametrize("bottom", [False, True])
@pytest.mark.parametrize("name", SPACES)
def test_the_contract_holds(name, bottom):
    check_model(ocean(name, bottom=bottom))


@pytest.mark.parametrize("order", [4, 8])
@pytest.mark.parametrize("bottom", [False, True])
@pytest.mark.parametrize("name", SPACES)
def test_linear_operator_is_the_dense_eigenproblem(name, bottom, order):
    # (lap - F) psi_t = -beta psi_x - U lap psi_x - J(psi, h) - friction (Pedlosky,
    # Geophysical Fluid Dynamics, 1987, chapter 3), column by column in streamfunction
    # coefficients. Its eigenvalues are A's, whatever the coordinates. J is formed
    # from velocities on a grid four times as fine.
    model = ocean(name, bottom=bottom, hyperviscosity_order=order)
    space, settings = model.space, model.settings
    fine = SPACES[name](tuple(4 * n for n in space.points), BOX)
    place = {label: i for i, label in enumerate(fine.labels)}
    kept = [place[label] for label in space.labels]

    def lifted(f):
        result = np.zeros(fine.n_real)
        result[kept] = f
        return result

    k2 = space.k_squared
    edge = min(
        (2 if periodic else 1) * np.pi * cutoff / length
        for periodic, cutoff, length in zip(
            (name != "basin", name == "periodic"), space.cutoff, BOX, strict=True
        )
    )
    rows = []
    for unit in np.eye(space.n_real):
        u, v = fine.velocity(lifted(unit))
        rate = -settings.beta * space.ddx(unit)
        rate += settings.mean_current * space.ddx(k2 * unit)
        if bottom:
            hu, hv = fine.velocity(lifted(model.topography))
            # J(psi, h) = psi_x h_y - psi_y h_x, on the fine grid.
            rate -= fine.to_modes(-v * hu + u * hv)[kept]
        steep = (np.sqrt(k2) / edge) ** order / settings.hyperviscosity_time
        rate += (settings.drag + settings.viscosity * k2 + steep) * k2 * unit
        rows.append(rate / -(k2 + settings.deformation_radius**-2))
    expected = np.sort_complex(linalg.eigvals(np.array(rows).T))
    found = np.sort_complex(linalg.eigvals(model.linear(np.eye(model.size)).T))
    # Eigenvalues of a non-normal matrix of order 10^2: round-off times 10^3.
    scale = np.abs(expected).max()
    gaps = np.abs(found[:, np.newaxis] - expected[np.newaxis, :])
    assert gaps.min(axis=0).max() < 1e-11 * scale
    assert gaps.min(axis=1).max() < 1e-11 * scale


@pytest.mark.parametrize("bottom", [False, True])
@pytest.mark.parametrize("name", SPACES)
def test_budgets_close(name, bottom):
    # Terms in m2 s-3 sum to dE/dt = z . dz/dt, those in s-3 to that of the potential
    # enstrophy <q^2> / 2, by the chain rule.
    model = ocean(name, bottom=bottom)
    z = np.random.default_rng(0).standard_normal(model.size)
    rate, found, units = (
        model.tendency(0.0, z),
        model.budget(0.0, z),
        model.budget_units,
    )
    assert set(found) == set(units)
    stiffness = model.space.k_squared + model.settings.deformation_radius**-2
    assert found["energy"] == pytest.approx(z @ z / 2, rel=1e-14)
    assert found["enstrophy"] == pytest.approx(z @ (stiffness * z) / 2, rel=1e-14)
    for unit, total in (("m2 s-3", z @ rate), ("s-3", z @ (stiffness * rate))):
        terms = [value for name, value in found.items() if units[name][0] == unit]
        # Round-off of sums of 10^2 terms, relative to the largest term.
        assert abs(sum(terms) - total) < 1e-12 * max(map(abs, terms))


@pytest.mark.parametrize("name", SPACES)
def test_budgets_close_over_a_run(name):
    # The Simpson integrals of all terms are the change: both the rule and the scheme
    # have errors of order (rate * step)^4, with rates up to 10 about 1e-6 of the
    # exchange; hyperviscosity would be faster. Every term takes part.
    model, step = ocean(name, hyperviscosity_time=np.inf), 0.005
    z = np.random.default_rng(3).standard_normal(model.size)
    z *= 0.3 / (1 + model.space.k_squared / model.space.k_squared.min())
    stepper, found = IntegratingFactorRK4(model, step), [model.budget(0.0, z)]
    for i in range(200):
        stepper.advance(i * step, z)
        found.append(model.budget((i + 1) * step, z))
    weights = np.ones(len(found))
    weights[1:-1:2], weights[2:-1:2] = 4, 2
    for quantity, rate in (("energy", "m2 s-3"), ("enstrophy", "s-3")):
        names = [n for n, (unit, _) in model.budget_units.items() if unit == rate]
        terms = np.array([[budget[name] for name in names] for budget in found])
        assert np.abs(terms).max(axis=0).min() > 0
        gained = step / 3 * weights @ terms
        change = found[-1][quantity] - found[0][quantity]
        assert abs(change - gained.sum()) < 1e-6 * np.abs(gained).sum()


@pytest.mark.parametrize("scheme", [IntegratingFactorRK4, ExponentialDifferencingRK4])
@pytest.mark.parametrize("name", SPACES)
def test_order_in_time(name, scheme):
    # Both schemes are of order four (Canuto et al., Spectral Methods in Fluid
    # Dynamics, 1988; Cox & Matthews 2002, J. Comput. Phys. 176:430), here with
    # topography, beta and the current in their explicit or exact parts.
    # No hyperviscosity: stiff damping would lower the order seen (Hochbruck &
    # Ostermann 2005, SIAM J. Numer. Anal. 43:1069).
    model = ocean(name, hyperviscosity_time=np.inf)
    start = np.random.default_rng(2).standard_normal(model.size)
    start *= 0.3 / (1 + model.space.k_squared / model.space.k_squared.min())
    counts = (40, 80, 160)
    reference = run(model, start, 1.0 / 1280, 1280, scheme)
    errors = [
        np.linalg.norm(run(model, start, 1.0 / n, n, scheme) - reference)
        for n in counts
    ]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    # Within a tenth of nominal: the reference is good to 3e-4 of the last error.
    np.testing.assert_allclose(orders, 4.0, atol=0.1)


def test_topography_keeps_energy_but_enstrophy_only_without_beta():
    # With beta = 0 both <|grad psi|^2> and <(zeta + h)^2> are kept; with beta, and h
    # that varies in x, only the former, as the mean current is not free to change
    # (Salmon, Lectures on Geophysical Fluid Dynamics, 1998; Carnevale & Frederiksen
    # 1987, J. Fluid Mech. 175:157).
    rates = {}
    for beta in (0.0, 2.0):
        model = ocean(
            "periodic",
            beta=beta,
            drag=0.0,
            viscosity=0.0,
            hyperviscosity_time=np.inf,
            deformation_radius=np.inf,
            mean_current=0.0,
            forced=False,
        )
        z = np.random.default_rng(0).standard_normal(model.size)
        rate = model.tendency(0.0, z)
        assert abs(z @ rate) < 1e-13 * np.abs(z * rate).sum()  # round-off
        k2, norm = model.space.k_squared, model.space.norm
        q = -k2 * model.streamfunction(z) + model.topography
        terms = norm * q * -k2 * model.streamfunction(rate)
        rates[beta] = terms.sum() / np.abs(terms).sum()
    assert abs(rates[0.0]) < 1e-13  # round-off
    # With beta it changes by -beta <h psi_x>, which is of the size of its terms.
    assert abs(rates[2.0]) > 1e-4


def test_form_drag_of_a_known_wave():
    # Over h = a cos(kx) a current U makes the work U <psi h_x>: with psi =
    # p sin(kx) that is -U p a k / 2, by hand.
    space = Periodic((16, 16), BOX)
    k = 2 * np.pi / BOX[0]
    model = Barotropic(
        BarotropicSettings(mean_current=0.4),
        space,
        topography=0.3 * space.wave((1, 0)),
    )
    z = model.coordinates(0.7 * space.wave((1, 0), -np.pi / 2))
    # dE/dt = -<psi q_t> with q_t = -U h_x: U <psi h_x>.
    expected = 0.4 * 0.7 * 0.3 * -k / 2
    assert model.budget(0.0, z)["form_drag"] == pytest.approx(expected, rel=1e-13)
    assert z @ model.tendency(0.0, z) == pytest.approx(expected, rel=1e-13)


def test_standing_wave_over_topography():
    # Charney & Eliassen (1949, Tellus 1(2):38): in the steady response of a current
    # U over h the wave with K^2 = beta / U is resonant; away from it and without
    # friction U zeta_x + beta psi_x = -U h_x gives psi = U h / (U K^2 - beta).
    space, beta, current = Periodic((16, 16), (2 * np.pi, 2 * np.pi)), 3.0, 0.5
    for k in (1, 4):
        h = 0.2 * space.wave((k, 0))
        settings = BarotropicSettings(beta=beta, mean_current=current)
        model = Barotropic(settings, space, topography=h)
        psi = current * h / (current * k**2 - beta)
        rate = model.tendency(0.0, model.coordinates(psi))
        assert np.abs(rate).max() < 1e-14  # round-off of terms of 0.1


def test_a_current_across_walls_is_refused():
    with pytest.raises(DataError, match="would pass through walls"):
        ocean("basin", mean_current=0.1)


def test_boundary_layers_and_scales():
    # Stommel: drag / beta; Munk: (viscosity / beta)^(1/3); Rhines:
    # 2 pi sqrt(U / beta); Charney: sqrt(U / beta).
    model = ocean("basin", viscosity=2.0 * 0.1**3)
    z = np.zeros(model.size)
    z[0] = 3.0
    found = {name: value for name, value, _ in model.scales(z)}
    assert found["Stommel layer width"] == pytest.approx(0.05)
    assert found["Munk layer width"] == pytest.approx(0.1)
    k2 = model.space.k_squared[0]
    speed = 3.0 * np.sqrt(k2 / (k2 + 0.7**-2))
    assert found["rms speed"] == pytest.approx(speed)
    assert found["Rhines wavelength"] == pytest.approx(2 * np.pi * (speed / 2) ** 0.5)
    assert found["inertial layer width"] == pytest.approx((speed / 2) ** 0.5)
    assert found["Reynolds number"] == pytest.approx(speed * 3.0 / 2e-3)
    turn = 2 * np.pi / (speed * np.sqrt(k2))
    assert found["eddy turnover time"] == pytest.approx(turn)
    assert "Munk layer width" not in dict(x[:2] for x in ocean("channel").scales())


@pytest.mark.parametrize("name", SPACES)
def test_fastest_frequency(name):
    # The largest imaginary part of an eigenvalue of A: without topography itself,
    # with it a bound.
    for bottom in (False, True):
        model = ocean(
            name, bottom=bottom, drag=0.0, viscosity=0.0, hyperviscosity_time=np.inf
        )
        matrix = model.linear(np.eye(model.size)).T
        fastest = np.abs(linalg.eigvals(matrix).imag).max()
        if bottom:
            assert fastest < model.fastest_frequency
        else:
            # Round-off of eigenvalues of a matrix of order 10^2.
            assert model.fastest_frequency == pytest.approx(fastest, rel=1e-12)


def test_hyperviscosity_has_its_time_at_the_cutoff():
    # Rate at the cutoff along the coarser side is 1 / time, and elsewhere it goes
    # with the chosen power of the wavenumber.
    for order in (4, 16):
        settings = BarotropicSettings(
            hyperviscosity_time=5.0, hyperviscosity_order=order
        )
        model = Barotropic(settings, Periodic((16, 32), (1.0, 1.0)))
        rates = dict(zip(map(tuple, model.waves), model.damping, strict=True))
        assert rates[5, 0] == pytest.approx(0.2)
        assert rates[0, 10] == pytest.approx(0.2 * 2.0**order)
