"""The config sections of the reduction, and the whole config of a study."""

from __future__ import annotations

from dataclasses import dataclass

from eddyshed.solver.config import setting
from eddyshed.solver.hooks import Hook, is_hook, options_problem
from eddyshed.solver.settings import TruthConfig

from .bases.settings import (
    BoxesSettings,
    EofSettings,
    FileSettings,
    FourierSettings,
)
from .closures import CLOSURES, DIAGNOSTICS
from .homogenised import TERMS
from .thresholds import AuditSettings


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitsSettings:
    """What the reduction may use of the machine."""

    memory: float = setting(
        default=4e9,
        unit="B",
        minimum=2.5e8,
        doc="memory that the reduction may take, with the program's own; a truth "
        "that is larger is read in blocks, and what would not fit is refused "
        "beforehand",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class UnresolvedSettings:
    """What the noise stands in for."""

    variance: float = setting(
        default=0.999,
        above=0,
        maximum=1,
        doc="share of the unresolved variance that gets modes; the rest is left "
        "out, measured and reported",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class NoiseFitSettings:
    """How the Ornstein-Uhlenbeck noise is fitted."""

    method: str = setting(
        default="auto",
        choices=("auto", "integral", "product", "likelihood", "regression"),
        doc="what the noise shares with the unresolved modes beside their variance. "
        "integral: that of the lag covariance, which linear coupling feels; product: "
        "that of the squared correlation, which quadratic coupling feels; likelihood: "
        "all of it, if samples are those of such a process (those of smooth flows are "
        "refused); regression: the covariance at one lag; auto: integral or product, "
        "by which coupling is larger along the truth",
    )
    structure: str = setting(
        default="auto",
        choices=("auto", "real diagonal", "complex diagonal", "blocks", "full"),
        doc="which modes the noise of a mode may act on. real diagonal: none; complex "
        "diagonal: the other part of its wave; blocks: those of the same wavenumber "
        "in x; full: all; auto: complex diagonal for waves, else full if the truth "
        "holds 50 effective samples for each mode, else real diagonal",
    )
    window: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="length over which lag covariances are integrated; absent: eight times "
        "the variance-weighted correlation time of the unresolved modes",
    )
    lag: float | None = setting(
        default=None, unit="s", above=0, doc="lag of the regression"
    )

    def problems(self):
        """Rules that go across keys."""
        if (self.method == "regression") != (self.lag is not None):
            yield (
                'method = "regression" needs lag, such as lag = "1 d"'
                if self.lag is None
                else 'lag has no meaning without method = "regression"; leave it out'
            )
        if self.window is not None and self.method in ("likelihood", "regression"):
            yield f'window has no meaning with method = "{self.method}"; leave it out'
        if self.method == "product" and self.structure in ("blocks", "full"):
            yield (
                f'method = "product" has no structure = "{self.structure}"; use '
                '"integral", or a diagonal'
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class WhiteSettings:
    """What goes into the white closure."""

    leave_out: tuple[str, ...] = setting(
        default=(),
        choices=TERMS,
        doc="terms of the limit equation that are left out, to see what each does; "
        "with mean calibration the constant makes up for the mean of what is missing",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class ClosuresSettings:
    """Which closures are made."""

    use: tuple[str, ...] = setting(
        default=tuple(name for name in CLOSURES if name not in DIAGNOSTICS),
        choices=tuple(CLOSURES),
        hooks=True,
        doc="closures to make",
    )
    options: dict | None = setting(
        default=None,
        doc="for closures of your own, a table of keys for each: "
        '{ "package.module:Name" = { key = 1.0 } }',
    )
    mean_calibration: bool = setting(
        default=True,
        doc="shift the constant forcing of the coloured and white closures so that "
        "their mean tendency vanishes over the truth",
    )
    white: WhiteSettings = setting(
        default=WhiteSettings, doc="what goes into the white closure"
    )

    def problems(self):
        """Rules that go across keys."""
        if not self.use:
            yield f"use is empty; name at least one of {', '.join(CLOSURES)}"
        if len(set(self.use)) < len(self.use):
            yield "use names a closure twice"
        for name, options in (self.options or {}).items():
            if name not in self.use or not is_hook(name):
                yield (
                    f'options are given for "{name}", which is no closure of your own '
                    "among those in use"
                )
            elif options_problem(options):
                yield f'options of "{name}": {options_problem(options)}'

    @property
    def hooks(self) -> dict[str, Hook]:
        """Closures of the user's own among those in use."""
        options = self.options or {}
        return {
            name: Hook(name=name, options=options.get(name, {}))
            for name in self.use
            if is_hook(name)
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class BenchmarkSettings:
    """How the reduced models are run and scored."""

    members: int = setting(
        default=16, minimum=2, maximum=100000, doc="members of each reduced model"
    )
    duration: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="length of each member's record; absent: all members together are twice "
        "as long as the truth",
    )
    variance_tolerance: float = setting(
        default=0.25,
        above=0,
        doc="largest |ln(variance / truth)| that counts as close",
    )
    time_tolerance: float = setting(
        default=0.4,
        above=0,
        doc="largest |ln(integral time / truth)| that counts as close",
    )
    distribution_tolerance: float = setting(
        default=0.15,
        above=0,
        doc="largest Wasserstein distance, in standard deviations of the truth, "
        "that counts as close",
    )
    mean_tolerance: float = setting(
        default=0.25,
        above=0,
        doc="largest difference of means, in standard deviations of the truth, "
        "that counts as close",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class StudyConfig(TruthConfig):
    """A whole study: the truth, and what is done with it."""

    resolved: FourierSettings | EofSettings | BoxesSettings | FileSettings | Hook = (
        setting(
            kinds={
                "fourier": FourierSettings,
                "eof": EofSettings,
                "boxes": BoxesSettings,
                "file": FileSettings,
            },
            hooks=True,
            doc='the modes that are kept; or kind = "package.module:Name", a basis of '
            "your own, made with the keys of the table `options`",
        )
    )
    unresolved: UnresolvedSettings = setting(
        default=UnresolvedSettings, doc="the modes that noise stands in for"
    )
    noise: NoiseFitSettings = setting(
        default=NoiseFitSettings, doc="how the noise is fitted"
    )
    closures: ClosuresSettings = setting(
        default=ClosuresSettings, doc="which reduced models are made"
    )
    audit: AuditSettings = setting(
        default=AuditSettings, doc="thresholds of the findings"
    )
    benchmark: BenchmarkSettings = setting(
        default=BenchmarkSettings, doc="how the reduced models are scored"
    )
    limits: LimitsSettings = setting(
        default=LimitsSettings, doc="what the reduction may use of the machine"
    )

    def problems(self):
        """Rules that go across sections."""
        # No plain super(): a dataclass with slots is a second class.
        yield from TruthConfig.problems(self)
        spatial = {FourierSettings: "fourier", BoxesSettings: "boxes"}
        if isinstance(self.ocean, Hook) and type(self.resolved) in spatial:
            yield (
                f'[resolved] kind = "{spatial[type(self.resolved)]}" needs a space, '
                'and a model of your own has none; use kind = "eof", or a basis of '
                "your own"
            )

    @property
    def hooks(self) -> tuple[tuple[str, Hook], ...]:
        """All of the user's own code that the config names, with where it stands."""
        places = (("[ocean] kind", self.ocean), ("[resolved] kind", self.resolved))
        closures = (("[closures] use", h) for h in self.closures.hooks.values())
        return tuple(
            (where, hook)
            for where, hook in (*places, *closures)
            if isinstance(hook, Hook)
        )
