"""The config sections of the reduction, and the whole config of a study."""

from __future__ import annotations

from dataclasses import dataclass

from eddyshed.solver.boxes import BoxSettings
from eddyshed.solver.config import setting
from eddyshed.solver.hooks import Hook, is_hook, options_problem
from eddyshed.solver.inner_products import INNER_PRODUCTS
from eddyshed.solver.settings import TruthConfig

from .closures import CLOSURES, DIAGNOSTICS
from .homogenised import TERMS


def inner_product_setting() -> str:
    """Declare the key `inner_product`, the same for every kind of ``[resolved]``."""
    return setting(
        default="energy",
        choices=INNER_PRODUCTS,
        doc="product in which modes are orthonormal and variance is measured. energy; "
        "l2: mean square of the streamfunction; enstrophy: mean square of the "
        "potential vorticity; layers weighted by depth. A slice has energy alone",
    )


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
        doc="largest wavenumber kept (isotropic, zonal), in waves per box where the "
        "space repeats and half waves between walls, the root of the sum of squares "
        "over the two directions",
    )
    waves: tuple[tuple[int, int], ...] = setting(
        default=(),
        doc="waves per box, or half waves between walls, in x and y, one pair for "
        "each wave (listed)",
    )
    inner_product: str = inner_product_setting()

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
    inner_product: str = inner_product_setting()


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxesSettings:
    """Keep averages over rectangles, as instruments measure them."""

    boxes: dict[str, BoxSettings] = setting(
        doc="a rectangle and the field that is averaged over it, under a name"
    )
    inner_product: str = inner_product_setting()

    def problems(self):
        """Rules that go across keys."""
        if not self.boxes:
            yield "boxes is empty; write at least one table [resolved.boxes.NAME]"


