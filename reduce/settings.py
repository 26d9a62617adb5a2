"""The config sections of the reduction, and the whole config of a study."""

from __future__ import annotations

from dataclasses import dataclass

from eddyshed.solver.config import setting
from eddyshed.solver.settings import TruthConfig

from .closures import CLOSURES, DIAGNOSTICS
from .homogenised import TERMS


@dataclass(frozen=True, slots=True, kw_only=True)
class FourierSettings:
    """Keep chosen wavenumbers."""

    family: str = setting(
        default="isotropic",
        choices=("isotropic", "zonal", "listed"),
        doc="isotropic: all waves up to a total wavenumber; zonal: waves that do "
        "not vary in x; listed: those in `waves`",
    )
    up_to: float | None = setting(
        default=None,
        minimum=1,
        doc="largest wavenumber kept, in waves per box (isotropic, zonal)",
    )
    waves: tuple[tuple[int, int], ...] = setting(
        default=(), doc="waves per box in x and y, one pair for each wave (listed)"
    )

    def problems(self):
        """Rules that go across keys."""
        if self.family == "listed":
            if not self.waves:
                yield 'family = "listed" needs waves, such as waves = [[0, 1], [1, 0]]'
            if self.up_to is not None:
                yield 'up_to has no meaning with family = "listed"; leave it out'
        else:
            if self.up_to is None:
                yield f'family = "{self.family}" needs up_to, such as up_to = 3'
            if self.waves:
                yield f'waves has no meaning with family = "{self.family}"'


@dataclass(frozen=True, slots=True, kw_only=True)
class EofSettings:
    """Keep the leading empirical orthogonal functions of the truth."""

    modes: int = setting(minimum=1, maximum=1000, doc="how many modes are kept")


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

    match: str = setting(
        default="auto",
        choices=("auto", "integral", "product"),
        doc="what the noise shares with the unresolved modes beside their variance. "
        "integral: that of the lag covariance, which linear coupling feels; product: "
        "that of the squared correlation, which quadratic coupling feels; auto: by "
        "which coupling is larger along the truth",
    )
    window: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="length over which lag covariances are integrated; absent: eight times "
        "the variance-weighted correlation time of the unresolved modes",
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
        doc="closures to make",
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


@dataclass(frozen=True, slots=True, kw_only=True)
class AuditSettings:
    """Thresholds of the findings."""

    separation: float = setting(
        default=3.0,
        above=0,
        doc="least ratio of resolved to coupling correlation time, worst mode: "
        "below it the resolved mode moves while its noise is still correlated",
    )
    kurtosis: float = setting(
        default=4.0,
        above=3,
        doc="largest kurtosis of the coupling, worst mode (3 for a normal): above "
        "it the Gaussian fourth moments of the closures are visibly wrong",
    )
    skewness: float = setting(
        default=0.5,
        above=0,
        doc="largest absolute skewness of the coupling, worst mode (0 for a normal)",
    )
    length: float = setting(
        default=50.0,
        above=0,
        doc="least length of the truth in correlation times of its slowest "
        "resolved mode: below it variances carry errors of a fifth and more",
    )


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

    resolved: FourierSettings | EofSettings = setting(
        kinds={"fourier": FourierSettings, "eof": EofSettings},
        doc="the modes that are kept",
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
