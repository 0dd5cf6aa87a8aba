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
from scatterfit.apparatus.values import fail, nearest, printable, shown
from scatterfit.errors import TraceError
from scatterfit.files_text import delimiter_of, parse_scalar
from scatterfit.units import PRESSURE_UNITS, TIME_UNITS, VOLTAGE_UNITS, column_unit, to_si

BINARY_SUFFIXES = {".h5": "HDF5", ".hdf5": "HDF5", ".nc": "netCDF"}
"""Ending of a file that is not text to the name of its format."""

TRACE_SUFFIXES = (".csv", ".tsv", ".txt", ".dat", *BINARY_SUFFIXES)
"""Endings of the files that are taken for traces in a folder."""

FEWEST_SAMPLES = 20
"""Usable samples that a trace must have."""

_TIME_COLUMNS = tuple(f"time_{unit}" for unit in TIME_UNITS)
_BYTE_ORDER_MARK = b"\xef\xbb\xbf"
_NAMES_LENGTH = 200
_NOT_REPAIRED = "; a damaged file is not repaired"


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
        File with comma, tab or semicolon between its columns, or HDF5 or netCDF-4 by its ending.

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
    if Path(path).suffix.lower() in BINARY_SUFFIXES:
        from scatterfit.files_formats import read_binary  # noqa: PLC0415 - imports this module

        return Trace(source=source, **read_binary(path))
    raw = _read_bytes(path, source)
    preamble, header_line, body = _split(_decode(raw, source), source)
    layout = _layout(header_line, len(preamble), preamble, source)
    overrides, comments = _overrides(preamble, layout)
    if not body.strip():
        raise _refused(source, "there are no data rows below the header")
    table = _fast_table(body, layout)
    if table is None:
        table = _careful_table(body, layout)
    return Trace(
        source=source,
        time=_time(table, layout),
        columns=_columns(table, layout),
        header=layout.header,
        overrides=overrides,
        sha256=hashlib.sha256(raw).hexdigest(),
        comments=comments,
    )


def _refused(source, text):
    return TraceError(printable(f"{source}: {text}"))


def _read_bytes(path, source):
    try:
        return Path(path).read_bytes()
    except OSError as error:
        raise _refused(source, f"cannot be read: {error.strerror or error}") from error


def _decode(raw, source):
    """Return the file's text with single newlines, or refuse what is not text."""
    raw = raw.removeprefix(_BYTE_ORDER_MARK)
    if not raw.strip():
        raise _refused(source, "the file is empty; a header of column names and rows are needed")
    try:
        if b"\0" in raw:
            raise _refused(source, "not text (it holds zero bytes); save it as UTF-8 text")
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        row = raw.count(b"\n", 0, error.start) + 1
        raise _refused(source, f"row {row}: not UTF-8 text (byte 0x{raw[error.start]:02x}); save "
                               "it as UTF-8 text") from error
    return text.replace("\r\n", "\n").replace("\r", "\n") if "\r" in text else text


def _split(text, source):
    """Return the lines before the header, the header, and everything below it."""
    preamble, position = [], 0
    while position < len(text):
        end = text.find("\n", position)
        end = len(text) if end < 0 else end
        line = text[position:end]
        position = end + 1
        if line.strip() and not line.startswith("#"):
            return preamble, line, text[position:].rstrip(" \n")
        preamble.append(line)
    raise _refused(source, "there is no header of column names, and there are no rows")


def _layout(line, lines_before, preamble, source):
    """Read the header: what separates the columns, and what they are called."""
    delimiter = delimiter_of(line)
    header = tuple(_unquoted(name) for name in line.split(delimiter))
    row = lines_before + 1
    if all(_is_number(name, delimiter) for name in header):
        hint = "; the # line before it is a comment" if any(
            name in before for before in preamble for name in _TIME_COLUMNS) else ""
        raise _refused(source, f"row {row}: numbers where the header of column names should "
                               f"be{hint}")
    for position, name in enumerate(header, start=1):
        if not name:
            raise _refused(source, f"row {row}: column {position} of the header has no name")
        if header.count(name) > 1:
            raise _refused(source, f"row {row}: column {name} is there twice")
    layout = _Layout(source, delimiter, header, row + 1)
    _time_column(layout)
    return layout


def _unquoted(cell):
    cell = cell.strip()
    quoted = len(cell) >= 2 and cell[0] == cell[-1] == '"'
    return cell[1:-1].strip() if quoted else cell


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
    if "_" in cell or not cell.isascii():  # float takes 1_000 and other alphabets' digits
        raise ValueError(cell)
    return float(cell if delimiter == "," else cell.replace(",", ".", 1))


def _names(header):
    text = ", ".join(header)
    return text if len(text) <= _NAMES_LENGTH else text[: _NAMES_LENGTH - 3] + "..."


def _time_column(layout):
    """Return the index and the unit of the one time column."""
    found = [name for name in layout.header if name in _TIME_COLUMNS]
    if len(found) == 1:
        return layout.header.index(found[0]), column_unit(found[0], TIME_UNITS)
    what = f"{' and '.join(found)} both give the time" if found else "there is no time column"
    text = (f"row {layout.first_row - 1}: {what}; exactly one of {', '.join(_TIME_COLUMNS)} is "
            f"needed, the columns are {_names(layout.header)}")
    if len(layout.header) == 1:
        text += "; columns are separated by comma, tab or semicolon"
    raise _refused(layout.source, text)


