"""Writing traces and results: whole files, put in place in one step."""

import json
import os
from pathlib import Path

import numpy as np

from scatterfit.errors import InvalidInputError
from scatterfit.units import PRESSURE_UNITS, VOLTAGE_UNITS, column_unit, from_si


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
    table = [from_si(time_s, "ms").tolist()]
    for name, values in columns.items():
        unit = column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS)
        if unit is None or set(name) & set(',;\t\n"') or np.shape(values) != time_s.shape:
            message = f"column {name}: needs a plain name with a unit and {time_s.size} readings"
            raise InvalidInputError(message)
        readings = np.asarray(values, dtype=float)
        table.append(from_si(np.where(np.isfinite(readings), readings, np.nan), unit).tolist())
    row = ",".join(["%.12g", *["%.9g"] * len(columns)])
    lines = [f"# {' '.join(comment.split())}" for comment in comments]
    lines.append(",".join(["time_ms", *columns]))
    lines.extend((row % cells).replace("nan", "") for cells in zip(*table, strict=True))
    write_text(path, "\n".join(lines) + "\n")


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
    write_text(path, text + "\n")


def _plain(value):
    """Return what JSON can hold of a NumPy value."""
    if isinstance(value, np.generic | np.ndarray):
        return value.tolist()
    message = f"{type(value).__name__} cannot be written as JSON"
    raise TypeError(message)


def write_text(path, text):
    """Write a text file beside its place and move it there.

    Parameters
    ----------
    path : str or Path
        File to write.
    text : str
        What to write, as UTF-8.
    """
    path = Path(path)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_text(text, encoding="utf-8", newline="\n")
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
