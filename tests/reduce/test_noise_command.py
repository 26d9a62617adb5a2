"""Series out of files, what is checked of them, and the command that prints it."""

import json

import h5py
import netCDF4
import numpy as np
import pytest

from eddyshed.reduce.cli import main
from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck, fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.from_file import read_series
from eddyshed.reduce.noise.series_checks import check_series
from eddyshed.solver.errors import DataError

DAY = 86400.0


def red(times, seed, step=0.2, members=1):
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    rng = np.random.default_rng(seed)
    return process.simulate(times, step, rng, members=members)[:, :, 0].T


@pytest.fixture
def csv(tmp_path):
    """A file of two columns at steps of a fifth of a day."""
    path = tmp_path / "series.csv"
    lines = ["# made up", "time [d], warm [K], cold (m/s)"]
    values = red(3000, 1, members=2)
    lines += [
        f"{0.2 * k:.1f}, {a!r}, {b!r}" for k, (a, b) in enumerate(values.tolist())
    ]
    path.write_text("\n".join(lines))
    return path, values


# --- Reading ----------------------------------------------------------------


def test_a_text_file_is_read(csv):
    path, values = csv
    found = read_series(path, ["cold", "warm"], time="time")
    np.testing.assert_array_equal(found.values[0], values[:, ::-1])
    assert found.step == pytest.approx(0.2 * DAY, rel=1e-12)
    assert (found.names, found.units) == (("cold", "warm"), ("m/s", "K"))
    assert read_series(path, ["warm"], step=7.0).step == 7.0


def test_a_netcdf_file_is_read(tmp_path):
    # Written by another library; packed and with a fill value, after the CF
    # conventions, sections 2.5.1 and 8.1.
    path = tmp_path / "series.nc"
    values = red(500, 2)[:, 0]
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("time", 500)
        file.createDimension("mode", 2)
        time = file.createVariable("time", "f8", ("time",))
        time.units = "hours since 1950-01-01 00:00:00"
        time[:] = 6 * np.arange(500)
        packed = file.createVariable("t2m", "i2", ("time",), fill_value=-32768)
        packed.scale_factor, packed.add_offset, packed.units = 1e-3, 280.0, "K"
        packed[:] = 280 + values
        both = file.createVariable("both", "f8", ("time", "mode"))
        both[:] = np.stack([values, -values], axis=1)
    found = read_series(path, ["t2m", "both"])
    assert found.step == 6 * 3600
    assert found.names == ("t2m", "both[0]", "both[1]")
    assert found.units == ("K", "", "")
    np.testing.assert_allclose(found.values[0, :, 0], 280 + values, atol=6e-4)
    np.testing.assert_array_equal(found.values[0, :, 2], -values)
    with netCDF4.Dataset(path, "a") as file:
        file["t2m"][7] = np.ma.masked
    with pytest.raises(DataError, match="1 missing values, the first at number 8"):
        read_series(path, ["t2m"])


def test_dates_are_times(tmp_path):
    path = tmp_path / "dates.csv"
    path.write_text("day;y\n2001-02-27;1\n2001-02-28;2\n2001-03-01;4\n")
    assert read_series(path, ["y"], time="day").step == DAY


@pytest.mark.parametrize(
    ("text", "options", "words"),
    [
        ("t,y\n0,1\n1,2\n", {"variables": ["z"]}, 'no variable "z", there are t, y'),
        ("t,y\n0,1\n1,2\n", {"variables": ["Y"]}, 'did you mean "y"'),
        ("t,y\n0,1\n1,\n2,3\n", {"step": 1.0}, "1 missing values, the first at"),
        ("t,y\n0,1\n1,nan\n", {"step": 1.0}, "missing values"),
        ("t,y\n0,1\n1,two\n", {"step": 1.0}, 'y holds "two" in its row 2'),
        ("t,y\n0,1\n1,2,3\n", {"step": 1.0}, "line 3 .* has 3 cells, the heading 2"),
        ("t,y\n0,1\n1,2\n", {}, "no times; name their column"),
        ("t,y\n0,1\n1,2\n", {"time": "t"}, "times with no unit.*--time-unit"),
        ("t [K],y\n0,1\n1,2\n", {"time": "t"}, 'the unit "K", allowed are s, min'),
        ("t [d],y\n0,1\n1,2\n3,4\n", {"time": "t"}, "uneven times: 1 d between"),
        ("t [d],y\n2,1\n1,2\n0,4\n", {"time": "t"}, "uneven times|rising"),
        ("t [d],y\n1,1\n1,2\n1,4\n", {"time": "t"}, "rising times at equal steps"),
        ("t,y\n0,1\n1,2\n", {"time": "t", "step": 1.0}, "one or the other"),
        ("", {"step": 1.0}, "empty"),
    ],
)
def test_unusable_text_is_refused(tmp_path, text, options, words):
    path = tmp_path / "bad.csv"
    path.write_text(text)
    with pytest.raises(DataError, match=words):
        read_series(path, options.pop("variables", ["y"]), **options)