def _overrides(preamble, layout):
    """Return the values that the ``#`` lines set, and the lines that set none."""
    overrides, comments = {}, []
    for row, line in enumerate(preamble, start=1):
        text = line.lstrip("#").strip()
        path, equals, written = (part.strip() for part in text.partition("="))
        if not equals or split_path(path) is None:
            comments += [text] if text else []
            continue
        where = f"{layout.source}: row {row}"
        if path in overrides:
            fail(where, path, written, "is set twice in this file")
        overrides[path] = parse_scalar(written, decimal_comma=layout.delimiter == ";")
        check_override(path, overrides[path], where)
    return overrides, tuple(comments)


def _fast_table(body, layout):
    """Return all cells as floats, shape (rows, columns), or None where a closer look is due."""
    if not body.isascii():
        return None
    if layout.delimiter != "," and "," in body:
        if "." in body:
            return None
        body = body.replace(",", ".")
    rows = _spelled_out(body, layout.delimiter).split("\n")
    try:
        table = np.loadtxt(rows, delimiter=layout.delimiter, comments=None, ndmin=2)
    except ValueError:
        return None
    # loadtxt passes over empty rows, so that their number shows them
    return table if table.shape == (len(rows), len(layout.header)) else None


def _spelled_out(body, mark):
    """Return the rows with ``nan`` in their empty cells."""
    for _ in range(2):  # twice, as neighbours share a mark
        body = body.replace(mark + mark, f"{mark}nan{mark}")
    body = body.replace(f"{mark}\n", f"{mark}nan\n").replace(f"\n{mark}", f"\nnan{mark}")
    return body + "nan" if body.endswith(mark) else body


def _careful_table(body, layout):
    """Return all cells as floats, shape (rows, columns), or name the first that is wrong."""
    marks = set()
    return np.array([
        _careful_row(line, row, layout, marks)
        for row, line in enumerate(body.split("\n"), start=layout.first_row)
    ])


def _careful_row(line, row, layout, marks):
    """Return the cells of one row; ``marks`` collects the decimal marks that the file uses."""
    cells = line.split(layout.delimiter)
    if len(cells) != len(layout.header):
        what = f"{len(cells)} cell{'s' if len(cells) > 1 else ''}" if line.strip() else "no cells"
        raise _refused(layout.source, f"row {row}: {what}, the header has {len(layout.header)} "
                                      f"columns ({_names(layout.header)}){_NOT_REPAIRED}")
    values = []
    for name, cell in zip(layout.header, cells, strict=True):
        try:
            values.append(_cell_value(cell, layout.delimiter))
        except ValueError:
            raise _refused(layout.source, f"row {row}, column {name}: {shown(cell.strip())} is "
                                          f"not a number{_NOT_REPAIRED}") from None
        marks.update(mark for mark in ".," if mark in cell)
        if len(marks) > 1:
            raise _refused(layout.source, f"row {row}, column {name}: {shown(cell.strip())} "
                           "mixes decimal points and decimal commas in one file" + _NOT_REPAIRED)
    return values


def _time(table, layout):
    """Return the sample times [s], which must increase from row to row."""
    index, unit = _time_column(layout)
    name, time = layout.header[index], table[:, index]
    wrong = np.flatnonzero(~np.isfinite(time))
    if wrong.size:
        raise _refused(layout.source, f"row {layout.first_row + wrong[0]}, column {name}: a "
                                      f"sample without a time{_NOT_REPAIRED}")
    wrong = np.flatnonzero(np.diff(time) <= 0)
    if wrong.size:
        before, here = time[wrong[0]], time[wrong[0] + 1]
        what = "stands still at" if here == before else f"runs backwards from {before:.12g} to"
        raise _refused(layout.source, f"row {layout.first_row + wrong[0] + 1}, column {name}: "
                                      f"time {what} {here:.12g}{_NOT_REPAIRED}")
    if time.size < FEWEST_SAMPLES:
        raise _refused(layout.source, f"{time.size} samples, at least {FEWEST_SAMPLES} are needed")
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


def check_columns(named, trace):
    """Refuse a trace that lacks a column of the bench, or has next to nothing in one.

    Parameters
    ----------
    named : sequence of tuple of str
        Pairs of key path and column name, as ``consistency.columns_of`` returns them.
    trace : Trace
        The trace.

    Raises
    ------
    TraceError
        If a column is missing or has fewer than 20 finite samples.
    """
    for path, column in named:
        if column not in trace.columns:
            match = nearest(column, trace.columns)
            meant = f"; did you mean {match}?" if match else ""
            raise _refused(trace.source, f"there is no column {column}, which the chamber file "
                           f"names ({path}); the columns are {_names(trace.header)}{meant}")
        usable = np.count_nonzero(np.isfinite(trace.columns[column]))
        if usable < FEWEST_SAMPLES:
            raise _refused(trace.source, f"column {column}: {usable} usable samples, at least "
                                         f"{FEWEST_SAMPLES} are needed")
