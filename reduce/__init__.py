"""Reduced stochastic models, and the evidence for or against them.

The names below are the public interface; everything else may change. They are
loaded when first used, so that importing the package costs nothing.
"""

from importlib import import_module

_PUBLIC = {
    "check_model": "contract",
    "closure": "closures",
    "fit_ornstein_uhlenbeck": "noise.fit",
    "galerkin": "operators",
    "integral_time": "statistics.correlation",
    "kolmogorov_smirnov": "statistics.resampling",
    "moments": "statistics.resampling",
    "project": "contract",
    "simulate": "simulation",
    "step_rule": "simulation",
    "wasserstein": "statistics.resampling",
    "white_limit": "homogenised",
    "window_rule": "noise.fit",
    "Basis": "bases.basis",
    "ClosureData": "closures.data",
    "DiffusionModel": "diffusion",
    "Estimate": "statistics.estimate",
    "Model": "contract",
    "ItoScheme": "diffusion_schemes",
    "NoiseFit": "noise.fit",
    "Operators": "operators",
    "OrnsteinUhlenbeck": "noise.ornstein_uhlenbeck",
    "ReducedModel": "reduced",
    "Split": "split",
    "StratonovichScheme": "diffusion_schemes",
    "StudyConfig": "settings",
    "Variation": "variation",
    "WhiteLimit": "homogenised",
}
__all__ = list(_PUBLIC)


def __getattr__(name):
    if name not in _PUBLIC:
        message = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(message)
    return getattr(import_module(f".{_PUBLIC[name]}", __name__), name)


def __dir__():
    return [*globals(), *__all__]
