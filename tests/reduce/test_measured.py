"""What is measured, through the whole chain, in its own units."""

import json

import numpy as np
import pytest

from eddyshed.reduce.bases.basis import Basis, Measured
from eddyshed.reduce.cli import main
from eddyshed.reduce.measured import measured_rows, measured_statistics
from eddyshed.reduce.settings import StudyConfig
from eddyshed.reduce.stages import STAGES
from eddyshed.reduce.study import Study, fingerprint_of
from eddyshed.solver.boxes import box_averages
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config, read_config
from eddyshed.solver.errors import DataError
from eddyshed.solver.record import open_record


def basis(matrix):
    measured = Measured(
        matrix=matrix,
        labels=("a", "b"),
        units=("m s-1", "s-1"),
        long_names=("one", "other"),
    )
    return Basis(
        vectors=np.eye(2),
        labels=("a", "b"),
        partners=np.array([-1, -1]),
        variance=np.ones(2),
        measured=measured,
    )


def test_statistics_are_those_of_the_measurements():
    rng = np.random.default_rng(2)
    series = rng.standard_normal((2, 4000, 2)) * [1.0, 2.0] + [3.0, -1.0]
    matrix = np.array([[2.0, 0.0], [1.0, 1.0]])
    found = measured_statistics(basis(matrix), series, 3600.0, rng)
    # Linear functions of independent normal numbers: means M m, variances M^2 v.
    for quantity, expected in (
        ("mean", [6.0, 2.0]),
        ("standard deviation", [2.0, np.sqrt(5)]),
        ("integral time", [1800.0 * 0.95, 1800.0 * 0.95]),
    ):
        value, error = (np.array(found[quantity][part]) for part in ("value", "error"))
        # Four standard errors; white noise forgets within a sample, of which the
        # trapezoid sees half, up to where the line falls below a twentieth.
        slack = 60.0 if quantity == "integral time" else 0.0
        assert np.all(np.abs(value - expected) < 4 * error + slack), quantity
    # The standard deviation of n normal numbers errs by s / sqrt(2 n).
    error = np.array(found["standard deviation"]["error"])
    np.testing.assert_allclose(
        error, np.array([2, 5**0.5]) / 8000**0.5 / 2**0.5, rtol=0.3
    )
    nothing = Basis(
        vectors=np.eye(2),
        labels=("a", "b"),
        partners=np.array([-1, -1]),
        variance=np.ones(2),
    )
    assert measured_statistics(nothing, series, 1.0, rng) is None


STUDY = """
name = "boxes"
seed = 3
[grid]
points = [16, 16]
lengths = ["1800 km", "1800 km"]
[ocean]
kind = "barotropic"
beta = "2.02e-11 m-1 s-1"
drag = "0.02 1/d"
viscosity = "500 m2/s"
[stirring]
energy_rate = "1e-9 m2/s3"
band = [2, 4]
[time]
step = "0.5 d"
spin_up = "200 d"
duration = "5000 d"
[output]
state_every = "1 d"
[resolved]
kind = "boxes"
[resolved.boxes.north]
field = "eastward_velocity"
y = ["1000 km", "1600 km"]
[resolved.boxes.south_west]
field = "streamfunction"
x = ["100 km", "900 km"]
y = ["100 km", "700 km"]
[unresolved]
variance = 0.7
[noise]
window = "100 d"
[closures]
use = ["coloured"]
[benchmark]
members = 4
"""


@pytest.mark.slow
def test_a_study_reports_its_boxes(tmp_path, capsys):
    path = tmp_path / "boxes.toml"
    path.write_text(STUDY)
    assert main(["study", str(path), "--runs", str(tmp_path / "runs"), "--quiet"]) == 0
    printed = capsys.readouterr().out
    folder = tmp_path / "runs" / "boxes"
    benchmark = json.loads((folder / "benchmark.json").read_text())
    # The truth's averages, from its states and the rows themselves.
    config = read_config(path, StudyConfig).config
    averages = box_averages(build_ocean(config), config.resolved.boxes)
    record = open_record(folder / "truth" / "member-000.h5")
    series = record.read(0, len(record.times)) @ averages.rows.T
    truth = benchmark["truth"]["measured"]
    # The same numbers in another order, to round-off; the fine stream is the record.
    np.testing.assert_allclose(truth["mean"]["value"], series.mean(axis=0), rtol=1e-9)
    np.testing.assert_allclose(
        truth["standard deviation"]["value"], series.std(axis=0), rtol=1e-9
    )
    assert benchmark["measured"]["units"] == list(averages.units)
    rows = measured_rows(benchmark)
    assert [row[:3] for row in rows[:2]] == [
        ["mean", "m s-1", "north"],
        ["mean", "m2 s-1", "south_west"],
    ]
    assert all(len(row[3]) == 2 for row in rows)
    assert "standard deviation [m2 s-1]  south_west" in printed
    report = (folder / "report.html").read_text()
    assert "What is measured, in its own units" in report
    assert averages.long_names[0] in report


def test_boxes_that_do_not_do_are_refused_before_the_truth_is_run(tmp_path, capsys):
    path = tmp_path / "boxes.toml"
    text = STUDY.replace('y = ["1000 km", "1600 km"]', 'y = ["1000 km", "1900 km"]')
    path.write_text(text)
    runs = tmp_path / "runs"
    assert main(["study", str(path), "--runs", str(runs), "--quiet"]) == 2
    said = capsys.readouterr().err
    assert "[resolved.boxes.north]" in said
    assert "reaches beyond the box" in said
    assert not list(runs.rglob("*.h5"))


def test_vectors_that_changed_are_read_again(tmp_path):
    vectors = tmp_path / "vectors.h5"
    vectors.write_bytes(b"one")
    head, rest = STUDY.split("[resolved]")
    text = f'{head}[resolved]\nkind = "file"\npath = "{vectors}"\n'
    text += "[unresolved]" + rest.split("[unresolved]")[1]
    study = Study(
        document=parse_config(text, StudyConfig, "test"), folder=tmp_path / "runs"
    )
    stamps = {}
    for content in (b"one", b"other", b"one"):
        vectors.write_bytes(content)
        stamp = fingerprint_of(study, STAGES, "reduce")
        assert stamps.setdefault(content, stamp) == stamp
    assert len(set(stamps.values())) == 2
    vectors.unlink()
    with pytest.raises(DataError, match=r"vectors\.h5: cannot be read"):
        fingerprint_of(study, STAGES, "reduce")
