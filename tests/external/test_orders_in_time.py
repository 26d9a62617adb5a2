"""Order of accuracy in time of each scheme, on the ocean itself."""

import numpy as np
import pytest

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.exponential import SCHEMES, stepper_of
from eddyshed.solver.initial import starting_state
from eddyshed.solver.settings import TruthConfig

DAY = 86400.0
BAROTROPIC = """
name = "order"
[grid]
points = [32, 32]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
deformation_radius = "100 km"
drag = "0.02 1/d"
viscosity = "200 m2/s"
[forcing.wind]
kind = "wave"
amplitude = "2e-11 s-2"
waves = [1, 2]
[forcing.wind.time]
kind = "seasonal"
period = "10 d"
amplitude = 0.5
[initial]
kind = "noise"
energy = "0.05 m2/s2"
band = [1, 4]
[time]
step = "1 d"
spin_up = "0 d"
duration = "8 d"
[output]
state_every = "1 d"
"""


TWO_LAYER = BAROTROPIC.replace("barotropic", "two_layer").replace(
    'deformation_radius = "100 km"',
    'deformation_radius = "60 km"\nupper_current = "0.1 m/s"\n'
    'upper_depth = "800 m"\nlower_depth = "3200 m"',
)
# A metre-sized tank of a stably stratified or of a convecting fluid.
SLICE = """
name = "order"
[grid]
space = "{space}"
points = [32, 16]
lengths = ["4 m", "1 m"]
[ocean]
kind = "boussinesq"
buoyancy_gradient = "{gradient} s-2"
viscosity = "2e-6 m2/s"
diffusivity = "2e-6 m2/s"
[initial]
kind = "noise"
energy = "2e-8 m2/s2"
band = [1, 3]
[time]
step = "50 s"
spin_up = "0 s"
duration = "8 d"
[output]
state_every = "50 s"
"""
OCEANS = {
    "barotropic periodic": BAROTROPIC,
    "barotropic channel": BAROTROPIC.replace("[grid]", '[grid]\nspace = "channel"'),
    "barotropic basin": BAROTROPIC.replace("[grid]", '[grid]\nspace = "basin"'),
    "two layers periodic": TWO_LAYER,
    "two layers channel": TWO_LAYER.replace("[grid]", '[grid]\nspace = "channel"'),
    "stratified slice": SLICE.format(space="periodic", gradient="1e-7"),
    "convecting slice": SLICE.format(space="channel", gradient="-1e-7"),
}


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("name", OCEANS)
def test_order_is_four_on_successive_halvings(name, scheme):
    config = parse_config(OCEANS[name], TruthConfig, "order.toml").config
    length = 3200.0 if "slice" in name else 8 * DAY
    ocean = build_ocean(config)
    start = starting_state(config.initial, ocean, seed=1, member=0)
    ends = []
    for steps in (32, 64, 128, 256):
        z, stepper = start.copy(), stepper_of(scheme, ocean, length / steps)
        for n in range(steps):
            stepper.advance(n * stepper.step, z)
        ends.append(z)
    # No solution is known: each run is compared with that of half its step, whose
    # differences fall by 2^4 as the errors do (Roache 1994, J. Fluids Eng. 116:405).
    moved = np.linalg.norm(np.diff(ends, axis=0), axis=1)
    orders = np.log2(moved[:-1] / moved[1:])
    assert np.all(np.abs(orders - 4) < 0.1), orders
    # The flow is turned over in that time, so that the test sees the advection.
    linear = ocean.exact_flow(length)(start)
    assert np.linalg.norm(ends[-1] - linear) > 0.3 * np.linalg.norm(linear)


def test_the_two_schemes_agree():
    config = parse_config(BAROTROPIC, TruthConfig, "order.toml").config
    ocean = build_ocean(config)
    ends = []
    for scheme in SCHEMES:
        z = starting_state(config.initial, ocean, seed=1, member=0)
        stepper = stepper_of(scheme, ocean, 8 * DAY / 256)
        for n in range(256):
            stepper.advance(n * stepper.step, z)
        ends.append(z)
    # Both have errors of about 1e-7 there.
    assert np.linalg.norm(ends[0] - ends[1]) < 1e-6 * np.linalg.norm(ends[0])


def test_exponential_differencing_pays_where_damping_is_fast():
    # A forced wave damped a hundred times in a step: what its scheme keeps exactly
    # the integrating factor does not (Kassam & Trefethen 2005, section 3).
    stiff = ["ocean.viscosity=1e8 m2/s", "forcing.wind.time={kind='steady'}"]
    config = parse_config(BAROTROPIC, TruthConfig, "order.toml", stiff).config
    ocean = build_ocean(config)
    forcing = ocean.forcing(0.0)
    errors = []
    for scheme in SCHEMES:
        z = np.zeros(ocean.size)
        stepper = stepper_of(scheme, ocean, 0.5 * DAY)
        for n in range(4):
            stepper.advance(n * stepper.step, z)
        left = ocean.linear(z) + forcing
        errors.append(np.linalg.norm(left) / np.linalg.norm(forcing))
    assert errors[1] < 1e-10
    assert errors[0] > 0.1
