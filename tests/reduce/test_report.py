"""The report: sound HTML, nothing from outside, nothing left out."""

import base64
import copy
import dataclasses
import re
import sys
from html.parser import HTMLParser
from types import SimpleNamespace
from xml.etree import ElementTree

import numpy as np
import pytest

from eddyshed.reduce.flow.parts import read_flow
from eddyshed.reduce.report.evidence import gather
from eddyshed.reduce.report.flow import flow
from eddyshed.reduce.report.markup import Note, number, page, span, text, unit
from eddyshed.reduce.report.page import figures_module, render, write_report
from eddyshed.reduce.settings import StudyConfig
from eddyshed.reduce.stages import STAGES
from eddyshed.reduce.store import read_fingerprint, read_json
from eddyshed.reduce.study import Study, bring_up_to_date, fingerprint_of, is_fresh
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import DataError

# A small chaotic flow, too short for verdicts: what counts is that it is whole.
CONFIG = """
name = "tiny"
title = "<script>alert('a')</script> & \\"seas\\""
seed = 3
[grid]
points = [16, 16]
lengths = ["1800 km", "1800 km"]
[ocean]
kind = "barotropic"
beta = "1e-11 m-1 s-1"
drag = "0.005 1/d"
hyperviscosity_time = "6.7 d"
[forcing.trades]
kind = "wave"
amplitude = "4e-12 s-2"
waves = [0, 3]
[initial]
kind = "noise"
energy = "0.01 m2/s2"
band = [2, 4]
[time]
step = "0.5 d"
spin_up = "500 d"
duration = "3000 d"
[output]
state_every = "2 d"
[output.resolved]
every = "1 d"
up_to = 2
[resolved]
kind = "fourier"
family = "zonal"
up_to = 2
[unresolved]
variance = 0.8
[noise]
window = "50 d"
[closures]
use = ["bare", "residual", "coloured"]
[benchmark]
members = 2
duration = "300 d"
"""

# HTML Living Standard, "Void elements": those without an end tag.
VOID = {"area", "base", "br", "col", "embed", "hr", "img", "input", "link", "meta"}
FIGURES = 12


class Walk(HTMLParser):
    """Walks a page: open tags, attributes, and text by tag."""

    def __init__(self, html):
        super().__init__(convert_charrefs=True)
        self.open, self.seen, self.texts = [], [], {}
        self.feed(html)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.seen.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open:
            self.texts.setdefault(self.open[-1], []).append(data)

    def tags(self, name):
        return [attrs for tag, attrs in self.seen if tag == name]


@pytest.fixture(scope="session")
def study(tmp_path_factory):
    """A whole study, run by its own stages up to the benchmark."""
    document = parse_config(CONFIG, StudyConfig, "tiny.toml")
    found = Study(
        document=document, folder=tmp_path_factory.mktemp("runs") / "tiny", quiet=True
    )
    for name in ("flow", "audit", "benchmark"):
        bring_up_to_date(found, STAGES, name)
    return found


@pytest.fixture(scope="session")
def evidence(study):
    return gather(study)


@pytest.fixture(scope="session")
def html(study):
    """The report as its own stage writes it."""
    bring_up_to_date(study, STAGES, "report")
    return study.path("report.html").read_text(encoding="utf-8")


@pytest.fixture(scope="session")
def walk(html):
    return Walk(html)


def words(html):
    """Text of a page without its tags, blanks made single."""
    parser = Walk(re.sub("<style>.*?</style>", "", html, flags=re.DOTALL))
    flat = re.sub(r"<[^>]*>", "", html.split("<main>")[1])
    assert parser.open == []
    return re.sub(r"\s+", " ", flat.replace("&nbsp;", " ").replace("&#x27;", "'"))


def without_figures(html):
    """A page with its pictures, or what stands in for them, taken out."""
    return re.sub(r"<figure>\n.*?\n<figcaption>", "<figcaption>", html)


