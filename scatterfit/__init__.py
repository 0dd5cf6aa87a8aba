"""Droplet radius, growth rate and number from light scattered in an expansion chamber."""

from importlib import import_module

__version__ = "0.1.0"

_PUBLIC = {
    "read_chamber": ("scatterfit.files", "read_chamber"),
    "read_trace": ("scatterfit.files", "read_trace"),
    "load_pulse": ("scatterfit.files", "load_pulse"),
    "fit": ("scatterfit.files_fit", "fit_loaded"),
    "fit_file": ("scatterfit.files_fit", "fit_file"),
    "load_compiled": ("scatterfit.files_compiled", "load_compiled"),
    "simulate": ("scatterfit.files_simulate", "simulate"),
    "open_results": ("scatterfit.overnight.results", "open_results"),
    "MeasuredPulse": ("scatterfit.measured_pulse.record", "MeasuredPulse"),
    "Quantity": ("scatterfit.measured_pulse.record", "Quantity"),
    "ScatterfitError": ("scatterfit.errors", "ScatterfitError"),
}

__all__ = list(_PUBLIC)


def __getattr__(name):
    """Load a public name when it is first used, so that importing the package stays quick."""
    if name not in _PUBLIC:
        message = f"module 'scatterfit' has no attribute {name!r}"
        raise AttributeError(message)
    module, attribute = _PUBLIC[name]
    value = getattr(import_module(module), attribute)
    globals()[name] = value
    return value


def __dir__():
    """Return the public names."""
    return sorted(__all__)
