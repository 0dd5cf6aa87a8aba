"""Chamber files and traces on disk: one pulse with everything that belongs to it.

A pulse's values come from the chamber file, then from the row of ``pulses.csv`` in the trace's
folder, then from the trace's own ``#`` lines, then from the command line; the later wins.
"""

import tomllib
from pathlib import Path

import numpy as np

from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.consistency import columns_of
from scatterfit.apparatus.keys import HUMIDITY
from scatterfit.apparatus.saturation import check_saturation
from scatterfit.apparatus.values import printable
from scatterfit.errors import ChamberFileError
from scatterfit.files_pulses import PULSES_NAME, pulse_rows
from scatterfit.files_text import parse_assignment
from scatterfit.files_trace import TRACE_SUFFIXES, Trace, check_columns, read_trace
from scatterfit.files_write import write_json, write_trace

__all__ = [
    "PULSES_NAME",
    "TRACE_SUFFIXES",
    "Trace",
    "load_pulse",
    "parse_assignment",
    "read_chamber",
    "read_chamber_mapping",
    "read_trace",
    "write_json",
    "write_trace",
]

_START_SAMPLES = 20


def read_chamber_mapping(path):
    """Read a chamber file's tables as they are written.

    Parameters
    ----------
    path : str or Path
        A TOML file.

    Returns
    -------
    mapping : dict
        Tables by name, not checked.

    Raises
    ------
    ChamberFileError
        If the file cannot be read or is not TOML; the message is one line.
    """
    try:
        return tomllib.loads(Path(path).read_bytes().decode("utf-8-sig"))
    except OSError as error:
        text = f"cannot be read: {error.strerror or error}"
    except UnicodeDecodeError as error:
        text = f"not a TOML file: byte {error.start + 1} is not UTF-8 text"
    except (ValueError, RecursionError) as error:  # ValueError: TOML errors, endless integers
        text = f"not a TOML file: {error}; every line is [TABLE] or KEY = VALUE"
    raise ChamberFileError(printable(f"{path}: {text}"))


def read_chamber(path):
    """Read a chamber file and check it.

    Parameters
    ----------
    path : str or Path
        A TOML file.

    Returns
    -------
    bench : Apparatus
        The bench, SI inside.

    Raises
    ------
    ChamberFileError
        If the file is not TOML or does not describe a bench.
    """
    return apparatus_from_mapping(read_chamber_mapping(path), str(path))


def load_pulse(chamber_path, trace_path, overrides=None, *, folder=None):
    """Read a chamber file and a trace, with all that is said about this pulse.

    Parameters
    ----------
    chamber_path : str or Path
        The chamber file.
    trace_path : str or Path
        The trace.
    overrides : Mapping of str to object, optional
        Key path to value, above all other sources.
    folder : str or Path, optional
        Folder above the trace's own whose ``pulses.csv`` counts too, the nearer one more.

    Returns
    -------
    bench : Apparatus
        The bench as it was for this pulse.
    trace : Trace
        The trace.
    used : dict
        Key path to value of every override that holds.

    Raises
    ------
    ChamberFileError
        If the chamber file or an override does not describe a bench.
    TraceError
        If the trace cannot be used with it.
    """
    mapping = read_chamber_mapping(chamber_path)
    where = str(chamber_path)
    bench = apparatus_from_mapping(mapping, where)
    trace = read_trace(trace_path)
    layers = {
        **pulse_rows(trace_path, folder),
        trace.source: trace.overrides,
        "--set": overrides,
    }
    layers = {origin: layer for origin, layer in layers.items() if layer}
    used = {}
    for origin, layer in layers.items():
        mapping = apply_overrides(mapping, layer, origin)
        used = _merged(used, layer)
    if layers:
        where = f"{where} with {', '.join(layers)}"
        bench = apparatus_from_mapping(mapping, where)
    check_columns(columns_of(bench), trace)
    if bench.chamber.pressure is None:
        check_saturation(bench, _pressure_at_start(bench, trace), where)
    return bench, trace, used


def _merged(used, layer):
    """Return the overrides that hold after one more layer; it may state the vapour anew."""
    vapour = {f"vapour.{name}" for name in HUMIDITY}
    anew = not vapour.isdisjoint(layer)
    kept = {path: value for path, value in used.items()
            if not (anew and path.removesuffix("_sigma") in vapour)}
    return {**kept, **layer}


def _pressure_at_start(bench, trace):
    """Return the chamber pressure of the first samples [Pa]."""
    readings = trace.columns[bench.pressure.column]
    readings = readings[np.isfinite(readings)][:_START_SAMPLES]
    return float(np.median(readings)) + bench.pressure.offset
