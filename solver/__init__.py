"""Truth runs of simplified oceans.

The names below are the public interface; everything else may change. They are
loaded when first used, so that importing the package costs nothing.
"""

from importlib import import_module

_PUBLIC = {
    "as_table": "config",
    "box_averages": "boxes",
    "build_ocean": "build",
    "budget_of": "diagnostics",
    "forecast_run": "forecast",
    "gyres": "diagnostics",
    "isotropic_spectrum": "spectra",
    "open_record": "record",
    "open_records": "record",
    "parse_config": "config",
    "parse_quantity": "quantities",
    "read_config": "config",
    "run_ensemble": "ensemble",
    "run_member": "truth",
    "spectral_flux": "spectra",
    "stream": "randomness",
    "zonal_spectrum": "spectra",
    "Barotropic": "oceans.barotropic",
    "Basin": "spaces.basin",
    "Boussinesq": "oceans.boussinesq",
    "BoxAverages": "boxes",
    "BoxSettings": "boxes",
    "Channel": "spaces.channel",
    "EddyshedError": "errors",
    "ExponentialDifferencingRK4": "exponential",
    "IntegratingFactorRK4": "stepping",
    "Periodic": "spaces.periodic",
    "Ramp": "time_functions",
    "Seasonal": "time_functions",
    "Step": "time_functions",
    "TruthConfig": "settings",
    "TruthRecord": "record",
    "TwoLayer": "oceans.two_layer",
}
__all__ = list(_PUBLIC)


def __getattr__(name):
    if name not in _PUBLIC:
        message = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(message)
    return getattr(import_module(f".{_PUBLIC[name]}", __name__), name)


def __dir__():
    return [*globals(), *__all__]