def test_unusable_files_are_refused(tmp_path):
    with pytest.raises(DataError, match="no such file"):
        read_series(tmp_path / "none.nc", ["y"], step=1.0)
    path = tmp_path / "text.nc"
    path.write_text("no HDF5")
    with pytest.raises(DataError, match="neither HDF5 nor netCDF-4"):
        read_series(path, ["y"], step=1.0)
    path = tmp_path / "latin.csv"
    path.write_bytes(b"y\n\xff\n")
    with pytest.raises(DataError, match="UTF-8"):
        read_series(path, ["y"], step=1.0)
    path = tmp_path / "odd.h5"
    with h5py.File(path, "w") as file:
        file["group/cube"] = np.zeros((3, 3, 3))
        file["words"] = ["a", "b"]
        file["short"], file["long"] = np.arange(5.0), np.arange(6.0)
    for names, words in (
        (["group/cube"], r"shape \(3, 3, 3\)"),
        (["words"], "allowed are real numbers"),
        (["group"], "there are group/cube, long, short, words"),
        (["short", "long"], "long has 6 times, short has 5"),
    ):
        with pytest.raises(DataError, match=words):
            read_series(path, names, step=1.0)


# --- Checks -----------------------------------------------------------------


def test_checks_hold_for_what_they_assume():
    series = red(20_000, 3, members=40)[None]
    process = OrnsteinUhlenbeck(rate=np.eye(40), covariance=np.eye(40))
    checks = check_series(series, 0.2, process, np.random.default_rng(4))
    assert len(checks) == 7
    for check in checks:
        # 4000 e-folding times settle it; 1 % of all verdicts may err, of 40 none.
        assert "fails" not in check.verdicts, check.name
        assert check.verdicts.count("holds") >= 38, check.name


def test_checks_seldom_fail_short_records_of_what_they_assume():
    # Thresholds lie beyond the null, so that a wrong verdict is rarer than 5 %.
    series = red(500, 5, members=200)[None]
    process = OrnsteinUhlenbeck(rate=np.eye(200), covariance=np.eye(200))
    for check in check_series(series, 0.2, process, np.random.default_rng(6)):
        # At a true 5 % more than 9 % of 200 fail in 1 % of cases.
        assert check.verdicts.count("fails") <= 18, check.name


def test_each_check_sees_what_it_is_for():
    base = red(20_000, 7, members=7)
    base[:, 0] = np.exp(base[:, 0])  # skewed, heavy tails
    base[:, 1] += 0.7 * base[:, 2] + np.repeat([0, 2], 10_000)  # a shift of the mean
    base[10_000:, 3] *= 2  # louder in the second half
    base[:, 4] += np.linspace(-2, 2, 20_000)  # a trend
    base[:, 5] = np.convolve(base[:, 5], np.ones(11), "same")  # smooth
    process = OrnsteinUhlenbeck(rate=np.eye(7), covariance=np.eye(7))
    series = base[None]
    checks = check_series(series, 0.2, process, np.random.default_rng(8))
    found = {check.name: check.verdicts for check in checks}
    for name, mode in (
        ("normality: symmetry", 0),
        ("normality: tails", 0),
        ("stationarity: mean", 1),
        ("stationarity: variance", 3),
        ("stationarity: trend", 4),
        ("whiteness", 5),
        ("lag consistency", 5),
    ):
        assert found[name][mode] == "fails", name
        assert found[name][6] == "holds", name
        worst = next(check.worst for check in checks if check.name == name)
        assert found[name][worst] == "fails"


def test_two_time_scales_have_no_one_rate():
    # rho = exp(-t) / 2 + exp(-t / 10) / 2: -ln rho / t falls from 0.55 to 0.1 (worked
    # out by hand); C. Penland and P. D. Sardeshmukh (1995), J. Climate 8, 1999.
    slow = OrnsteinUhlenbeck(rate=[[0.1]], covariance=[[1.0]])
    series = red(40_000, 9)[None] + slow.simulate(40_000, 0.2, np.random.default_rng(1))
    process = fit_ornstein_uhlenbeck(series, 0.2).process
    checks = check_series(series, 0.2, process, np.random.default_rng(2))
    verdicts = {check.name: check.verdicts[0] for check in checks}
    assert verdicts["lag consistency"] == "fails"
    assert verdicts["normality: tails"] == "holds"


