"""The whole audit: of truths that have what it takes, and of such that do not."""

import dataclasses
import json
import math
from types import SimpleNamespace

import numpy as np
import pytest
from splits import divided
from toys import orthonormal_vectors, random_model, random_weights

from eddyshed.reduce.audit import SCHEMA, Finding, Material, audit, detrended
from eddyshed.reduce.audit.verdicts import closure_verdicts, recommendation
from eddyshed.reduce.coupling import coupling
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.polynomial import Polynomial
from eddyshed.reduce.settings import AuditSettings
from eddyshed.reduce.statistics.correlation import integral_time
from eddyshed.reduce.store import plain

USED = ("bare", "residual", "coloured", "white")
STEP = 0.3


def material_of(model, states, nx, ny, *, members=1):
    """What an audit takes, of states of a model, shape (time, size)."""
    vectors = orthonormal_vectors(np.random.default_rng(3), model.weights, nx + ny)
    split, y = divided(model, states, vectors, nx, step=STEP)
    y = y.reshape(split.x.shape[0], split.x.shape[1], ny)
    operators = galerkin(model, vectors[:, :nx], vectors[:, nx:], split.mean)
    noise = fit_ornstein_uhlenbeck(y, STEP, window=2.4 if ny else 4 * STEP)
    return Material(
        model=model,
        split=split,
        operators=operators,
        noise=noise,
        coupling=coupling(split, operators),
        y=y,
        records=[SimpleNamespace(read=lambda start, stop: states[start:stop])],
        models={},
    )


def random_material(count=4000, *, size=8, ny=5, change=None):
    """Red states of a random conserving model; they do not obey it, nor need to."""
    rng = np.random.default_rng(51)
    weights = random_weights(rng, size) / size
    model = random_model(rng, size, weights=weights)
    red = OrnsteinUhlenbeck(rate=np.eye(size), covariance=np.eye(size))
    states = red.simulate(count, STEP, rng)[0]
    if change is not None:
        states = change(states)
    return material_of(model, states, 3, ny)


def audited(material, used=USED, seed=1, **thresholds):
    settings = AuditSettings(**thresholds)
    return audit(settings, material, used, np.random.default_rng(seed))


@pytest.fixture(scope="module")
def found():
    return audited(random_material())


def by_name(found):
    return {finding.name: finding for finding in found.findings}


# --- All of it ------------------------------------------------------------------


def test_every_finding_is_complete(found):
    names = [finding.name for finding in found.findings]
    assert len(set(names)) == len(names) >= 28
    for finding in found.findings:
        assert finding.verdict in ("holds", "fails", "undecided")
        assert (finding.settle == "") == (finding.verdict != "undecided")
        assert finding.closures
        assert set(finding.closures) <= set(USED)
        assert finding.assumption.endswith(".")
        for words in (finding.meaning, finding.remedy, finding.statistic):
            assert words
        if finding.value == finding.value:
            assert finding.error >= 0
            place = finding.details["mode"].index(finding.where)
            assert finding.details["value"][place] == finding.value


def test_every_threshold_is_a_setting_and_every_setting_a_threshold(found):
    used = {finding.name: finding.threshold for finding in found.findings}
    defaults = dataclasses.asdict(AuditSettings())
    # The growth of the two kinds of models goes by one setting.
    assert len(used) == len(defaults) + 1
    assert set(used.values()) == set(defaults.values())


def test_those_that_do_not_vote_say_so_in_their_threshold():
    fields = {f.name: f.metadata for f in dataclasses.fields(AuditSettings)}
    text = {name: str(meta) for name, meta in fields.items()}
    assert "does not vote" in text["memory_shape"]
    assert "does not vote" not in text["operator_ratio"]