class TestPage:
    def test_every_tag_is_closed(self, walk):
        assert walk.open == []
        assert len(walk.tags("tr")) > 30

    def test_says_its_language_title_and_width(self, study, walk):
        assert walk.tags("html") == [{"lang": "en"}]
        named = {meta.get("name"): meta.get("content") for meta in walk.tags("meta")}
        assert named["fingerprint"] == fingerprint_of(study, STAGES, "report")
        assert "width=device-width" in named["viewport"]
        assert len(walk.tags("title")) == len(walk.tags("h1")) == 1

    def test_every_picture_has_an_alternative_text(self, walk):
        pictures = walk.tags("img")
        assert len(pictures) == FIGURES
        assert all(len(picture["alt"]) > 40 for picture in pictures)
        tables = [a for a in walk.tags("div") if a.get("class") == "scroll"]
        assert len(tables) == len(walk.tags("table")) == 9
        assert all(a["aria-label"] and a["tabindex"] == "0" for a in tables)
        assert len(walk.tags("figure")) == FIGURES + len(tables)

    def test_refers_to_nothing_outside(self, html, walk):
        for tag, attributes in walk.seen:
            assert tag not in ("script", "link", "iframe", "object", "embed", "a")
            for name in ("src", "href", "srcset", "data", "action", "style"):
                assert attributes.get(name, "data:").startswith("data:"), tag
        style = html.split("<style>")[1].split("</style>")[0]
        assert "url(" not in style
        assert "@import" not in style

    def test_pictures_are_sound_and_refer_to_nothing_outside(self, walk):
        for picture in walk.tags("img"):
            head, _, encoded = picture["src"].partition(",")
            assert head == "data:image/svg+xml;base64"
            root = ElementTree.fromstring(base64.b64decode(encoded))
            assert root.tag == "{http://www.w3.org/2000/svg}svg"
            for element in root.iter():
                for name, value in element.attrib.items():
                    if name.endswith(("href", "src")):
                        assert value.startswith(("#", "data:image/png;base64,"))

    def test_the_config_is_shown_and_never_interpreted(self, html, walk):
        assert "<script" not in html
        assert walk.texts["h1"] == ["<script>alert('a')</script> & \"seas\""]
        assert walk.texts["title"] == walk.texts["h1"]
        assert "".join(walk.texts["code"]).count(CONFIG.strip()) == 1

    def test_a_stamp_cannot_break_out(self):
        made = page(title="t", stamp='"><script>', generator="g", body="")
        assert "<script" not in made

    def test_is_small(self, html):
        assert len(html.encode()) < 3_000_000

    def test_same_files_give_same_bytes_whatever_matplotlib_is_set_to(
        self, study, html
    ):
        import matplotlib as mpl

        odd = {"font.size": 30.0, "svg.hashsalt": "other", "axes.facecolor": "red"}
        with mpl.rc_context(odd):
            again = render(
                gather(study), fingerprint_of(study, STAGES, "report"), figures_module()
            )
            assert {key: mpl.rcParams[key] for key in odd} == odd
        assert again == html


def flow_of(grid, ocean, folder, extra=""):
    """What the section on the flow needs, from a run of thirty short steps."""
    document = parse_config(
        f"""
name = "flow"
[grid]
{grid}
[ocean]
{ocean}
{extra}
[initial]
kind = "noise"
energy = "1e-4 m2/s2"
band = [1, 3]
[time]
step = "10 s"
spin_up = "0 s"
duration = "300 s"
[output]
state_every = "10 s"
[resolved]
kind = "eof"
modes = 1
""",
        StudyConfig,
        "flow.toml",
    )
    study = Study(document=document, folder=folder, quiet=True)
    bring_up_to_date(study, STAGES, "flow")
    return SimpleNamespace(
        study=study,
        ocean=build_ocean(document.config),
        flow=read_flow(study.path("flow.h5")),
    )