def test_a_wave_is_checked_as_one():
    # Of one part the correlation turns negative; that of the amplitude does not.
    process = OrnsteinUhlenbeck(rate=[[0.2, -2], [2, 0.2]], covariance=np.eye(2))
    series = process.simulate(40_000, 0.1, np.random.default_rng(10))
    rng = np.random.default_rng(11)
    for partners, verdict in (([1, 0], "holds"), (None, "fails")):
        checks = check_series(series, 0.1, process, rng, partners)
        found = {check.name: check.verdicts for check in checks}
        assert found["lag consistency"] == [verdict] * 2
        assert found["whiteness"] == ["holds"] * 2


# --- The command ------------------------------------------------------------


def test_the_command_prints_what_it_found(csv, capsys):
    path, _ = csv
    arguments = ["noise", str(path), "--variable", "warm", "--time", "time"]
    assert main(arguments) == 0
    words = capsys.readouterr().out
    assert "3000 samples, one each 4.8 h" in words
    assert "Ornstein-Uhlenbeck noise by integral (real diagonal)" in words
    assert main([*arguments, "--json", "--method", "likelihood"]) == 0
    found = json.loads(capsys.readouterr().out)
    # One a day, in SI; the stream is fixed.
    decay = found["eigen_decay"]
    assert abs(decay["value"][0] * DAY - 1) < 4 * decay["error"][0] * DAY
    low, high = decay["interval"]
    assert low[0] < decay["value"][0] < high[0]
    noise = found["noise"]
    assert abs(noise["value"][0] * DAY - 2) < 4 * noise["error"][0] * DAY
    assert {check["name"] for check in found["checks"]} >= {"whiteness"}
    assert main([*arguments, "--json", "--method", "likelihood"]) == 0
    assert json.loads(capsys.readouterr().out) == found


def test_the_command_fits_waves_and_draws(tmp_path, capsys):
    process = OrnsteinUhlenbeck(rate=[[0.3, -1], [1, 0.3]], covariance=np.eye(2))
    series = process.simulate(4000, 0.2, np.random.default_rng(12))[0]
    path, figure = tmp_path / "wave.h5", tmp_path / "wave.svg"
    with h5py.File(path, "w") as file:
        file["real"], file["imag"] = series.T
    arguments = ["noise", str(path), "--variable", "real", "--variable", "imag"]
    arguments += ["--step", "0.2 d", "--structure", "complex diagonal"]
    assert main([*arguments, "--figure", str(figure)]) == 0
    words = capsys.readouterr().out
    # A period of 2 pi days, to a percent or two.
    row = next(line for line in words.splitlines() if line.startswith("1  "))
    assert "d (+- " in row
    drawn = figure.read_bytes()
    assert b"<svg" in drawn
    assert main([*arguments, "--figure", str(figure)]) == 0
    assert figure.read_bytes() == drawn
    assert list(tmp_path.iterdir()).count(figure) == 1
    assert len(list(tmp_path.iterdir())) == 2


@pytest.mark.parametrize(
    ("extra", "words"),
    [
        (["--step", "2"], '--step: "2" has no unit'),
        (["--step", "2 m"], "--step:"),
        (["--structure", "complex diagonal"], "an even number"),
        (["--figure", "none/there.png"], "a folder that exists"),
        (["--figure", "figure.gif"], "whose name ends in .png, .svg, .pdf"),
        (["--method", "regression"], "a lag of None s"),
        (["--window", "1 h"], "window of 3600.0 s"),
    ],
)
def test_the_command_refuses(csv, capsys, extra, words):
    path, _ = csv
    arguments = ["noise", str(path), "--variable", "warm"]
    if "--step" not in extra:
        arguments += ["--time", "time"]
    assert main([*arguments, *extra]) == 2
    caught = capsys.readouterr()
    assert words in caught.err
    assert caught.out == ""


def test_constant_series_are_named(tmp_path, capsys):
    path = tmp_path / "flat.csv"
    path.write_text("y\n" + "3\n" * 100)
    assert main(["noise", str(path), "--variable", "y", "--step", "1 d"]) == 2
    assert "mode y is constant" in capsys.readouterr().err


def test_without_matplotlib_there_is_no_figure(csv, capsys, monkeypatch):
    import sys

    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    monkeypatch.delitem(sys.modules, "eddyshed.reduce.noise.figure", raising=False)
    path, _ = csv
    arguments = ["noise", str(path), "--variable", "warm", "--time", "time"]
    assert main([*arguments, "--figure", "x.png"]) == 2
    assert 'pip install "eddyshed[figures]"' in capsys.readouterr().err
