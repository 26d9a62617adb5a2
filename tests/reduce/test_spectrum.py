"""Sampling errors of a spectrum, and functions that a record does not tell apart."""

import numpy as np
from scipy import linalg
from scipy.signal import lfilter

from eddyshed.reduce.bases.basis import Basis
from eddyshed.reduce.bases.spectrum import (
    degenerate_groups,
    distances,
    sampling_errors,
    spectrum_notes,
)


def basis(variance, first=1):
    count = len(variance)
    return Basis(
        vectors=np.eye(count),
        labels=tuple(f"EOF {first + k}" for k in range(count)),
        partners=np.full(count, -1),
        variance=np.array(variance, float),
    )


def test_the_published_example():
    # North et al. (1982), Mon. Weather Rev. 110:699: eigenvalues 14.0, 12.6, 10.7 and
    # 10.4 (their example, from memory). With 300 independent samples the errors are
    # 1.14, 1.03, .87 and .85, and the last two are an effectively degenerate pair.
    variance = [14.02, 12.61, 10.67, 10.43]
    rng = np.random.default_rng(3)
    series = rng.standard_normal((1, 300, 4)) * np.sqrt(variance)
    found = sampling_errors(basis(variance), series, 1.0)
    # White noise has as many independent samples as there are, to the error of its
    # squared correlation function.
    np.testing.assert_allclose(found.error, [1.14, 1.03, 0.87, 0.85], rtol=0.15)
    exact = np.array(variance) * np.sqrt(2 / 300)
    apart = distances(basis(variance), basis([5.0], first=5))
    np.testing.assert_allclose(apart, [1.41, 1.94, 0.24, 5.43])
    assert degenerate_groups(exact, apart) == [(2, 3)]


def test_errors_are_the_scatter_of_eigenvalues():
    """200 records of red noise of three well-separated variances."""
    deviations, phi = np.array([3.0, 2.0, 1.0]), 0.8
    rng = np.random.default_rng(5)
    noise = rng.standard_normal((200, 1100, 3))
    series = lfilter([np.sqrt(1 - phi**2)], [1, -phi], noise, axis=1)[:, 100:]
    series *= deviations
    found, said = [], []
    for one in series:
        centred = one - one.mean(axis=0)
        variance, vectors = linalg.eigh(centred.T @ centred / len(one))
        variance, vectors = variance[::-1], vectors[:, ::-1]
        found.append(variance)
        own = (centred @ vectors)[np.newaxis]
        said.append(sampling_errors(basis(variance), own, 1.0).error)
    scatter = np.std(found, axis=0)
    # Known to 1 / sqrt(400) = 5 %: three of those.
    np.testing.assert_allclose(np.mean(said, axis=0), scatter, rtol=0.15)


def test_runs_are_named_and_the_cut_is_pointed_out():
    error = np.array([1.0, 1.0, 1.0, 1.0])
    assert degenerate_groups(error, np.array([0.5, 0.5, 3.0, 0.2])) == [(0, 2), (3, 4)]
    assert degenerate_groups(error, np.array([2.0, 2.0, 2.0, np.inf])) == []
    rng = np.random.default_rng(1)
    series = rng.standard_normal((1, 400, 3)) * np.sqrt([10, 5, 4.9])
    notes = spectrum_notes(basis([10, 5, 4.9]), basis([4.8, 1], 4), series, 1.0)
    assert len(notes) == 1
    assert notes[0].startswith("EOF 2 to EOF 4: variances no further apart than")
    assert "goes through it: keep 1 or more than 4 modes" in notes[0]
    apart = spectrum_notes(basis([10, 5, 4.9]), basis([1.0], 4), series, 1.0)
    assert apart[0].startswith("EOF 2 to EOF 3")
    assert "cut" not in apart[0]
    assert spectrum_notes(basis([10, 5, 2.5]), basis([1.0], 4), series, 1.0) == []


def test_a_record_that_is_too_short_has_no_error():
    # Half a wave: nothing is known of how long it remembers.
    slow = np.linspace(-1, 1, 50)[np.newaxis, :, np.newaxis]
    found = sampling_errors(basis([1.0]), slow, 1.0)
    assert np.isinf(found.error[0])
    assert degenerate_groups(found.error, np.array([0.9])) == [(0, 1)]
