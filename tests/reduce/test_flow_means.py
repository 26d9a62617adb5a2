"""Means of a flow with their errors, and its fields, against what is known of them."""

import numpy as np
import pytest
from scipy.signal import lfilter

from eddyshed.reduce.flow.fields import Finer, eastward_profile
from eddyshed.reduce.flow.means import (
    batch_edges,
    block_ranges,
    mean_of,
    of_batches,
)
from eddyshed.reduce.report.flow_fields import round_number
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic


@pytest.fixture
def rng():
    return np.random.default_rng(20260101)


def red_noise(rng, members, times, columns, phi):
    """First-order autoregressive series of unit variance, with its stationary start."""
    shocks = np.sqrt(1 - phi**2) * rng.standard_normal((members, times, columns))
    shocks[:, 0] /= np.sqrt(1 - phi**2)
    return lfilter([1.0], [1.0, -phi], shocks, axis=1)


class TestErrors:
    @pytest.mark.parametrize(("phi", "members"), [(0.0, 1), (0.9, 1), (0.9, 4)])
    def test_are_those_of_red_noise(self, rng, phi, members):
        """Variance of the mean (1 + phi) / (1 - phi) / n: Bartlett 1946, Leith 1973."""
        times, columns = 4000 // members, 600
        found = mean_of(red_noise(rng, members, times, columns, phi), 2.0)
        count = members * times
        expected = np.sqrt((1 + phi) / (1 - phi) / count)
        # The larger of two numbers that are right but for 12 and 16 % (from 19 degrees
        # of freedom) is some 6 % too large; the integral that ends where the
        # correlation is 0.05 takes off 2 %. Their mean over 600 is good to half a
        # percent.
        assert 1.01 < np.mean(found.error) / expected < 1.1
        inside = np.mean(np.abs(found.value) < 1.96 * found.error)
        # A share of 0.96 of 600 has the standard error 0.008: three of those.
        assert 0.935 < inside < 0.985

    def test_see_a_slow_change_behind_a_fast_oscillation(self, rng):
        # A third of the variance remembers 100 steps, the rest is an oscillation of
        # 20 steps that goes on for 40: the mean's variance is all of the slow part,
        # 2 / 3 100 over n, and hardly any of the other.
        times, columns = 20_000, 100
        slow = red_noise(rng, 1, times, columns, np.exp(-1 / 100)) / np.sqrt(3)
        pole = np.exp(-1 / 40 + 2j * np.pi / 20)
        shocks = rng.standard_normal((1, times, columns, 2)) @ [1, 1j]
        fast = lfilter([1.0], [1.0, -pole], shocks, axis=1).real
        fast *= np.sqrt(2 / 3) / fast.std()
        found = mean_of(slow + fast, 1.0)
        expected = np.sqrt(200 / 3 / times)
        # By batches of ten memories: a twentieth too small in variance; from 19
        # degrees of freedom each, over 100 columns to 2 %.
        assert np.mean(found.error) == pytest.approx(expected, rel=0.08)

    def test_of_a_step_twice_as_long_are_the_same(self, rng):
        # Two samples in a correlation time tell as much as four.
        series = red_noise(rng, 1, 40000, 50, 0.95)
        fine, coarse = mean_of(series, 1.0), mean_of(series[:, ::4], 4.0)
        assert coarse.error.mean() == pytest.approx(fine.error.mean(), rel=0.05)

    def test_of_constants_are_zero_and_of_short_records_unknown(self, rng):
        series = np.stack([np.full(100, 3.1), rng.standard_normal(100)], axis=1)
        found = mean_of(series[np.newaxis], 1.0)
        assert found.value[0] == pytest.approx(3.1, rel=1e-14)
        assert found.error[0] == 0
        assert 0.05 < found.error[1] < 0.2
        assert mean_of(series[np.newaxis, :7], 1.0).error.tolist() == [0, np.inf]
        trend = np.arange(100.0)[np.newaxis, :, np.newaxis]
        # A record that only rises does not know its own memory beyond its half.
        assert mean_of(trend, 1.0).error[0] > 10


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


class TestFields:
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
