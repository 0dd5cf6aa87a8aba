"""Chamber files and traces on disk: one pulse with everything that belongs to it.

A pulse's values come from the chamber file, then from the row of ``pulses.csv`` in the trace's
folder, then from the trace's own ``#`` lines, then from the command line; the later wins.
"""

import csv
import json
import os
import tempfile
import tomllib
from functools import lru_cache
from pathlib import Path

import numpy as np

from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.consistency import check_saturation, columns_of
from scatterfit.apparatus.overrides import known_paths, split_path
from scatterfit.apparatus.values import nearest, suggestion
from scatterfit.errors import ChamberFileError, InvalidInputError
from scatterfit.files_text import parse_assignment, parse_scalar
from scatterfit.files_trace import TRACE_SUFFIXES, Trace, check_columns, read_trace
from scatterfit.units import PRESSURE_UNITS, VOLTAGE_UNITS, column_unit, from_si

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

PULSES_NAME = "pulses.csv"
"""File in a folder of traces that holds values of many pulses."""

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
        text = Path(path).read_bytes().decode("utf-8-sig")
        return tomllib.loads(text)
    except OSError as error:
        message = f"{path}: cannot be read: {error.strerror or error}"
    except UnicodeDecodeError as error:
        message = f"{path}: not a TOML file: not UTF-8 text (byte {error.start + 1})"
    except tomllib.TOMLDecodeError as error:
        message = f"{path}: not a TOML file: {error}; a line reads key = value"
    raise ChamberFileError(message)


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


