"""The report of a study: a short note in one HTML file that needs nothing else.

It says first what the study comes to, then shows what that rests on. The
same files give the same bytes.
"""

from __future__ import annotations

from importlib.metadata import version
from pathlib import Path
from types import ModuleType

from eddyshed.solver.config import as_table, differing_keys, parse_config
from eddyshed.solver.errors import ConfigError
from eddyshed.solver.files import replacing

from ..scores import SAMPLING
from ..settings import StudyConfig
from ..stages import STAGES
from ..study import Study, fingerprint_of
from .audit import audit
from .evidence import Evidence, gather
from .flow import flow, in_words, split
from .markup import (
    Note,
    number,
    page,
    paragraphs,
    section,
    sentence,
    span,
    text,
)
from .models import models
from .noise import noise

CAUTION = (
    "This is a toy ocean in an invented setting, not a forecast of any place. Before "
    "results like these inform a decision they need the judgement of a qualified "
    "professional."
)
# A report without pictures is stale as soon as they can be drawn: its fingerprint
# is never the one that is asked for.
UNDRAWN = "-without-pictures"


def write_report(study: Study, stamp: str) -> None:
    """Write ``report.html`` into the run folder.

    Parameters
    ----------
    study : Study
        A study whose flow, audit and benchmark are there.
    stamp : str
        Fingerprint that the report carries. A report without pictures, because
        matplotlib is not installed, carries another.

    Raises
    ------
    DataError
        If a file of the study is missing or damaged.
    RunFolderError
        If the report cannot be written.
    """
    drawing = figures_module()
    html = render(gather(study), stamp, drawing)
    with replacing(study.path("report.html")) as temporary:
        temporary.write_text(html, encoding="utf-8")


def figures_module() -> ModuleType | None:
    """Module that draws; None if matplotlib, which is an extra, is not installed."""
    try:
        import matplotlib  # noqa: F401 (only whether it can be)
    except ImportError:
        return None
    from . import figures

    return figures


def render(evidence: Evidence, stamp: str, drawing: ModuleType | None) -> str:
    """The report as HTML.

    Parameters
    ----------
    evidence : Evidence
        The results.
    stamp : str
        Its fingerprint.
    drawing : module or None
        What `figures_module` returned.

    Returns
    -------
    str
    """
    config = evidence.study.config
    title = config.title or config.name
    note = Note(drawing=drawing)
    body = [
        f"<header>\n<h1>{text(title)}</h1>",
        opening(evidence),
        f'<p class="caution">{CAUTION}</p>\n</header>',
        verdict(note, evidence),
        audit(note, evidence),
        flow(note, evidence),
        split(note, evidence),
        noise(note, evidence),
        models(note, evidence),
        reproduce(note, evidence),
    ]
    return page(
        title=title,
        stamp=stamp if drawing is not None else stamp + UNDRAWN,
        generator=f"eddyshed {version('eddyshed')}",
        body="\n".join(body),
    )


def opening(evidence: Evidence) -> str:
    """What was done, in a paragraph."""
    config, resolved = evidence.study.config, evidence.split.resolved
    times = evidence.truth.integral_time
    slowest = int(times.value.argmax())
    ratio = evidence.length / float(times.value[slowest])
    known = number(
        ratio, ratio * float(times.error[slowest]) / float(times.value[slowest])
    )
    points = ""
    if config.grid is not None:
        points = f", on {' × '.join(map(str, config.grid.points))} grid points"
    return paragraphs(
        f"This is {text(in_words(evidence))}{points}; it was run for "
        f"{span(evidence.length)} after a spin-up of {span(config.time.spin_up)}: "
        f"{known} correlation times of its slowest resolved mode, "
        f"{text(resolved.labels[slowest])}. Of its "
        f"{evidence.ocean.size} coordinates {resolved.n_modes} were kept. Each way to "
        "stand in for the rest, a closure, makes a reduced model; "
        f"{len(evidence.closures)} of them were scored against that run, here called "
        "the truth."
    )