SEA = 'points = [12, 16]\nlengths = ["1000 km", "1500 km"]'
SLICE = 'points = [16, 8]\nlengths = ["4 m", "1 m"]'
LAYER = 'kind = "barotropic"\nbeta = "1e-11 m-1 s-1"\ndrag = "0.01 1/d"'
LAYERS = """kind = "two_layer"
upper_depth = "1 km"
lower_depth = "3 km"
deformation_radius = "100 km"
upper_current = "0.1 m/s"
drag = "0.01 1/d\""""
FLUID = """kind = "boussinesq"
buoyancy_gradient = "1e-6 s-2"
viscosity = "1e-5 m2/s"
diffusivity = "1e-6 m2/s\""""
GUSTS = """[forcing.gusts]
kind = "wave"
amplitude = "1e-13 s-2"
waves = [1, 1]
[forcing.gusts.time]
kind = "gusts"
decorrelation = "100 s\""""


class TestFlow:
    """Every ocean in every space it fits, drawn and in words."""

    @pytest.mark.parametrize(
        ("kind", "space", "shown"),
        [
            (LAYER, "periodic", ["repeats in both directions", "Eastward velocity"]),
            (
                LAYER,
                "channel",
                ["walls in the south", "Eastward velocity", "Thick lines"],
            ),
            (LAYER, "basin", ["walls on all four", "(b) Streamfunction, mean over"]),
            (LAYERS, "periodic", ["two layers", "(a) Upper and (b) lower layer"]),
            (LAYERS, "channel", ["two layers", "(a) Upper and (b) lower", "walls"]),
            (FLUID, "periodic", ["slice", "upwards", "(b) Buoyancy"]),
            (FLUID, "channel", ["slice", "walls below and above", "(a) Buoyancy"]),
        ],
        ids=[
            "one layer, periodic",
            "one layer, channel",
            "one layer, basin",
            "two layers, periodic",
            "two layers, channel",
            "slice, periodic",
            "slice, channel",
        ],
    )
    def test_shows_every_ocean(self, kind, space, shown, tmp_path):
        grid = f'space = "{space}"\n{SLICE if kind is FLUID else SEA}'
        evidence = flow_of(grid, kind, tmp_path / "flow", extra=GUSTS)
        html = flow(Note(drawing=figures_module()), evidence)
        walk = Walk(html)
        pictures = walk.tags("img")
        assert walk.open == []
        # Maps, spectra, fluxes and energy; in a basin the gyres, in a slice under
        # stratification the Nusselt number.
        assert len(pictures) == (4 if kind is LAYERS or space != "basin" else 5) + (
            kind is FLUID
        )
        for picture in pictures:
            ElementTree.fromstring(base64.b64decode(picture["src"].partition(",")[2]))
        found = re.sub(r"\s+", " ", re.sub(r"<[^>]*>", "", html))
        for part in shown:
            assert part in found
        assert ("against z" in pictures[0]["alt"]) == (kind is FLUID)
        # Every source and sink that the ocean names, and what the gusts fed.
        names = evidence.ocean.budget_units.items()
        terms = [name for name, (units, _) in names if units in ("m2 s-3", "s-3")]
        assert len(terms) >= 4
        table = found[found.index("Budgets of energy and enstrophy") :]
        for name in [*terms, "gusts"]:
            assert f"{name.replace('_', ' ')}: " in table
        # Of both quantities the gusts, the head, the change and the residual beside.
        table = html[html.index("Budgets of") :].partition("</table>")[0]
        assert table.count('scope="row"') == len(terms) + 8
        # Everything else that is recorded or measured, with its unit.
        rest = {**evidence.flow.measure, **evidence.flow.gyre}
        others = html.count('scope="row"') - table.count('scope="row"')
        assert others == len(rest)
        for measure in rest.values():
            assert measure.meaning.removesuffix(" (negative)") in found
        assert ("Thick lines are walls" in found) == (space != "periodic")
        assert ("not to the scale" in found) == (kind is FLUID)

    def test_a_flow_at_rest_is_drawn(self, tmp_path):
        evidence = flow_of(f'space = "basin"\n{SEA}', LAYER, tmp_path / "flow")
        still = dataclasses.replace(
            evidence.flow.spectrum, energy=0 * evidence.flow.spectrum.energy
        )
        evidence.flow = dataclasses.replace(evidence.flow, spectrum=still)
        html = flow(Note(drawing=figures_module()), evidence)
        assert len(Walk(html).tags("img")) == 5

    def test_without_pictures_spectra_and_fluxes_are_numbers(self, tmp_path):
        evidence = flow_of(f'space = "channel"\n{SEA}', LAYER, tmp_path / "flow")
        html = flow(Note(drawing=None), evidence)
        walk = Walk(html)
        assert walk.open == []
        assert walk.tags("img") == []
        for part, column in (("flux", "enstrophy flux"), ("spectrum", "energy [")):
            assert column in re.sub(r"<[^>]*>", "", html), part
        spectrum = evidence.flow.spectrum
        shown = number(spectrum.energy[1], spectrum.energy_error[1])
        flux = evidence.flow.flux["energy"]
        assert f">{shown}<" in html
        assert f">{number(flux.flux[1], flux.flux_error[1])}<" in html


