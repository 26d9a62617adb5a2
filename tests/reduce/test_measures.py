"""Means, budgets and fields of the report against what is known of them."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest

from eddyshed.reduce.report.flow_fields import round_number
from eddyshed.reduce.report.measures import (
    Finer,
    batch_edges,
    batch_states,
    block_ranges,
    eastward_profile,
    energy_rates,
    of_batches,
)
from eddyshed.solver.diagnostics import budget_of
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
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


class TestRates:
    def test_their_means_are_the_terms_of_the_budget(self, rng):
        t = np.cumsum(rng.uniform(1, 2, 61))
        series = {
            "energy": rng.uniform(1, 2, 61),
            "work": rng.uniform(0, 1, 61),
            "drag": rng.uniform(-1, 0, 61),
            "idle": np.zeros(61),
            "energy_fed_by_gusts": np.cumsum(rng.uniform(0, 1, 61)),
            "enstrophy": rng.uniform(1, 2, 61),
        }
        units = dict.fromkeys(series, "m2 s-3")
        units |= {"energy": "m2 s-2", "energy_fed_by_gusts": "m2 s-2"}
        units["enstrophy"] = "s-2"
        found = energy_rates(t, series, units)
        terms = budget_of(t, series, units).terms
        assert set(found) == set(terms) - {"idle"} == {"work", "drag", "gusts"}
        for name, rate in found.items():
            mean = np.average(rate, weights=np.diff(t))
            assert mean == pytest.approx(terms[name].value, rel=1e-12)  # rounding


class TestFlow:
    def test_eastward_velocity_of_a_plane_wave(self):
        """``u = -psi_y`` (Pedlosky 1987, ch. 3); a wave along x has no mean."""
        space = Periodic((16, 24), (1e6, 2e6))
        x, y = space.grid_axes
        m = 2 * np.pi * 3 / 2e6
        psi = 5e3 * np.cos(m * y)[:, None] + 1e3 * np.cos(4 * np.pi * x / 1e6)
        found = eastward_profile(space, space.to_modes(psi))
        np.testing.assert_allclose(found, 5e3 * m * np.sin(m * y), atol=1e-12)

    @pytest.mark.parametrize("kind", [Periodic, Channel, Basin])
    def test_a_finer_grid_shows_the_same_functions(self, kind):
        """Sines between walls, waves where the box repeats, as written down here."""
        lengths = np.array([3.0, 2.0])

        def field(space):
            x, y = space.grid_axes
            y = y[:, None]
            along = (1 if kind is Basin else 2) * np.pi * x / lengths[0]
            up = (2 if kind is Periodic else 1) * np.pi * y / lengths[1]
            mixed = 0 if kind is Basin else np.cos(along) * np.sin(3 * up)
            return np.sin(3 * along) * np.sin(2 * up) + mixed

        space = kind((12, 10), tuple(lengths))
        finer = Finer(space, 50)
        assert finer.space.points == (60, 50)
        # Rounding of a few transforms.
        np.testing.assert_allclose(
            finer.field(field(space)), field(finer.space), atol=1e-13
        )

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
