"""One pulse from its files to its result: what the command line and the night both call."""

import hashlib
import platform
from dataclasses import replace
from functools import lru_cache
from importlib import metadata
from pathlib import Path

import numpy as np

from scatterfit.compiled import compiled
from scatterfit.errors import TraceError
from scatterfit.files import load_pulse
from scatterfit.files_compiled import load_compiled
from scatterfit.files_kernel import default_store
from scatterfit.measured_pulse.measure import measure
from scatterfit.measured_pulse.monte_carlo import monte_carlo
from scatterfit.measured_pulse.record import MeasuredPulse, Reason

_LIBRARIES = ("scatterfit", "numpy", "scipy", "lmfit", "miepython")
_MANY = 200


def fit_loaded(apparatus, trace, *, overrides=None, exclude=(), store=None, provenance=None):
    """Fit a trace that has been read.

    Parameters
    ----------
    apparatus : Apparatus
        The bench, with the pulse's own values applied.
    trace : Trace
        As read.
    overrides : dict, optional
        Values that were applied, for the record.
    exclude : sequence of tuple of float
        Ranges of time to leave out [s].
    store : object, optional
        Where kernel tables are kept; the user's cache folder by default.
    provenance : dict, optional
        More for the record.

    Returns
    -------
    pulse : MeasuredPulse
        With verdict ``failed`` where the trace cannot be used.
    """
    record = {
        "versions": {name: _version(name) for name in _LIBRARIES + ("numba",) * compiled()} | {
            "python": platform.python_version()},
        "trace_sha256": trace.sha256,
        "overrides": dict(overrides or {}),
        "exclude_ms": [[1e3 * low, 1e3 * high] for low, high in exclude],
        **(provenance or {}),
    }
    store = default_store() if store is None else store
    try:
        return measure(
            apparatus, trace.time, dict(trace.columns), trace=str(trace.source), store=store,
            exclude=exclude, provenance=record,
        )
    except TraceError as error:
        return _failed(str(trace.source), str(error), record)
    except (np.linalg.LinAlgError, FloatingPointError, ZeroDivisionError) as error:
        text = f"the fit broke down ({error}): look at the trace, or report it with the files"
        return _failed(str(trace.source), text, record)


def repeated(chamber_path, trace_path, pulse, settings):
    """Return a result with the spread over repeated analyses added.

    Parameters
    ----------
    chamber_path, trace_path : str or Path
        The chamber file and the trace.
    pulse : MeasuredPulse
        Result of :func:`fit_file` on them.
    settings : dict
        ``"trials"``, ``"seed"`` and ``"progress"``, with ``"overrides"`` and ``"exclude"`` as for
        :func:`fit_file`.

    Returns
    -------
    pulse : MeasuredPulse
        With ``monte_carlo`` filled in; unchanged where there is no fit to repeat.
    """
    if pulse.final_radius is None:
        return pulse
    apparatus, trace, _ = load_pulse(chamber_path, trace_path, settings["overrides"])
    if settings["trials"] >= _MANY:
        load_compiled()
    spread = monte_carlo(
        apparatus, trace.time, dict(trace.columns), pulse,
        {"store": default_store(), "exclude": (), **settings},
    )
    return replace(pulse, monte_carlo=spread, trials=settings["trials"])


def fit_file(chamber_path, trace_path, *, overrides=None, exclude=(), folder=None, store=None):
    """Fit a trace from its files.

    Parameters
    ----------
    chamber_path, trace_path : str or Path
        The chamber file and the trace.
    overrides : dict, optional
        Key path to value, above all other sources.
    exclude : sequence of tuple of float
        Ranges of time to leave out [s].
    folder : str or Path, optional
        Root of a batch, whose ``pulses.csv`` counts too.
    store : object, optional
        Where kernel tables are kept.

    Returns
    -------
    pulse : MeasuredPulse
        With verdict ``failed`` and a reason where the trace cannot be used.

    Raises
    ------
    ChamberFileError
        If the chamber file or an override is wrong.
    """
    chamber = {"chamber_sha256": _sha256(chamber_path)}
    try:
        apparatus, trace, used = load_pulse(chamber_path, trace_path, overrides, folder=folder)
    except TraceError as error:
        return _failed(str(trace_path), str(error), chamber)
    return fit_loaded(
        apparatus, trace, overrides=used, exclude=exclude, store=store, provenance=chamber
    )


def _failed(trace, text, provenance):
    """Return the result of a trace that cannot be used."""
    return MeasuredPulse(trace, "failed", (Reason("unusable", text),), provenance=provenance)


def _sha256(path):
    """Return the hash of a file, or ``None`` where it cannot be read."""
    try:
        return hashlib.sha256(Path(path).read_bytes()).hexdigest()
    except OSError:
        return None


@lru_cache
def _version(name):
    """Return the installed version of a package, or ``None``."""
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return None
