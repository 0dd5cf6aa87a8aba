"""Traces on disk: text with a header of column names, one row a sample.

The common clean file is converted in one go; anything unusual goes through a slower reader that
looks at every cell and names the row and the column of the first that is wrong. A damaged file
is never repaired.
"""

import hashlib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from scatterfit.apparatus.overrides import check_override, split_path
from scatterfit.apparatus.values import shown, suggestion
from scatterfit.errors import ChamberFileError, TraceError
from scatterfit.files_text import parse_scalar
from scatterfit.units import PRESSURE_UNITS, TIME_UNITS, VOLTAGE_UNITS, column_unit, to_si

TRACE_SUFFIXES = (".csv", ".tsv", ".txt", ".dat")
"""Endings of the files that `read_trace` reads."""

FEWEST_SAMPLES = 20
"""Usable samples that a trace must have."""

_BINARY_SUFFIXES = {".h5": "HDF5", ".hdf5": "HDF5", ".nc": "netCDF"}
_TIME_COLUMNS = tuple(f"time_{unit}" for unit in TIME_UNITS)
_BYTE_ORDER_MARK = b"\xef\xbb\xbf"


@dataclass(frozen=True)
class Trace:
    """One recording as read, nothing left out and nothing smoothed."""

    source: str
    """The file as it was named."""
    time: np.ndarray
    """Sample times, strictly increasing, shape (n,) [s]."""
    columns: Mapping[str, np.ndarray]
    """Header's own name to readings, each of shape (n,): voltages [V], pressures [Pa];
    NaN where the file has an empty or non-finite cell."""
    header: tuple[str, ...]
    """Every column name, in the file's order."""
    overrides: Mapping[str, object] = field(default_factory=dict)
    """Key path to value in the key's unit, from the file's own ``#`` lines."""
    sha256: str = ""
    """Hash of the file's bytes."""
    comments: tuple[str, ...] = ()
    """The ``#`` lines that are not overrides."""


@dataclass(frozen=True)
class _Layout:
    """How a text trace is written."""

    source: str
    delimiter: str
    header: tuple[str, ...]
    first_row: int
    """File line of the first sample, from 1."""


def read_trace(path):
    """Read one trace.

    Parameters
    ----------
    path : str or Path
        File with comma, tab or semicolon between its columns.

    Returns
    -------
    trace : Trace
        Times [s], voltages [V] and pressures [Pa].

    Raises
    ------
    TraceError
        If the file cannot be read, is not text, has no header, no time column or fewer than 20
        samples, a row of the wrong length, a cell that is not a number, or times that do not
        increase; the message is one line with the row of the file (from 1) and the column.
    ChamberFileError
        If one of its ``#`` lines sets a value that no bench could have.
    """
    source = str(path)
    raw = _read_bytes(path)
    text = _decode(raw, source)
    preamble, header_line, line_number, body = _split(text, source)
    layout = _layout(header_line, line_number, source)
    overrides, comments = _overrides(preamble, layout)
    table = _fast_table(body, layout)
    if table is None:
        table = _careful_table(body, layout)
    time = _time(table, layout)
    return Trace(
        source=source,
        time=time,
        columns=_columns(table, layout),
        header=layout.header,
        overrides=overrides,
        sha256=hashlib.sha256(raw).hexdigest(),
        comments=comments,
    )


def _read_bytes(path):
    kind = _BINARY_SUFFIXES.get(Path(path).suffix.lower())
    if kind is not None:
        message = (f"{path}: {kind} traces are not read by this version; "
                   "save the columns as CSV, one row a sample")
        raise TraceError(message)
    try:
        return Path(path).read_bytes()
    except OSError as error:
        message = f"{path}: cannot be read: {error.strerror or error}"
        raise TraceError(message) from error


def _decode(raw, source):
    """Return the file's text with single newlines, or refuse what is not text."""
    if not raw.strip():
        message = f"{source}: the file is empty; a header of column names and rows are needed"
        raise TraceError(message)
    if raw.startswith(_BYTE_ORDER_MARK):
        raw = raw[len(_BYTE_ORDER_MARK):]
    if b"\0" in raw:
        message = f"{source}: not a text file (it holds zero bytes); save it as UTF-8 text"
        raise TraceError(message)
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        row = raw.count(b"\n", 0, error.start) + 1
        message = (f"{source}: row {row}: not UTF-8 text (byte 0x{raw[error.start]:02x}); "
                   "save it as UTF-8 text")
        raise TraceError(message) from error
    return text.replace("\r\n", "\n").replace("\r", "\n") if "\r" in text else text