def verdict(note: Note, evidence: Evidence) -> str:
    """What the closures come to."""
    settings = evidence.study.config.benchmark
    groups = []
    for entry in evidence.closures:
        found = entry["verdict"]
        count = found["count"]
        groups.append(
            [
                [
                    f"<code>{text(entry['name'])}</code>",
                    f"<strong>{text(found['word'])}</strong>",
                    f"{found['within_sampling']} of {count}" if count else "–",
                    f"{found['within_tolerance']} of {count}" if count else "–",
                    f"{_times(evidence.truth_cost / entry['cost'])} ×",
                ],
                f"<p>{text(sentence(entry['what']))}</p>"
                f"<p>{text(sentence(found['reason']))}</p>",
            ]
        )
    return section(
        "What the reduced models are worth",
        note.table(
            [
                "closure",
                "verdict",
                "within sampling error",
                "within tolerance",
                "speed",
            ],
            groups,
            words=(0, 1),
            caption="Closures against the truth. Scores that pass each of two "
            "statements, which are explained below. Speed: processor time of the "
            "truth over that of one member of the model, for equal model time, as "
            "timed once on the machine that ran both.",
        ),
        paragraphs(
            "Each model is compared with the truth in the mean, the variance, the "
            "integral time and the distribution of every resolved mode. Two "
            "statements are made of each comparison, and neither implies the other."
        ),
        "<dl>\n<dt>Within sampling error</dt>\n<dd>The difference is no larger than "
        "two finite records leave open: below "
        f"{SAMPLING:g} standard errors, or for a distribution a "
        "Kolmogorov–Smirnov probability above 0.05. It says whether a difference was "
        "seen, not whether it matters. With a truth long enough every approximation "
        "fails here; with a short one anything passes.</dd>\n"
        "<dt>Within tolerance</dt>\n<dd>The difference is small enough for use, by "
        "bounds that the config sets: "
        f"{settings.mean_tolerance:g} standard deviations for the mean, "
        f"{settings.variance_tolerance:g} in the logarithm of the variance, "
        f"{settings.time_tolerance:g} in that of the integral time, and "
        f"{settings.distribution_tolerance:g} standard deviations of Wasserstein "
        "distance for the distribution. It does not say how well the difference is "
        "known.</dd>\n</dl>",
        paragraphs(
            "<em>Indistinguishable</em> is a closure with nine scores in ten within "
            "sampling error and none far outside it (Holm 1979, Scand. J. Statist. "
            "6:65), if only because the records are too short to tell, which is then "
            "said; <em>close</em> one whose means, variances and distributions all "
            "lie within tolerance, whatever its integral times; <em>off</em> one of "
            "which any of these is beyond its tolerance by more than two standard "
            "errors; <em>undecided</em> any other; <em>at rest</em> one without noise "
            "that comes to rest, of which only the means are compared; <em>failed</em> "
            "one that blew up, or came to rest in spite of its noise."
        ),
    )


def reproduce(note: Note, evidence: Evidence) -> str:
    """How to get the same again, and where the numbers are."""
    study = evidence.study
    config, document = study.config, study.document
    files = (
        ("truth/member-000.h5", "truth", "the truth, every recorded state"),
        ("flow.h5", "flow", "what the truth did: all that is drawn of its flow"),
        ("split.h5", "reduce", "resolved and unresolved modes, resolved series"),
        ("closures.h5", "reduce", "projected equation, noise, reduced models"),
        ("audit.json", "audit", "assumptions, mode by mode"),
        ("benchmark.json", "benchmark", "scores, mode by mode; correlations"),
        ("simulated/", "", "series of the reduced models"),
    )
    rows = [
        [
            f"<code>{name}</code>",
            what,
            f"<code>{fingerprint_of(study, STAGES, stage)}</code>"
            if stage
            else "in each file",
        ]
        for name, stage, what in files
    ]
    return section(
        "How to get the same again",
        paragraphs(
            f"Made by eddyshed {text(version('eddyshed'))} from the config below, "
            f"which lies beside this report as <code>config.toml</code>, with "
            f"<code>eddyshed study {text(Path(document.source).name)}</code>. Every "
            f"random stream is drawn from seed {config.seed}, each under a name and "
            "a member of its own."
        ),
        _overrides(evidence),
        note.table(
            ["file", "holds", "fingerprint"],
            [rows],
            words=(0, 1),
            caption="Where the numbers are, in the folder of this report. A "
            "fingerprint tells the settings and inputs that a file was made from.",
        ),
        f"<pre><code>{text(document.text.rstrip())}</code></pre>",
    )


def _overrides(evidence: Evidence) -> str:
    """Keys in which the config differs from its text, if there are any."""
    document = evidence.study.document
    try:
        written = parse_config(document.text, StudyConfig, document.source).config
    except ConfigError:
        lines = ["the text alone is not a whole config"]
    else:
        lines = differing_keys(as_table(written), as_table(document.config))
    if not lines:
        return ""
    items = "".join(f"<li><code>{text(line)}</code></li>" for line in lines)
    return (
        "<p>Keys that the command line overrode with <code>--set</code>, in SI "
        f"units:</p>\n<ul>{items}</ul>"
    )


def _times(ratio):
    """Two figures, however large: 160 and not 1.6e+02."""
    return f"{float(f'{ratio:.2g}'):g}"
