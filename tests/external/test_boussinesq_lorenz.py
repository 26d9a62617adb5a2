"""Three modes of convection: the projection must give the equations of Lorenz."""

import numpy as np

from eddyshed.reduce.operators import galerkin
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.spaces.channel import Channel


def test_projection_on_three_modes_is_lorenz_1963():
    # Saltzman (1962), J. Atmos. Sci. 19:329; Lorenz (1963), J. Atmos. Sci. 20:130:
    # psi = A sin kx sin pi z, theta = B cos kx sin pi z + C sin 2 pi z with k = pi /
    # sqrt 2, Pr = 10 and Ra = 28 critical, scaled as below, is X' = 10 (Y - X),
    # Y' = 28 X - Y - X Z, Z' = X Y - 8/3 Z.
    k, prandtl, r = np.pi / np.sqrt(2), 10.0, 28.0
    drive = prandtl * r * 27 * np.pi**4 / 4
    model = Boussinesq(
        BoussinesqSettings(
            buoyancy_gradient=-drive, viscosity=prandtl, diffusivity=1.0
        ),
        Channel((16, 16), (2 * np.pi / k, 1.0)),
    )
    x, z = (axis[None, :] for axis in model.space.grid_axes)
    z = z.T
    zero = np.zeros((z.size, x.size))
    fields = [
        (np.sin(k * x) * np.sin(np.pi * z), zero),
        (zero, drive * np.cos(k * x) * np.sin(np.pi * z)),
        (zero, drive * (0 * x + np.sin(2 * np.pi * z))),
    ]
    to_modes = model.space.to_modes
    states = np.array([model.coordinates(*map(to_modes, pair)) for pair in fields])
    lengths = np.linalg.norm(states, axis=1)
    vectors = (states / lengths[:, None]).T
    projected = galerkin(
        model, vectors, np.empty((model.size, 0)), np.zeros(model.size)
    )
    # Each coordinate is its length times the amplitude A, B or C.
    linear = projected.A11 * lengths / lengths[:, None]
    tensor = (
        projected.B111 * np.multiply.outer(lengths, lengths) / lengths[:, None, None]
    )
    # In A, B, C:
    k_squared = k**2 + np.pi**2
    expected = [
        [-prandtl * k_squared, drive * k / k_squared, 0],
        [k, -k_squared, 0],
        [0, 0, -4 * np.pi**2],
    ]
    # Coefficients come from transforms: round-off of the largest, 27625.
    np.testing.assert_allclose(linear, expected, atol=1e-12 * drive)
    np.testing.assert_allclose(
        linear[[0, 0, 1, 1, 2], [0, 1, 0, 1, 2]],
        [
            -148.04406601634,
            27625.1831099828,
            2.22144146907918,
            -14.804406601634,
            -39.4784176043574,
        ],
        rtol=1e-12,
    )
    np.testing.assert_allclose(2 * tensor[1, 0, 2], 6.97886419963888, rtol=1e-12)
    np.testing.assert_allclose(2 * tensor[2, 0, 1], -3.48943209981944, rtol=1e-12)
    # And in X, Y, Z with time in units of 1 / K^2:
    a = 1 / np.sqrt(2)
    units = np.array(
        [np.sqrt(2) * (1 + a**2) / a, np.sqrt(2) / (np.pi * r), -1 / (np.pi * r)]
    )
    linear = linear * units / units[:, None] / k_squared
    tensor = tensor * np.multiply.outer(units, units) / units[:, None, None] / k_squared
    lorenz = np.zeros((3, 3, 3))
    lorenz[1, 0, 2] = lorenz[1, 2, 0] = -0.5
    lorenz[2, 0, 1] = lorenz[2, 1, 0] = 0.5
    np.testing.assert_allclose(
        linear, [[-10, 10, 0], [28, -1, 0], [0, 0, -8 / 3]], atol=1e-11
    )
    np.testing.assert_allclose(tensor, lorenz, atol=1e-12)
    assert not projected.F1.any()
    assert projected.cyclic_residual < 1e-12
