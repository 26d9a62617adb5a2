"""Inner products of the oceans, against means over the grid and weighted SVDs."""

from dataclasses import dataclass

import numpy as np
import pytest

from eddyshed.reduce.bases.eof import eof_basis
from eddyshed.reduce.bases.fourier import fourier_basis
from eddyshed.reduce.contract import check_model
from eddyshed.reduce.inner_products import in_product
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.settings import EofSettings, FourierSettings
from eddyshed.solver.errors import DataError
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.barotropic_current import BarotropicCurrent
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

SPACES = {"periodic": Periodic, "channel": Channel, "basin": Basin}
BOX = (2.0, 3.0)
RADIUS, FRACTIONS = 0.4, (0.2, 0.8)
OCEANS = [
    *(("barotropic", name) for name in SPACES),
    ("two_layer", "periodic"),
    ("two_layer", "channel"),
]
UNITS = {"energy": "m s-1", "l2": "m2 s-1", "enstrophy": "s-1"}


def ocean(kind, name, points=(12, 10)):
    space = SPACES[name](points, BOX)
    smooth = 1 / (1 + space.k_squared / space.k_squared.min())
    one, other = (
        np.random.default_rng(i).standard_normal(space.n_real) for i in (1, 2)
    )
    if kind == "barotropic":
        settings = BarotropicSettings(beta=2.0, deformation_radius=RADIUS, drag=0.1)
        return Barotropic(settings, space, one * smooth, other * smooth)
    settings = TwoLayerSettings(
        upper_depth=FRACTIONS[0],
        lower_depth=FRACTIONS[1],
        deformation_radius=RADIUS,
        beta=2.0,
        upper_current=0.5,
        drag=0.1,
    )
    return TwoLayer(settings, space, one * smooth)


def on_grid(model, product, z):
    """What a product takes the mean square of, at each point of each layer.

    Made of the fields that the ocean shows: psi, and q by its definition. Layers
    are multiplied by the root of their part of the depth.
    """
    fields = model.fields(z)
    if isinstance(model.settings, BarotropicSettings):
        psi = [fields["streamfunction"]]
        q = [fields["vorticity"] - psi[0] / RADIUS**2]
        parts = [1.0]
    else:
        psi = [fields[f"{layer}_streamfunction"] for layer in ("upper", "lower")]
        # Fi = f0^2 / (g' Hi), so F1 = h2 / Ld^2 and F2 = h1 / Ld^2 (Pedlosky 1987,
        # Geophysical Fluid Dynamics, section 6.16).
        step, (h1, h2) = (psi[1] - psi[0]) / RADIUS**2, FRACTIONS
        q = [fields["upper_vorticity"] + h2 * step]
        q.append(fields["lower_vorticity"] - h1 * step)
        parts = FRACTIONS
    chosen = {"l2": psi, "enstrophy": q}[product]
    weighted = [np.sqrt(h) * one for h, one in zip(parts, chosen, strict=True)]
    return np.concatenate([one.ravel() for one in weighted])


def mean_product(model, product, u, w):
    """Domain mean by the grid, which is exact for products of two kept modes."""
    points = np.prod(model.space.points)
    return on_grid(model, product, u) @ on_grid(model, product, w) / points


@dataclass(frozen=True)
class Record:
    """A truth in memory."""

    states: np.ndarray

    @property
    def times(self):
        return np.arange(len(self.states))

    @property
    def size(self):
        return self.states.shape[1]

    def chunks(self, rows=None):
        yield slice(0, len(self.states)), self.states

    def read(self, start, stop):
        return self.states[start:stop].copy()  # as a file gives them: one's own


@pytest.mark.parametrize("product", ["l2", "enstrophy"])
@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_products_are_means_over_the_domain(kind, name, product):
    model = ocean(kind, name)
    seen = in_product(model, product)
    u, w = np.random.default_rng(3).standard_normal((2, model.size))
    # Round-off of sums of 10^2 terms.
    for a, b in ((u, u), (u, w)):
        expected = mean_product(model, product, a, b)
        size = np.sqrt(seen.inner(a, a) * seen.inner(b, b))
        assert abs(seen.inner(a, b) - expected) < 1e-13 * size
    assert seen.unit == model.inner_product(product).unit == UNITS[product]


@pytest.mark.parametrize("product", UNITS)
@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_what_advection_conserves_is_said_truly(kind, name, product):
    # Truncated advection conserves energy and potential enstrophy (Kraichnan 1967,
    # Phys. Fluids 10:1417), not the mean square of psi. Topography and beta do not
    # enter: they are linear.
    model = in_product(ocean(kind, name), product)
    z = np.random.default_rng(4).standard_normal(model.size)
    rate = model.bilinear(z, z)
    sizes = np.sum(model.inner_product(product).weights * np.abs(z * rate))
    work = abs(model.inner(z, rate)) / sizes
    assert model.energy_conserving == (product != "l2")
    # Round-off, or of the size of its terms but for the root of their number.
    assert work < 1e-13 if model.energy_conserving else work > 1e-3


@pytest.mark.parametrize("product", UNITS)
@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_the_contract_holds_in_every_product(kind, name, product):
    model = ocean(kind, name)
    check_model(in_product(model, product))
    falling = 1 / (1 + np.hypot(*model.waves.T) ** 3)
    states = np.random.default_rng(5).standard_normal((20, model.size)) * falling
    check_model(in_product(model, product), states=states)


