"""Means, budgets and fields of the report against what is known of them."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest

from eddyshed.reduce.report.flow import round_number
from eddyshed.reduce.report.measures import (
    batch_edges,
    batch_states,
    block_ranges,
    eastward_profile,
    energy_budget,
    of_batches,
    refined,
)
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.periodic import Periodic


@pytest.fixture
def rng():
    return np.random.default_rng(20260101)


@dataclass
class Record:
    """States in memory, read in stretches of seven."""

    states: np.ndarray

    @property
    def times(self):
        return np.arange(len(self.states)) * 2.0

    @property
    def size(self):
        return self.states.shape[1]

    def chunks(self):
        for start in range(0, len(self.states), 7):
            where = slice(start, min(start + 7, len(self.states)))
            yield where, self.states[where]


class TestBatches:
    @pytest.mark.parametrize("count", [1, 2, 7, 39, 40, 1001])
    def test_parts_cover_the_record_and_are_nearly_equal(self, count):
        edges = batch_edges(count)
        sizes = np.diff(edges)
        assert edges[0] == 0
        assert edges[-1] == count
        assert len(sizes) == max(1, min(20, count // 2))
        assert np.ptp(sizes) <= 1

    def test_error_of_a_mean_of_independent_values(self, rng):
        """Standard deviation over the root of the number (any textbook)."""
        values = rng.standard_normal((20, 50, 2000))
        found = of_batches(values.mean(axis=1), values.mean(axis=(0, 1)))
        # The mean square of 2000 errors, each from 19 degrees of freedom, is known
        # to sqrt(2 / 19 / 2000) = 0.7 %: four of its standard errors.
        ratio = np.mean(found.error**2) * 1000
        assert ratio == pytest.approx(1, abs=0.03)

    def test_one_batch_has_no_error(self):
        assert of_batches(np.ones((1, 3)), np.ones(3)).error.tolist() == [np.inf] * 3

    def test_mean_states_do_not_depend_on_how_the_file_is_read(self, rng):
        states = rng.standard_normal((101, 5))
        expected = [states[part].mean(axis=0) for part in _parts(101)]
        np.testing.assert_allclose(batch_states(Record(states)), expected, atol=1e-14)


def _parts(count):
    return [slice(a, b) for a, b in pairwise(batch_edges(count))]


class TestEnergyBudget:
    def test_closes_for_an_oscillator_that_is_driven_and_damped(self):
        """E' = work + dissipation, integrated by the trapezoid to second order."""
        errors = []
        for count in (2001, 4001):
            t = np.linspace(0, 30, count)
            energy = 2 + np.sin(t)
            work, dissipation = 3 + np.cos(t), -3 + 0 * t
            terms = {"energy": energy, "work": work, "dissipation": dissipation}
            found = energy_budget(t, terms)
            errors.append(abs(float(found.residual.value)))
            change = np.sin(30) / 30
            assert float(found.change.value) == pytest.approx(change, rel=1e-12)
            assert float(found.dissipation.value) == pytest.approx(-3, rel=1e-12)
            assert float(found.dissipation.error) < 1e-12  # rounding alone
            # Trapezoid: dt^2 / 12 times the change of the slope over the length.
            assert float(found.work.value) == pytest.approx(3 + change, abs=1e-5)
            assert found.batches == 20
        assert errors[0] / errors[1] == pytest.approx(4, rel=0.02)

    def test_what_is_not_accounted_for_stays(self):
        t = np.linspace(0, 30, 2001)
        terms = {"energy": 1 + t, "work": 0 * t, "dissipation": 0 * t - 0.25}
        found = energy_budget(t, terms)
        assert float(found.residual.value) == pytest.approx(1.25, rel=1e-12)


class TestFlow:
    def test_eastward_velocity_of_a_plane_wave(self):
        """``u = -psi_y`` (Pedlosky 1987, ch. 3); a wave along x has no mean."""
        space = Periodic((16, 24), (1e6, 2e6))
        ocean = Barotropic(BarotropicSettings(), space)
        x, y = space.grid_axes
        m = 2 * np.pi * 3 / 2e6
        psi = 5e3 * np.cos(m * y)[:, None] + 1e3 * np.cos(4 * np.pi * x / 1e6)
        found = eastward_profile(ocean, ocean.coordinates(space.to_modes(psi)))
        np.testing.assert_allclose(found, 5e3 * m * np.sin(m * y), atol=1e-12)

    def test_a_finer_grid_shows_the_same_waves(self):
        def field(ny, nx):
            x, y = (2 * np.pi * np.arange(n) / n for n in (nx, ny))
            return np.cos(3 * x - 2 * y[:, None]) + np.sin(4 * y)[:, None]

        found = refined(field(12, 10), 50)
        assert found.shape == (60, 50)
        np.testing.assert_allclose(found, field(60, 50), atol=1e-13)
        np.testing.assert_array_equal(found.shape, refined(found, 30).shape)

    def test_blocks_hold_every_sample_once(self, rng):
        series = rng.standard_normal(1003)
        mean, low, high = block_ranges(series, 10)
        assert len(mean) == 10
        assert (low.min(), high.max()) == (series.min(), series.max())
        assert np.all((low < mean) & (mean < high))
        assert [len(block) for block in block_ranges(series[:3], 10)] == [3, 3, 3]

    @pytest.mark.parametrize(
        ("value", "rounded"), [(0.0, 0.0), (1.9, 1), (2.0, 2), (49.0, 20), (7e4, 5e4)]
    )
    def test_round_numbers(self, value, rounded):
        assert round_number(value) == pytest.approx(rounded, rel=1e-12)
