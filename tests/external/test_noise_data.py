"""Fits to open data against statsmodels and scipy.

The series come with statsmodels (statsmodels.datasets, all in the public domain):
Nino 1+2 sea surface temperature, Nile volume, sunspot numbers, CO2 at Mauna Loa
and macroeconomic data of the United States.
"""

import numpy as np
import pytest
from scipy import linalg
from statsmodels import datasets
from statsmodels.tsa.ar_model import AutoReg
from statsmodels.tsa.arima.model import ARIMA
from statsmodels.tsa.vector_ar.var_model import VAR

from eddyshed.reduce.cli import main
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.lag_pairs import (
    complex_units,
    matrix_pairs,
    regressed_matrices,
    regressed_units,
    unit_pairs,
)
from eddyshed.reduce.noise.lagged import logarithms
from eddyshed.reduce.noise.likelihood import matrix_likelihood, unit_likelihood
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.solver.errors import DataError

MONTH = 365.25 / 12 * 86400


def anomalies():
    table = datasets.elnino.load_pandas().data.to_numpy(float)[:, 1:]
    return (table - table.mean(axis=0)).ravel()


def carbon_dioxide():
    """Monthly means, gaps filled on a line, less a parabola and two harmonics."""
    weekly = datasets.co2.load_pandas().data["co2"]
    y = weekly.resample("MS").mean().interpolate().to_numpy()
    t = np.arange(len(y), dtype=float)
    turns = [f(2 * np.pi * k * t / 12) for k in (1, 2) for f in (np.sin, np.cos)]
    terms = np.column_stack([np.ones_like(t), t / len(t), (t / len(t)) ** 2, *turns])
    return y - terms @ np.linalg.lstsq(terms, y, rcond=None)[0]


SERIES = {
    "elnino": anomalies,
    "nile": lambda: datasets.nile.load_pandas().data["volume"].to_numpy(float),
    "sunspots": lambda: (
        datasets.sunspots.load_pandas().data["SUNACTIVITY"].to_numpy(float)
    ),
    "co2": carbon_dioxide,
}


@pytest.fixture(scope="module", params=SERIES)
def series(request):
    return request.param, SERIES[request.param]()


def pairs_of(y):
    parts = complex_units(y[None, :, None], np.array([0]), np.array([-1]))
    return parts, unit_pairs(parts, 1, 4)


def test_regression_is_least_squares(series):
    _, y = series
    _, pairs = pairs_of(y)
    expected = AutoReg(y, 1, trend="c").fit()
    phi = regressed_units(pairs)[0][0, 0]
    assert phi.imag == 0
    assert phi.real == pytest.approx(expected.params[1], abs=1e-8)
    whole = regressed_matrices(matrix_pairs((y - y.mean())[None, :, None], 1, 4))
    assert whole[0, 0, 0] == pytest.approx(expected.params[1], abs=1e-8)


# e-folding times -1 / ln(phi) of the regression, in samples, worked out by a script
# that shares no code with this project.
@pytest.mark.parametrize(
    ("name", "time"),
    [
        ("elnino", 11.178749),
        ("nile", 1.46080865),
        ("sunspots", 5.15881475),
        ("co2", 9.46285397),
    ],
)
def test_e_folding_times(name, time):
    _, pairs = pairs_of(SERIES[name]())
    phi = regressed_units(pairs)[0][0, 0].real
    # As many digits as are printed.
    assert -1 / np.log(phi) == pytest.approx(time, rel=1e-7)


def test_the_likelihood_is_the_largest(series):
    name, y = series
    parts, pairs = pairs_of(y)
    phi, variance, value = (
        found[0, 0] for found in unit_likelihood(pairs, parts[:, :, 0], np.array([0]))
    )
    model = ARIMA(y, order=(1, 0, 0), trend="c")
    noise = variance * (1 - abs(phi) ** 2)
    best = matrix_likelihood((y - y.mean())[None, :, None])
    mean = y.mean() + best.mean[0]
    # The likelihood of our parameters, by their Kalman filter: round-off of 700 terms.
    assert model.loglike([mean, phi.real, noise]) == pytest.approx(value, abs=1e-6)
    assert best.value == pytest.approx(value, abs=1e-6)
    assert best.propagator[0, 0] == pytest.approx(phi.real, abs=1e-5)
    theirs = model.fit()
    assert theirs.llf <= value + 1e-6
    # On the Nile their search stops early, five ten-thousandths below.
    close = 1e-3 if name == "nile" else 1e-4
    assert theirs.llf == pytest.approx(value, abs=close)