def _split(text, source):
    """Return the ``#`` lines with their numbers, the header with its number, and the body."""
    preamble, position, number = [], 0, 0
    while position < len(text):
        end = text.find("\n", position)
        end = len(text) if end < 0 else end
        line, number = text[position:end], number + 1
        position = end + 1
        if line.startswith("#"):
            preamble.append((number, line))
        elif line.strip():
            return preamble, line, number, text[position:]
    message = f"{source}: there is no header of column names and there are no rows"
    raise TraceError(message)


def _layout(line, number, source):
    """Read the header: what separates the columns, and what they are called."""
    delimiter = next((mark for mark in "\t;" if mark in line), ",")
    header = tuple(_unquoted(name) for name in line.split(delimiter))
    layout = _Layout(source, delimiter, header, number + 1)
    if all(_is_number(name, delimiter) for name in header):
        message = f"{source}: row {number}: a header of column names is missing before the numbers"
        raise TraceError(message)
    for position, name in enumerate(header, start=1):
        if not name:
            message = f"{source}: row {number}: column {position} of the header has no name"
            raise TraceError(message)
        if header.count(name) > 1:
            message = f"{source}: row {number}: column {name} is there twice"
            raise TraceError(message)
    _time_column(layout)
    return layout


def _unquoted(cell):
    cell = cell.strip()
    if len(cell) >= 2 and cell[0] == cell[-1] == '"':
        return cell[1:-1].strip()
    return cell


def _is_number(cell, delimiter):
    try:
        _cell_value(cell, delimiter)
    except ValueError:
        return False
    return True


def _cell_value(cell, delimiter):
    """Return a cell as a float, NaN where it is empty; raise ValueError for anything else."""
    cell = _unquoted(cell)
    if not cell:
        return math.nan
    if delimiter != ",":
        cell = cell.replace(",", ".", 1)
    if "_" in cell or not cell.isascii():
        raise ValueError(cell)
    return float(cell)


def _time_column(layout):
    """Return the index and the unit of the one time column."""
    found = [name for name in layout.header if name in _TIME_COLUMNS]
    if len(found) == 1:
        return layout.header.index(found[0]), column_unit(found[0], TIME_UNITS)
    there = ", ".join(layout.header)
    what = "there is no time column" if not found else f"{' and '.join(found)} both give the time"
    message = (f"{layout.source}: row {layout.first_row - 1}: {what}; exactly one of "
               f"{', '.join(_TIME_COLUMNS)} is needed, the columns are {shown_names(there)}")
    raise TraceError(message)


def shown_names(text, length=200):
    """Return a list of names, cut where it gets too long for one line.

    Parameters
    ----------
    text : str
        Names, separated by commas.
    length : int
        Most characters to show [-].

    Returns
    -------
    text : str
        The names on one line.

    Examples
    --------
    >>> shown_names("time_ms, scatter1_V", 10)
    'time_ms...'
    """
    text = text.encode("unicode_escape").decode("ascii")
    return text if len(text) <= length else text[: length - 3] + "..."


def _overrides(preamble, layout):
    """Return the values that the ``#`` lines set, and the lines that set none."""
    overrides, comments = {}, []
    for number, line in preamble:
        text = line.lstrip("#").strip()
        path, equals, written = (part.strip() for part in text.partition("="))
        if not equals or split_path(path) is None:
            comments.append(text)
            continue
        where = f"{layout.source}, row {number}"
        if path in overrides:
            message = f"{where}: {path} = {written}: is set twice in this file"
            raise ChamberFileError(message)
        overrides[path] = parse_scalar(written, decimal_comma=layout.delimiter == ";")
        check_override(path, overrides[path], where)
    return overrides, tuple(comments)


def _fast_table(body, layout):
    """Return all cells as floats, shape (rows, columns), or None where a closer look is due."""
    body = body.rstrip("\n")
    width = len(layout.header)
    if not body or "_" in body or not body.isascii():
        return None
    lines = body.split("\n")
    separators = width - 1
    if any(line.count(layout.delimiter) != separators for line in lines):
        return None
    if layout.delimiter != ",":
        if "," in body and "." in body:
            return None
        body = body.replace(",", ".")
    try:
        cells = np.array(
            list(map(float, body.replace("\n", layout.delimiter).split(layout.delimiter))))
    except ValueError:
        return None
    return cells.reshape(len(lines), width)