class TestContent:
    def test_opens_with_what_was_done_and_a_caution(self, html):
        found = words(html)
        start = found[:1500]
        assert "1800 km in x by 1800 km in y" in start
        assert "16 × 16 grid points; it was run for 8.22 yr" in start  # 3002 d
        assert re.search(r"\d ± \d+(\.\d+)? correlation times of its slowest", start)
        assert "not a forecast of any place" in start
        assert "the judgement of a qualified professional" in start

    def test_gives_every_verdict_and_its_reason(self, study, html):
        found = words(html)
        for entry in read_json(study.path("benchmark.json"))["closures"]:
            verdict = entry["verdict"]
            assert f"{entry['name']}{verdict['word']}" in found
            assert verdict["reason"][1:] in found  # the first letter is a capital
            if verdict["count"]:
                for key in ("within_sampling", "within_tolerance"):
                    assert f"{verdict[key]} of {verdict['count']}" in found

    def test_gives_every_finding_and_what_follows(self, study, html):
        found = words(html)
        audit = read_json(study.path("audit.json"))
        findings = audit["findings"]
        assert len(findings) >= 28
        assert audit["recommendation"] in found
        for entry in audit["closures"]:
            assert f"{entry['closure']}{entry['verdict']}" in found
            for reason in entry["reasons"]:
                # The first letter is a capital, and a page has the sign for an error.
                assert reason[1:].replace(" +- ", " ± ") in found
        for finding in findings:
            assert f"{finding['name']}{finding['verdict']}" in found
            assert finding["assumption"] in found
            assert finding["sense"] in found
            if finding["verdict"] != "holds":
                assert finding["meaning"] in found
            assert finding["settle"] in found

    def test_gives_every_score_with_its_error(self, evidence, html):
        table = html[html.index("Every score, mode by mode") :]
        table = table[: table.index("</table>")]
        rows = len(evidence.split.resolved.labels) * (1 + len(evidence.scored))
        assert table.count('scope="row"') == rows
        assert table.count("±") + table.count("(error unknown)") == rows * 4 - len(
            evidence.split.resolved.labels
        )

    def test_marks_what_a_score_does_not_pass(self, evidence):
        # Whether a score of so short a study fails is chance: one is made to.
        closures = copy.deepcopy(evidence.closures)
        scored = next(entry for entry in closures if entry["scores"])
        scored["scores"][0]["sampling"][0] = False
        evidence = dataclasses.replace(evidence, closures=closures)
        html = render(evidence, "stamp", None)
        table = html[html.index("Every score, mode by mode") :]
        table = table[table.index("<tbody") : table.index("</table>")]
        scores = [s for _, entry in evidence.scored for s in entry["scores"]]
        sampling = np.concatenate([score["sampling"] for score in scores])
        close = np.concatenate([score["close"] for score in scores])
        assert table.count("*") == (~sampling.astype(bool)).sum() > 0
        assert table.count("†") == (~close.astype(bool)).sum() > 0

    def test_gives_what_the_closures_know_of_themselves(self, evidence):
        closures = copy.deepcopy(evidence.closures)
        bare, residual, coloured = closures
        bare |= {"facts": {}, "notes": []}
        residual |= {"facts": {"size & share": 0.125, "lost": None}, "notes": []}
        coloured |= {"facts": {}, "notes": ["it grows & grows", "of the noise"]}
        noise = dataclasses.replace(evidence.noise, notes=("of the noise",))
        other = dataclasses.replace(evidence, closures=closures, noise=noise)
        html = render(other, "x", None)
        found = words(html)
        found = found[found.index("What each closure found out") :]
        found = found[: found.index("Correlation functions of")]
        assert "residualsize &amp; share0.125" in found
        assert "residuallostunknown" in found
        assert "coloured––" in found
        assert "It grows &amp; grows." in found
        # What is said of the noise is said once, where the noise is.
        assert "Of the noise" not in found
        assert "bare" not in found
        for entry in closures:
            entry |= {"facts": {}, "notes": []}
        html = render(dataclasses.replace(evidence, closures=closures), "x", None)
        assert "What each closure found out" not in html

    def test_lists_the_fingerprints_and_seeds(self, study, html):
        for name in ("truth", "flow", "reduce", "audit", "benchmark"):
            assert fingerprint_of(study, STAGES, name) in html
        assert "drawn from seed 3" in words(html)

    def test_names_a_failed_closure_and_why(self, evidence):
        failed = copy.deepcopy(evidence.closures[1])
        failed |= {"summary": None, "scores": []}
        failed["verdict"] = {
            "word": "failed",
            "reason": "2 of 2 members blew up, the first after 7 days",
            "within_sampling": 0,
            "within_tolerance": 0,
            "count": 0,
        }
        closures = [evidence.closures[0], failed, evidence.closures[2]]
        lame = dataclasses.replace(evidence, closures=closures)
        found = words(render(lame, "x", None))
        assert f"{failed['name']}failed––" in found
        assert f"{failed['name']}: 2 of 2 members blew up, the first after" in found
        scores = found[found.index("Every score") : found.index("Where the numbers")]
        assert failed["name"] not in scores
        assert closures[2]["name"] in scores

    def test_serves_a_study_that_resolves_every_mode(self, evidence):
        from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck

        nothing = np.empty((*evidence.split.x.shape[:2], 0))
        whole = dataclasses.replace(
            evidence,
            noise=fit_ornstein_uhlenbeck(nothing, 172800.0, window=4320000.0),
            split=dataclasses.replace(
                evidence.split, unresolved=evidence.split.unresolved.take(np.arange(0))
            ),
        )
        found = words(render(whole, "x", None))
        assert "there is no noise to fit" in found
        assert "noise stands in for 0 more, with 0 %" in found

    def test_says_so_when_a_series_is_gone(self, evidence, monkeypatch):
        monkeypatch.setattr(type(evidence), "simulated", lambda self, name: None)
        found = words(render(evidence, "x", None))
        assert "and coloured are no longer on disk" in found

    def test_tells_what_the_command_line_overrode(self, evidence):
        study = evidence.study
        document = parse_config(CONFIG, StudyConfig, "tiny.toml", ["seed=5"])
        other = dataclasses.replace(
            evidence, study=dataclasses.replace(study, document=document)
        )
        assert "seed: was 3, now 5" in words(render(other, "x", None))
        assert "overrode" not in words(render(evidence, "x", None))


