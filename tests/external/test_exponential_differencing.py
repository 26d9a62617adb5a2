"""Exponential time differencing, against published coefficients and solutions."""

from dataclasses import dataclass
from decimal import Decimal, localcontext

import numpy as np
import pytest

from eddyshed.solver.exponential import ExponentialDifferencingRK4, weights

# Cox & Matthews (2002), J. Comput. Phys. 176:430, eq. 29; Kassam & Trefethen
# (2005), SIAM J. Sci. Comput. 26:1214. The formulas evaluated in arithmetic of 60
# digits: half, first, middle, last. The "middle" here multiplies the sum of two
# slopes, so half + ... of a constant slope is first + 2 middle + last.
TABLE = {
    -1e-6: (0.4999998750000208, 0.166666500000075, 0.3333331666667167, 1 / 6 - 8.4e-15),
    -1e-3: (
        0.4998750208307294,
        0.1665000749777827,
        0.3331667166555575,
        0.1666666583361105,
    ),
    -0.1: (
        0.4877057549928599,
        0.1507282650142397,
        0.3171557510302073,
        0.16658605256575,
    ),
    -1.0: (
        0.3934693402873666,
        0.05696447062846143,
        0.2072766470286539,
        0.1606027941427884,
    ),
    -10.0: (
        0.09932620530009145,
        -0.006006083590588173,
        0.0160010895983143,
        0.07399936440098333,
    ),
}
IMAGINARY = (
    0.09649396318073 - 0.14531987202811j,
    0.28527932749531 - 0.15584880691165j,
    0.17441836663655 - 0.0026802082804554j,
)


@pytest.mark.parametrize("x", TABLE)
def test_published_coefficients(x):
    found = [float(w.real) for w in weights(np.array(x))]
    # The printed digits: 13 to 16 of them.
    np.testing.assert_allclose(found, TABLE[x], rtol=0, atol=1e-13)


def test_published_coefficients_of_a_wave():
    found = [complex(w) for w in weights(np.array(-1j))[1:]]
    np.testing.assert_allclose(found, IMAGINARY, rtol=0, atol=1e-13)


def exact(x):
    """Real coefficients from their closed forms in 80 digits."""
    with localcontext() as context:
        context.prec = 80
        z = Decimal(x)
        e = z.exp()
        values = (
            ((z / 2).exp() - 1) / z,
            (-4 - z + e * (4 - 3 * z + z * z)) / z**3,
            2 * (2 + z + e * (z - 2)) / z**3,
            (-4 - 3 * z - z * z + e * (4 - z)) / z**3,
        )
        return [float(value) for value in values]


def test_coefficients_everywhere():
    # Both sides of where the series takes over, through zero, and far out.
    size = np.concatenate([np.logspace(-12, 3, 46), [1.9999, 2.0, 2.0001]])
    points = np.concatenate([-size, size[size < 20]])
    found = np.array([w.real for w in weights(points)]).T
    expected = np.array([exact(x) for x in points])
    # Of order one for decay; relative to the largest of the four for growth.
    scale = np.maximum(1.0, np.abs(expected).max(axis=1, keepdims=True))
    assert np.max(np.abs(found - expected) / scale) < 1e-13
    limits = [w.real for w in weights(np.array(0.0))]
    np.testing.assert_allclose(limits, [1 / 2, 1 / 6, 1 / 3, 1 / 6], rtol=1e-15)


def test_closed_form_in_doubles_would_be_wrong():
    # Why the series is there: at -1e-4 the closed form has lost 13 digits.
    z = -1e-4
    naive = (-4 - z + np.exp(z) * (4 - 3 * z + z * z)) / z**3
    right = exact(z)[1]
    assert abs(naive - right) > 1e-6
    assert abs(weights(np.array(z))[1].real - right) < 1e-15


@dataclass(frozen=True)
class Scalar:
    """One damped unknown."""

    rate: float
    rest: object

    def linear_function(self, function):
        factor = function(np.array(self.rate)).real
        return lambda z: factor * z

    def explicit(self, t, z):
        return self.rest(t, z)


def errors(model, start, end, exact_end):
    found = []
    for steps in (16, 32, 64):
        z = np.array([start])
        stepper = ExponentialDifferencingRK4(model, end / steps)
        for n in range(steps):
            stepper.advance(n * stepper.step, z)
        found.append(abs(z[0] - exact_end))
    return np.array(found)


def test_error_on_the_logistic_equation():
    # u' = -u + u^2, u(0) = 1/2: u(2) = 1 / (1 + e^2).
    model = Scalar(-1.0, lambda t, u: u**2)
    found = errors(model, 0.5, 2.0, 1 / (1 + np.exp(2.0)))
    # Error of the scheme as the paper defines it, printed to three digits.
    np.testing.assert_allclose(found, [1.24e-7, 7.90e-9, 4.98e-10], rtol=5e-3)


def test_error_with_a_forcing_in_time():
    # u' = -u + sin t, u(0) = 0: u = (e^-t + sin t - cos t) / 2.
    model = Scalar(-1.0, lambda t, u: np.array([np.sin(t)]))
    exact_end = (np.exp(-np.pi / 2) + 1) / 2
    found = errors(model, 0.0, np.pi / 2, exact_end)
    np.testing.assert_allclose(found, [3.17e-8, 1.98e-9, 1.24e-10], rtol=5e-3)


def test_balance_with_a_constant_is_kept_exactly():
    # What the integrating factor does not do: at any stiffness, to round-off.
    model = Scalar(-1e4, lambda t, u: np.full(1, 3.0))
    z = np.array([3e-4])
    ExponentialDifferencingRK4(model, 1.0).advance(0.0, z)
    assert z[0] == pytest.approx(3e-4, rel=1e-13)