def test_terms_and_curves_are_there_with_errors(found):
    assert list(found.terms["slow"]) == [
        "F1 + A11 x",
        "B111(x, x)",
        "A12 y",
        "2 B112(x, y)",
        "B122(y, y)",
        "in no mode",
    ]
    for side in found.terms.values():
        for one in side.values():
            assert one["value"] >= 0
            assert math.isfinite(one["error"])
    curves = found.curves["quantiles"]
    assert len(curves["modes"]) == 3
    middle = curves["modes"][0]["value"][len(curves["normal"]) // 2]
    assert abs(middle) < 0.3
    assert len(found.curves["abscissa"]["time"]) == len(
        found.curves["abscissa"]["numerical"]
    )


def test_it_is_plain_data_and_the_same_each_time(found):
    first = json.dumps(plain(found))
    assert json.dumps(plain(audited(random_material()))) == first
    assert json.loads(first)["schema"] == SCHEMA == 2
    assert list(json.loads(first)) == [
        "schema",
        "findings",
        "closures",
        "recommendation",
        "terms",
        "curves",
    ]


def test_detrended_leaves_nothing_linear():
    rng = np.random.default_rng(5)
    x = rng.standard_normal((2, 300, 2))
    r = rng.standard_normal((2, 300, 2)) + x @ np.array([[1.0, 2.0], [0.5, -1.0]]) + 3
    left = detrended(r, x)
    assert np.abs(left.mean(axis=(0, 1))).max() < 1e-12
    assert np.abs(np.einsum("mti,mtj->ij", left, x - x.mean(axis=(0, 1)))).max() < 1e-9


# --- Bad input ------------------------------------------------------------------


def test_too_short_a_truth_is_undecided_with_what_is_missing():
    material = random_material(200)
    split = material.split
    short = dataclasses.replace(
        split, x=split.x[:, :50], tendency=split.tendency[:, :50]
    )
    found = by_name(
        audited(
            dataclasses.replace(
                material,
                split=short,
                y=material.y[:, :50],
                coupling=material.coupling[:, :50],
            )
        )
    )
    length = found["record: length"]
    assert length.verdict == "undecided"
    for name in (
        "record: means",
        "dependence: mean",
        "perturbation: operator",
        "perturbation: forcing",
        "normality: tails",
    ):
        assert found[name].verdict == "undecided", name
        assert "the truth" in found[name].settle or "longer" in found[name].settle
        assert found[name].more > 1
    for finding in found.values():
        assert finding.verdict == "undecided" or finding.error < math.inf


def test_length_never_fails_and_says_how_much():
    # 60 correlation times against 1000: sixteen times more at least.
    found = by_name(audited(random_material(200), length=1000.0))["record: length"]
    assert found.verdict == "undecided"
    assert found.more > 1000 / found.value
    # That much more truth, with errors that fall with its root, would do.
    low = math.log(found.value * found.more) - (
        found.quantile * found.error / found.value / math.sqrt(found.more)
    )
    assert low == pytest.approx(math.log(1000), abs=0.03)


def test_a_constant_mode_is_named():
    material = random_material()
    x = material.split.x.copy()
    x[..., 1] = 0.5
    split = dataclasses.replace(material.split, x=x)
    found = by_name(audited(dataclasses.replace(material, split=split)))
    for name in ("record: length", "separation", "dependence: mean"):
        assert found[name].verdict == "undecided"
        assert "slow 1 is constant" in found[name].settle
        assert math.isnan(found[name].value)
    # What needs no resolved mode is there all the same.
    assert math.isfinite(found["memory: lags"].value)


def test_a_coupling_that_is_a_function_of_x_is_named():
    material = random_material()
    r = material.coupling.copy()
    r[..., 2] = 2 * material.split.x[..., 2]
    found = by_name(audited(dataclasses.replace(material, coupling=r)))
    assert "slow 2" in found["normality: tails"].settle
    assert found["normality: tails"].verdict == "undecided"


def test_an_empty_unresolved_space_is_named():
    found = by_name(audited(random_material(ny=0)))
    for name in ("dependence: mean", "noise: decay", "memory: shape"):
        assert found[name].verdict == "undecided"
        assert "no unresolved modes" in found[name].settle
    assert found["record: length"].verdict == "holds"


def test_a_limit_without_its_closures_is_named(found):
    limit = by_name(found)["limit: white for coloured"]
    assert limit.verdict == "undecided"
    assert "coloured and the white closure are not in [closures] use" in limit.settle


def test_a_white_drift_that_grows_fails_white_alone():
    # A triangular matrix has its diagonal for eigenvalues: 1 and -1 at most.
    material = random_material()
    for growth, verdict in ((1.0, "fails"), (-1.0, "holds")):
        linear = np.diag([growth, -2.0, -3.0]) + np.triu(np.ones((3, 3)), 1)
        white = SimpleNamespace(drift=Polynomial(constant=np.zeros(3), linear=linear))
        made = audited(dataclasses.replace(material, models={"white": white}))
        found = by_name(made)["balance: white stability"]
        assert (found.verdict, found.closures) == (verdict, ("white",))
        time = integral_time(material.x, STEP).value.max()
        assert found.value == pytest.approx(growth * time)
        verdicts = {one.closure: one.reasons for one in made.closures}
        failing = {
            name
            for name, reasons in verdicts.items()
            if any(reason.startswith(f"{found.name} fails") for reason in reasons)
        }
        assert failing == ({"white"} if verdict == "fails" else set())


def test_of_a_cubic_drift_the_linear_part_is_not_judged():
    cubic = np.zeros((3,) * 4)
    cubic[0, 0, 0, 0] = -1.0
    drift = Polynomial(constant=np.zeros(3), linear=np.eye(3), cubic=cubic)
    models = {"white": SimpleNamespace(drift=drift)}
    found = audited(dataclasses.replace(random_material(), models=models))
    assert "balance: white stability" not in by_name(found)


# --- Verdicts and recommendation --------------------------------------------------


def finding(name, verdict, closures, *, votes=True, more=1.0, remedy="do r"):
    return Finding(
        name=name,
        assumption="A.",
        closures=closures,
        votes=votes,
        statistic="s",
        value=2.0,
        error=0.5,
        quantile=1.96,
        threshold=1.0,
        sense="at most",
        where="m",
        verdict=verdict,
        meaning="it is off",
        remedy=remedy,
        more=more,
        settle=f"about {more:g} times the truth" if verdict == "undecided" else "",
        details={},
    )


def test_a_closure_is_as_good_as_the_worst_that_it_leans_on():
    findings = [
        finding("a", "holds", ("white", "coloured")),
        finding("b", "undecided", ("white",), more=3.0),
        finding("c", "fails", ("residual", "white")),
        finding("d", "fails", ("coloured",), votes=False),
    ]
    found = {
        v.closure: v
        for v in closure_verdicts(findings, ("coloured", "white", "residual", "mine"))
    }
    assert found["coloured"].verdict == "holds"
    assert found["coloured"].reasons == ()
    assert found["coloured"].leaning == ("a",)
    assert found["white"].verdict == "fails"
    assert [r.split()[0] for r in found["white"].reasons] == ["c", "b"]
    assert "2 +- 0.5 at m, must be at most 1" in found["white"].reasons[0]
    assert found["mine"].verdict == "undecided"
    assert "not known" in found["mine"].reasons[0]


@pytest.mark.parametrize(
    ("verdicts", "expected"),
    [
        (("holds", "holds"), "use coloured, with 2 modes (residual would do as well)"),
        (("fails", "holds"), "use residual, with 2 modes: every"),
        (("undecided", "undecided"), "collect about 3 times the truth"),
        (("undecided", "fails"), "residual is not to be trusted with 2 modes"),
        (("fails", "fails"), "coloured, residual are not to be trusted"),
    ],
)
def test_the_recommendation_says_which_or_what_to_do(verdicts, expected):
    findings = [
        finding("a", verdicts[0], ("coloured",), more=3.0),
        finding("b", verdicts[1], ("residual",), more=3.0),
    ]
    closures = closure_verdicts(findings, ("residual", "coloured"))
    found = recommendation(findings, closures, "2 modes")
    assert expected in found
    assert ("do r" in found) == ("fails" in verdicts and "holds" not in verdicts)


def test_without_a_known_closure_it_says_so():
    assert "no closure whose assumptions are known" in recommendation(
        [], closure_verdicts([], ("mine",)), "2 modes"
    )