class TestStage:
    def test_is_fresh_once_written(self, study, html):
        path = study.path("report.html")
        assert read_fingerprint(path) == fingerprint_of(study, STAGES, "report")
        assert is_fresh(study, STAGES, "report") == (True, "")
        assert list(study.folder.glob(".*.partial")) == []

    def test_without_matplotlib_only_pictures_lack(self, study, html, monkeypatch):
        path = study.path("report.html")
        monkeypatch.setitem(sys.modules, "matplotlib", None)  # its import fails now
        assert figures_module() is None
        write_report(study, fingerprint_of(study, STAGES, "report"))
        plain = path.read_text(encoding="utf-8")
        # Stale, so that the same command draws the pictures when it can.
        fresh, _ = is_fresh(study, STAGES, "report")
        path.write_text(html, encoding="utf-8")
        assert not fresh
        assert Walk(plain).open == []
        assert "<img" not in plain
        assert plain.count('pip install "eddyshed[figures]"') == FIGURES
        body = without_figures(plain).split("<main>")[1]
        assert body == without_figures(html).split("<main>")[1]

    def test_a_missing_file_is_named(self, study, tmp_path):
        empty = dataclasses.replace(study, folder=tmp_path)
        with pytest.raises(DataError, match=r"benchmark\.json"):
            write_report(empty, "x")