@pytest.fixture(scope="module")
def macro():
    return datasets.macrodata.load_pandas().data


@pytest.mark.parametrize(
    "columns", [["unemp", "tbilrate"], ["infl", "unemp", "tbilrate"]]
)
def test_matrices_are_those_of_a_vector_autoregression(macro, columns):
    y = macro[columns].to_numpy(float)
    centred = y - y.mean(axis=0)
    pairs = matrix_pairs(centred[None], 1, 4)
    phi = regressed_matrices(pairs)[0]
    theirs = VAR(y).fit(1)
    np.testing.assert_allclose(phi, theirs.coefs[0], rtol=0, atol=1e-8)
    left = centred[1:] - centred[:-1] @ phi.T
    left -= left.mean(axis=0)
    freedom = len(left) - len(columns) - 1
    np.testing.assert_allclose(
        left.T @ left / freedom, theirs.sigma_u, rtol=0, atol=1e-8
    )
    # The generator, and the times that it stands for, against scipy's logarithm.
    rate = logarithms(phi, 1.0, columns)
    np.testing.assert_allclose(rate, -linalg.logm(phi), rtol=0, atol=1e-10)
    np.testing.assert_allclose(linalg.expm(-rate), phi, rtol=0, atol=1e-10)
    times = np.sort(1 / np.linalg.eigvals(rate).real)
    expected = np.sort(-1 / np.log(np.abs(np.linalg.eigvals(theirs.coefs[0]))))
    np.testing.assert_allclose(times, expected, rtol=1e-9)
    # Its stationary covariance, and the noise that keeps it, which must exist.
    covariance = linalg.solve_discrete_lyapunov(phi, theirs.sigma_u)
    process = OrnsteinUhlenbeck(rate=rate, covariance=covariance)
    np.testing.assert_allclose(
        process.innovation_covariance(1.0), theirs.sigma_u, rtol=0, atol=1e-8
    )


def test_growth_rates_are_samples_of_no_process(macro):
    # Quarterly growth of product, consumption and investment: its lag matrix has one
    # negative eigenvalue, and so no real logarithm (W. J. Culver 1966, Proc. Amer.
    # Math. Soc. 17, 1146).
    levels = macro[["realgdp", "realcons", "realinv"]].to_numpy(float)
    growth = np.diff(np.log(levels), axis=0)
    values = np.linalg.eigvals(VAR(growth).fit(1).coefs[0])
    assert np.sum((values.imag == 0) & (values.real < 0)) == 1
    for method, options in (("likelihood", {}), ("regression", {"lag": 1.0})):
        with pytest.raises(DataError, match="real logarithm asks for none that is"):
            fit_ornstein_uhlenbeck(
                growth[None], 1.0, method=method, structure="full", **options
            )


def test_sunspots_are_refused_by_the_likelihood():
    y = SERIES["sunspots"]()
    with pytest.raises(DataError, match="the series is smooth at this lag, or turns"):
        fit_ornstein_uhlenbeck(y[None, :, None], 1.0, method="likelihood")


def written(path, name, values):
    path.write_text(name + "\n" + "\n".join(map(repr, map(float, values))))
    return str(path)


def verdicts(capsys, *arguments):
    assert main(["noise", *arguments]) == 0
    words = capsys.readouterr().out
    lines = (line.split("  ") for line in words.splitlines() if "  " in line)
    return {line[0]: next(x for x in line[1:] if x).strip() for line in lines}, words


def test_the_command_says_that_el_nino_has_no_one_rate(tmp_path, capsys):
    # -ln r(tau) / tau rises from 0.09 to 0.22 a month between 1 and 9 months (worked
    # out by hand from the same data): C. Penland and P. D. Sardeshmukh (1995), J.
    # Climate 8, 1999.
    file = written(tmp_path / "elnino.csv", "sst [K]", anomalies())
    found, words = verdicts(
        capsys, file, "--variable", "sst", "--step", "30.4375 d", "--method", "integral"
    )
    assert found["lag consistency"] == "fails"
    assert "732 samples, one each 30.44 d" in words
    assert "(K)^2" in words


def test_the_command_says_that_sunspots_are_no_red_noise(tmp_path, capsys):
    # G. U. Yule (1927), Phil. Trans. R. Soc. A 226, 267: two lags are needed.
    file = written(tmp_path / "sunspots.csv", "number", SERIES["sunspots"]())
    found, _ = verdicts(capsys, file, "--variable", "number", "--step", "1 yr")
    assert found["whiteness"] == "fails"
    assert found["lag consistency"] == "fails"
