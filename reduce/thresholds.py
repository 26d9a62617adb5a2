"""Section ``[audit]`` of a config: the thresholds, each with its reason."""

from __future__ import annotations

from dataclasses import dataclass

from eddyshed.solver.config import setting


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