def load_pulse(chamber_path, trace_path, overrides=None):
    """Read a chamber file and a trace, with all that is said about this pulse.

    Parameters
    ----------
    chamber_path : str or Path
        The chamber file.
    trace_path : str or Path
        The trace.
    overrides : Mapping of str to object, optional
        Key path to value, above all other sources.

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
    apparatus_from_mapping(mapping, str(chamber_path))
    trace = read_trace(trace_path)
    layers = (
        (str(Path(trace_path).parent / PULSES_NAME), pulse_row(trace_path)),
        (str(trace_path), trace.overrides),
        ("--set", dict(overrides or {})),
    )
    used, where = {}, str(chamber_path)
    for origin, layer in layers:
        if layer:
            mapping = apply_overrides(mapping, layer, origin)
            used.update(layer)
            where += f" with {origin}"
    bench = apparatus_from_mapping(mapping, where)
    check_columns(columns_of(bench), trace)
    if bench.chamber.pressure is None:
        start = trace.columns[bench.pressure.column]
        start = start[np.isfinite(start)][:_START_SAMPLES]
        check_saturation(bench, float(np.median(start)) + bench.pressure.offset, where)
    return bench, trace, used


def pulse_row(trace_path):
    """Return what ``pulses.csv`` in a trace's folder says about it.

    Parameters
    ----------
    trace_path : str or Path
        The trace.

    Returns
    -------
    overrides : dict
        Key path to value; empty where the file or the row is not there.

    Raises
    ------
    ChamberFileError
        If ``pulses.csv`` cannot be understood.
    """
    path = Path(trace_path)
    try:
        state = (path.parent / PULSES_NAME).stat()
    except OSError:
        return {}
    table = _pulses_table(str(path.parent / PULSES_NAME), state.st_mtime_ns, state.st_size)
    return dict(table.get(path.name) or table.get(path.stem) or {})


@lru_cache(maxsize=8)
def _pulses_table(source, _modified, _size):
    """Return trace name to its overrides; read again only when the file has changed."""
    try:
        text = Path(source).read_bytes().decode("utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        message = f"{source}: cannot be read as UTF-8 text: {error}"
        raise ChamberFileError(message) from error
    lines = text.splitlines()
    first = next((line for line in lines if line.strip() and not line.startswith("#")), "")
    delimiter = next((mark for mark in "\t;" if mark in first), ",")
    header, table = None, {}
    for number, row in enumerate(csv.reader(lines, delimiter=delimiter), start=1):
        cells = [cell.strip() for cell in row]
        if not any(cells) or cells[0].startswith("#"):
            continue
        if header is None:
            header = _pulses_header(cells, source, number)
            continue
        _add_row(table, header, cells, f"{source}, row {number}", delimiter == ";")
    return table


def _pulses_header(names, source, number):
    """Return the columns of ``pulses.csv``: key paths, and None for remarks."""
    where = f"{source}, row {number}"
    if names[0] != "trace":
        message = f'{where}: the first column must be "trace", it is "{names[0]}"'
        raise ChamberFileError(message)
    header = []
    by_key = {path.rpartition(".")[2]: path for path in reversed(known_paths())}
    for name in names[1:]:
        known = split_path(name) is not None
        if not known and ("." in name or nearest(name, by_key)):
            match = by_key.get(nearest(name, by_key))
            meant = f"did you mean {match}?" if match and "." not in name else (
                suggestion(name, known_paths()))
            message = f"{where}: column {name}: not a known key path; {meant}"
            raise ChamberFileError(message)
        if known and name in header:
            message = f"{where}: column {name} is there twice"
            raise ChamberFileError(message)
        header.append(name if known else None)
    return header


def _add_row(table, header, cells, where, decimal_comma):
    name = cells[0]
    if len(cells) != len(header) + 1:
        message = f"{where}: {len(cells)} cells, the header has {len(header) + 1}"
        raise ChamberFileError(message)
    if name in table:
        message = f"{where}: trace {name} is there twice"
        raise ChamberFileError(message)
    table[name] = {
        path: parse_scalar(cell, decimal_comma=decimal_comma)
        for path, cell in zip(header, cells[1:], strict=True)
        if path is not None and cell
    }


def write_trace(path, time_s, columns, comments=()):
    """Write a trace as comma-separated text, in one step so that a watcher sees it whole.

    Times are written in ms with 12 significant digits, readings in the unit of their column's
    name with 9; a reading that is not finite becomes an empty cell.

    Parameters
    ----------
    path : str or Path
        File to write.
    time_s : ndarray, shape (n,)
        Sample times [s].
    columns : Mapping of str to ndarray, shape (n,)
        Column name, unit included, to readings [V or Pa].
    comments : sequence of str
        Lines to put before the header, without ``#``.

    Raises
    ------
    InvalidInputError
        If a column has no known unit or another length than the times.
    """
    time_s = np.asarray(time_s, dtype=float)
    table = [np.char.mod("%.12g", from_si(time_s, "ms"))]
    for name, values in columns.items():
        unit = column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS)
        if unit is None or np.shape(values) != time_s.shape:
            message = f"column {name}: needs a unit in its name and {time_s.size} readings"
            raise InvalidInputError(message)
        readings = from_si(np.asarray(values, dtype=float), unit)
        table.append(np.where(np.isfinite(readings), np.char.mod("%.9g", readings), ""))
    lines = [f"# {' '.join(comment.split())}" for comment in comments]
    lines.append(",".join(["time_ms", *columns]))
    lines.extend(map(",".join, zip(*table, strict=True)))
    _write_text(path, "\n".join(lines) + "\n")


def write_json(path, mapping):
    """Write a mapping as JSON, in one step.

    Parameters
    ----------
    path : str or Path
        File to write.
    mapping : Mapping
        What to write; NumPy numbers and arrays become plain ones.

    Raises
    ------
    InvalidInputError
        If a number in it is not finite.
    """
    try:
        text = json.dumps(mapping, indent=2, allow_nan=False, ensure_ascii=False, default=_plain)
    except ValueError as error:
        message = f"{path}: not written: {error}"
        raise InvalidInputError(message) from error
    _write_text(path, text + "\n")


def _plain(value):
    """Return what JSON can hold of a NumPy value."""
    if isinstance(value, np.generic | np.ndarray):
        return value.tolist()
    message = f"{type(value).__name__} cannot be written as JSON"
    raise TypeError(message)


def _write_text(path, text):
    """Write a file beside its place and move it there."""
    path = Path(path)
    handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as file:
            file.write(text)
        Path(temporary).chmod(0o644)
        Path(temporary).replace(path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