@pytest.mark.parametrize("product", ["l2", "enstrophy"])
@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_eofs_are_the_singular_vectors_of_weighted_fields(kind, name, product):
    # Singular value decomposition of the fields on the grid, layers weighted by the
    # root of their depth: no coordinate of the ocean takes part (von Storch & Zwiers,
    # Statistical Analysis in Climate Research, 1999, section 13.1).
    model = in_product(ocean(kind, name, (8, 8)), product)
    falling = 1 / (1 + np.hypot(*model.waves.T) ** 2)
    # A mixture of patterns, so that the functions are none of the coordinates.
    rng = np.random.default_rng(6)
    states = rng.standard_normal((150, model.size)) * falling
    states = states @ (
        np.eye(model.size) + 0.3 * rng.standard_normal((model.size,) * 2)
    )
    mean = states.mean(axis=0)
    resolved, remainder = eof_basis(
        EofSettings(modes=5), model, [Record(states)], mean, share=1.0, memory=1e9
    )
    fields = np.array([on_grid(model, product, z) for z in states - mean])
    fields /= np.sqrt(np.prod(model.space.points))
    _, values, patterns = np.linalg.svd(fields, full_matrices=False)
    found = np.concatenate([resolved.variance, remainder.variance])
    expected = values[: len(found)] ** 2 / len(states)
    # Round-off of a covariance, relative to the largest variance.
    np.testing.assert_allclose(found, expected, atol=1e-12 * expected[0])
    shown = np.array([on_grid(model, product, u) for u in resolved.vectors.T])
    shown /= np.sqrt(np.prod(model.space.points))
    # The sign is free. Gaps of a percent cost two digits.
    overlap = np.abs(np.sum(shown * patterns[:5], axis=1))
    np.testing.assert_allclose(overlap, 1, atol=1e-9)
    everything = np.hstack([resolved.vectors, remainder.vectors])
    products = model.inner(everything.T[:, np.newaxis], everything.T)
    np.testing.assert_allclose(products, np.eye(len(found)), atol=1e-12)


@pytest.mark.parametrize("product", UNITS)
@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_galerkin_tensors_are_projections_in_the_product(kind, name, product):
    # Each coefficient is <u_i, B(u_j, u_k)>; here as a mean over the grid, with the
    # energy identity used by `galerkin` where the product allows it and not here.
    model = in_product(ocean(kind, name, (8, 8)), product)
    variance = 1 / (1 + np.hypot(*model.waves.T) ** 2)
    low = FourierSettings(up_to=1.5)
    resolved, rest = fourier_basis(low, model, variance, share=1.0)
    vectors, others = resolved.vectors, rest.vectors[:, :12]
    zero = np.zeros(model.size)
    found = galerkin(model, vectors, others, zero)
    # The identity holds to round-off, or not at all.
    assert (found.cyclic_residual < 1e-12) == (product != "l2")
    if product == "energy":
        return
    scale = np.abs(found.B122).max()
    assert scale > 0
    fastest = max(np.abs(found.A11).max(), np.abs(found.A21).max())
    last = vectors.shape[1] - 1
    for i, m, n in ((0, 0, 1), (last // 2, 2, 5), (last, 4, 3), (0, 5, 5)):
        made = model.bilinear(others[:, m], others[:, n])
        expected = mean_product(model, product, vectors[:, i], made)
        assert abs(found.B122[i, m, n] - expected) < 1e-12 * scale
        pushed = model.linear(vectors[:, i])
        expected = mean_product(model, product, others[:, m], pushed)
        assert abs(found.A21[m, i] - expected) < 1e-12 * fastest


def test_enstrophy_is_the_form_that_counts_what_random_forcing_feeds():
    # The weights against each ocean's own enstrophy; of a slice, that of the flow.
    slices = BoussinesqSettings(buoyancy_gradient=1.0, coriolis=0.5)
    free = BarotropicSettings(beta=2.0, mean_current_evolves=True)
    models = [ocean(kind, name) for kind, name in OCEANS]
    models.append(Boussinesq(slices, Periodic((8, 8), BOX)))
    models.append(BarotropicCurrent(free, Periodic((8, 8), BOX)))
    for model in models:
        z = np.random.default_rng(7).standard_normal(model.size)
        found = np.sum(model.enstrophy_weights * z * z) / 2
        # Round-off of sums of 10^2 terms.
        assert found == pytest.approx(model.budget(0.0, z)["enstrophy"], rel=1e-12)


def test_what_makes_no_sense_is_refused_with_the_reason():
    settings = BoussinesqSettings(
        buoyancy_gradient=1.0, viscosity=1e-3, diffusivity=1e-3
    )
    model = Boussinesq(settings, Channel((8, 8), BOX))
    assert in_product(model, "energy") is model
    for product in ("l2", "enstrophy"):
        with pytest.raises(DataError, match=r"\[resolved\].*buoyancy no weight"):
            in_product(model, product)
    with pytest.raises(DataError, match='"height": this ocean has "energy", "l2"'):
        ocean("barotropic", "basin").inner_product("height")