class TestWords:
    @pytest.mark.parametrize(
        ("value", "error", "shown"),
        [
            (0.29134, 0.0261, "0.291 ± 0.026"),
            (-4.13e-6, 3.1e-7, "(−4.13 ± 0.31) × 10<sup>−6</sup>"),
            (1.234, float("inf"), "1.23 (error unknown)"),
            (1.234, None, "1.23 (error unknown)"),
            (None, None, "unknown"),
            (0.0, 0.0, "0"),
        ],
    )
    def test_numbers_carry_their_errors(self, value, error, shown):
        assert number(value, error) == shown

    def test_units_have_their_powers_raised(self):
        assert unit("m2 s-3") == "m<sup>2</sup>&nbsp;s<sup>−3</sup>"
        assert unit("1") == "1"

    @pytest.mark.parametrize(
        ("days", "shown"),
        # The Julian year has 365.25 days (IAU Style Manual, 1989).
        [(80000, "219&nbsp;yr"), (365.25 * 2, "730&nbsp;d"), (0.25, "6&nbsp;h")],
    )
    def test_spans_are_in_the_unit_one_would_say(self, days, shown):
        assert span(days * 86400) == shown

    def test_text_is_escaped(self):
        assert text("<a b='c' d=\"e\">&") == (
            "&lt;a b=&#x27;c&#x27; d=&quot;e&quot;&gt;&amp;"
        )


class TestColours:
    def test_the_map_keeps_its_order_in_grey_and_is_grey_at_zero(self):
        from eddyshed.reduce.report.canvas import VORTICITY

        rgb = VORTICITY(np.linspace(0, 1, 101))[:, :3]
        # Relative luminance of sRGB (IEC 61966-2-1), then lightness (CIE 1976).
        linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
        lightness = 116 * np.cbrt(linear @ [0.2126, 0.7152, 0.0722]) - 16
        assert np.diff(lightness).min() > 0
        # Opposite signs of half the range differ by far more than what can just
        # be told apart, which is about 1 (common practice).
        assert lightness[75] - lightness[25] > 20
        assert np.ptp(rgb[50]) < 0.03

    def test_closures_differ_in_hue_dash_and_marker(self):
        from eddyshed.reduce.closures import CLOSURES
        from eddyshed.reduce.report.canvas import closure_style

        styles = [closure_style(k) for k in range(len(CLOSURES))]
        for key in ("color", "dashes", "marker"):
            assert len({str(style[key]) for style in styles}) == len(CLOSURES)