def _careful_table(body, layout):
    """Return all cells as floats, shape (rows, columns), or name the first that is wrong."""
    lines = body.rstrip("\n").split("\n") if body.strip() else []
    if not lines:
        message = f"{layout.source}: there are no data rows below the header"
        raise TraceError(message)
    decimal_marks = set()
    return np.array([
        _careful_row(line, number, layout, decimal_marks)
        for number, line in enumerate(lines, start=layout.first_row)
    ])


def _careful_row(line, number, layout, decimal_marks):
    cells = line.split(layout.delimiter)
    if len(cells) != len(layout.header):
        what = "is empty" if not line.strip() else f"has {len(cells)} cells"
        message = (f"{layout.source}: row {number} {what}, the header has "
                   f"{len(layout.header)} columns ({shown_names(', '.join(layout.header))}); "
                   "a damaged file is not repaired")
        raise TraceError(message)
    values = []
    for name, cell in zip(layout.header, cells, strict=True):
        try:
            values.append(_cell_value(cell, layout.delimiter))
        except ValueError:
            message = (f"{layout.source}: row {number}, column {name}: {shown(cell.strip())} is "
                       "not a number; a damaged file is not repaired")
            raise TraceError(message) from None
        decimal_marks.update(mark for mark in ".," if mark in cell)
        if len(decimal_marks) > 1:
            message = (f"{layout.source}: row {number}, column {name}: {shown(cell.strip())} "
                       "changes between decimal points and decimal commas within the file")
            raise TraceError(message)
    return values


def _time(table, layout):
    """Return the sample times [s], which must increase from row to row."""
    index, unit = _time_column(layout)
    name = layout.header[index]
    time = table[:, index]
    wrong = np.flatnonzero(~np.isfinite(time))
    if wrong.size:
        message = (f"{layout.source}: row {layout.first_row + wrong[0]}, column {name}: "
                   "a sample without a time; a damaged file is not repaired")
        raise TraceError(message)
    wrong = np.flatnonzero(np.diff(time) <= 0)
    if wrong.size:
        before, here = time[wrong[0]], time[wrong[0] + 1]
        what = "stands still at" if here == before else f"runs backwards from {before:.12g} to"
        message = (f"{layout.source}: row {layout.first_row + wrong[0] + 1}, column {name}: "
                   f"time {what} {here:.12g}; a damaged file is not repaired")
        raise TraceError(message)
    if time.size < FEWEST_SAMPLES:
        message = (f"{layout.source}: {time.size} samples, at least {FEWEST_SAMPLES} are needed")
        raise TraceError(message)
    return np.ascontiguousarray(to_si(time, unit))


def _columns(table, layout):
    """Return voltages [V] and pressures [Pa] by column name."""
    columns = {}
    for index, name in enumerate(layout.header):
        unit = column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS)
        if unit is not None:
            values = np.ascontiguousarray(to_si(table[:, index], unit))
            values[~np.isfinite(values)] = np.nan
            columns[name] = values
    return columns


def check_columns(bench_columns, trace):
    """Refuse a trace that lacks a column of the bench, or has next to nothing in one.

    Parameters
    ----------
    bench_columns : sequence of tuple of str
        Pairs of key path and column name, as ``consistency.columns_of`` returns them.
    trace : Trace
        The trace.

    Raises
    ------
    TraceError
        If a column is missing or has fewer than 20 finite samples.
    """
    for path, column in bench_columns:
        if column not in trace.columns:
            message = (f"{trace.source}: there is no column {column}, which the chamber file names "
                       f"({path}); the columns are {shown_names(', '.join(trace.header))}"
                       f"{_meant(column, trace.columns)}")
            raise TraceError(message)
        usable = np.count_nonzero(np.isfinite(trace.columns[column]))
        if usable < FEWEST_SAMPLES:
            message = (f"{trace.source}: column {column}: {usable} usable samples, at least "
                       f"{FEWEST_SAMPLES} are needed")
            raise TraceError(message)


def _meant(column, known):
    text = suggestion(column, known)
    return f"; {text}" if text.startswith("did you mean") else ""