@dataclass(frozen=True, slots=True, kw_only=True)
class FileSettings:
    """Keep vectors that a file holds, made orthonormal in their order."""

    path: str = setting(doc="an HDF5 or netCDF-4 file")
    variable: str = setting(
        default="vectors",
        doc="the variable in it, of shape (coordinate, mode), with the coordinates of "
        "a truth on this grid; split/resolved/vectors in a split.h5",
    )
    modes: int | None = setting(
        default=None, minimum=1, doc="how many are kept, from the first; absent: all"
    )
    inner_product: str = inner_product_setting()


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
class AuditSettings:
    """Thresholds of the findings."""

    separation: float = setting(
        default=2.5,
        above=0,
        doc="least ratio of resolved to coupling correlation time, worst mode: jets "
        "did well from 2, and below it the correlation times of the fastest modes "
        "were off by half; at 3 none was",
    )
    kurtosis: float = setting(
        default=4.5,
        above=3,
        doc="largest kurtosis of the coupling, worst mode (3 for a normal): closures "
        "of jets, up to 3.6, did well, and those of gyres, from 5, did not",
    )
    skewness: float = setting(
        default=0.5,
        above=0,
        doc="largest absolute skewness of the coupling, worst mode (0 for a normal): "
        "that of a gamma distribution of shape 16. Explains, does not vote",
    )
    joint_kurtosis: float = setting(
        default=1.5,
        above=1,
        doc="largest joint kurtosis of the coupling over that of a normal: as much as "
        "a kurtosis of 4.5 in one mode. Explains, does not vote",
    )
    unresolved_kurtosis: float = setting(
        default=4.5,
        above=3,
        doc="largest mean kurtosis of the unresolved modes. Explains, does not vote",
    )
    fourth_moments: float = setting(
        default=0.6,
        above=0,
        doc="largest |ln| of the variance of the quadratic coupling over that under "
        "the fitted noise, worst mode: its error is that of the noise, one to one, "
        "and a factor of two was met in gyres",
    )
    memory_shape: float = setting(
        default=0.4,
        above=0,
        doc="largest rms difference of a correlation function from that of the fit: "
        "jets and gyres alike were between 0.35 and 0.6. Explains, does not vote",
    )
    lag_consistency: float = setting(
        default=1.45,
        above=1,
        doc="largest factor between the rates inferred at a half and at two "
        "correlation times: common practice asks for a third. Explains, does not vote",
    )
    spectrum: float = setting(
        default=2.0,
        above=1,
        doc="largest factor between the spectrum and that of the fit, in a band: half "
        "the power, as at the edge of a band. Explains, does not vote",
    )
    innovations: float = setting(
        default=0.2,
        above=0,
        doc="largest correlation of innovations: 4 % of their variance is then "
        "foreseen. Explains, does not vote",
    )
    dependence: float = setting(
        default=0.1,
        above=0,
        doc="largest share of the unresolved variance that the resolved state "
        "explains: none in jets, and up to a fifth in gyres",
    )
    energy_dependence: float = setting(
        default=0.4,
        above=0,
        doc="largest share of the variance of the unresolved energy that the resolved "
        "state explains. Explains, does not vote",
    )
    operator_ratio: float = setting(
        default=1.0,
        above=0,
        doc="largest ratio of the perturbation of the fast operator by the resolved "
        "state to the operator: an expansion in it needs less than one; jets were "
        "below 0.97, gyres above 1.5",
    )
    forcing_ratio: float = setting(
        default=0.2,
        above=0,
        doc="largest ratio of the forcing of the unresolved modes by the resolved "
        "state to their tendency: 0.04 at most in jets, 0.48 at least in gyres",
    )
    growth_share: float = setting(
        default=0.3,
        above=0,
        doc="largest share of time in which the fast operator does not damp. Explains, "
        "does not vote: it changes with the window of the fit",
    )
    replaced_ratio: float = setting(
        default=0.7,
        above=0,
        doc="least ratio of the term that noise replaces to the one that the resolved "
        "state modulates. Explains, does not vote",
    )
    replaced_time: float = setting(
        default=1.0,
        above=0,
        doc="largest correlation time of the term that noise replaces, in those of "
        "what it moves: no slower than that. Explains, does not vote",
    )
    coupling_ratio: float = setting(
        default=0.3,
        above=0,
        doc="largest ratio of the coupling to the resolved tendency for a truncation "
        "that drops it: a tenth of the mean square of the tendency",
    )
    decay: float = setting(
        default=0.0,
        minimum=0,
        doc="least fitted decay rate, in medians of all: each must be told from zero",
    )
    repair: float = setting(
        default=0.02,
        minimum=0,
        doc="largest share of the noise variance that a fit may have to change to be "
        "one: a fit that is refused would need more than 0.05",
    )
    limit_distance: float = setting(
        default=0.25,
        above=0,
        doc="largest |ln| of the variance of the white closure over that of the "
        "coloured one: what closures are scored to",
    )
    structure: float = setting(
        default=0.2,
        above=0,
        doc="largest share of squared covariance between modes that the fit keeps "
        "apart. Explains, does not vote",
    )
    mean_balance: float = setting(
        default=0.2,
        above=0,
        doc="largest mean of the terms in the modes, in rms tendencies: a shift of the "
        "constant by more is no detail. Explains, does not vote",
    )
    growth: float = setting(
        default=0.0,
        minimum=0,
        doc="largest growth rate of the linear part of a reduced model, times the "
        "longest correlation time: none may grow",
    )
    length: float = setting(
        default=35.0,
        above=0,
        doc="least length of the truth in correlation times of its slowest resolved "
        "mode: variances then carry errors of a quarter, which is what closures are "
        "scored to",
    )
    noise_sample: float = setting(
        default=35.0,
        above=0,
        doc="least number of independent values behind each rate of the noise",
    )
    mean_shift: float = setting(
        default=1.0,
        above=0,
        doc="largest difference of the means of the two halves, in standard "
        "deviations: it makes a quarter of the variance",
    )
    variance_factor: float = setting(
        default=2.0,
        above=1,
        doc="largest factor between the variances of the two halves: either is then "
        "off the whole by a third",
    )
    trend: float = setting(
        default=1.73,
        above=0,
        doc="largest change along the least-squares line, in standard deviations: "
        "it makes a quarter of the variance",
    )
    left_out: float = setting(
        default=0.05,
        above=0,
        doc="largest share of the variance in no mode at all. Explains, does not vote",
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
