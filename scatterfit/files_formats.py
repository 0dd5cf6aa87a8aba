"""Traces in HDF5 and netCDF-4: one data set a column, overrides as attributes of the file.

A netCDF-4 file is an HDF5 file, so one library reads both. What a text trace is refused for, such
a file is refused for too: nothing is repaired.
"""

import hashlib
import math
from pathlib import Path

import numpy as np

from scatterfit.apparatus.overrides import check_override, split_path
from scatterfit.apparatus.values import printable
from scatterfit.errors import TraceError
from scatterfit.files_trace import BINARY_SUFFIXES, FEWEST_SAMPLES
from scatterfit.units import PRESSURE_UNITS, TIME_UNITS, VOLTAGE_UNITS, column_unit, to_si

EXTRA = "pip install 'scatterfit[formats]'"
"""What installs the library."""

_TIME_COLUMNS = tuple(f"time_{unit}" for unit in TIME_UNITS)
_PACKING = ("_FillValue", "missing_value", "scale_factor", "add_offset", "units")
_CLASSIC = b"CDF"
_NOT_REPAIRED = "; a damaged file is not repaired"


def read_binary(path):
    """Read the columns of an HDF5 or netCDF-4 trace.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    parts : dict
        ``time``, shape (n,) [s]; ``columns``, name to array of shape (n,) [V or Pa];
        ``header``, ``overrides``, ``comments`` and ``sha256``: fields of a `Trace`.

    Raises
    ------
    TraceError
        If the file cannot be read, or its columns do not make a trace; one line that says
        which data set, and which sample (from 1).
    ChamberFileError
        If an attribute sets a value that no bench could have.
    """
    source = str(path)
    raw = _bytes_of(path, source)
    try:
        import h5py  # noqa: PLC0415 - an extra, and slow to load
    except ImportError as error:
        kind = BINARY_SUFFIXES.get(Path(path).suffix.lower(), "HDF5")
        raise _refused(source, f"{kind} traces need h5py: {EXTRA}") from error
    try:
        with h5py.File(path, "r") as file:
            sets, others = _datasets(file, h5py)
            attributes = {name: _plain(file.attrs[name]) for name in file.attrs}
    except TraceError as error:
        raise _refused(source, str(error)) from None
    except (OSError, RuntimeError, KeyError, ValueError, TypeError, OverflowError,
            MemoryError) as error:  # what the library raises for a damaged file
        raise _refused(source, f"cannot be read as HDF5: {error}") from error
    overrides, comments = _overrides(attributes, source)
    header = (*sets, *others)
    time = _time(sets, header, source)
    return {
        "time": time, "columns": _columns(sets, time, source), "header": header,
        "overrides": overrides, "comments": comments, "sha256": hashlib.sha256(raw).hexdigest(),
    }


def _refused(source, text):
    return TraceError(printable(f"{source}: {' '.join(str(text).split())}"))


def _bytes_of(path, source):
    try:
        raw = Path(path).read_bytes()
    except OSError as error:
        raise _refused(source, f"cannot be read: {error.strerror or error}") from error
    if not raw:
        raise _refused(source, "the file is empty")
    if raw.startswith(_CLASSIC):
        raise _refused(source, "a classic netCDF file; convert it to netCDF-4, for example with "
                               "nccopy -k nc4 OLD NEW")
    return raw


def _datasets(file, h5py):
    """Return name to values of the numeric data sets at the top, and the names of the rest."""
    sets, others = {}, []
    for name in file:
        item = file.get(name)
        if not isinstance(item, h5py.Dataset) or item.dtype.kind not in "iuf" or (
            b"This is a netCDF dimension but not a netCDF variable"
            in np.bytes_(item.attrs.get("NAME", b""))
        ):
            others.append(name)
            continue
        if item.ndim != 1:
            message = (f"data set {name}: shape {item.shape}, one number a sample is needed, "
                       "shape (n,)")
            raise TraceError(message)
        packing = {key: _plain(item.attrs[key]) for key in _PACKING if key in item.attrs}
        sets[name] = _unpacked(name, np.asarray(item[:], dtype=float), packing)
    return sets, others


def _unpacked(name, values, packing):
    """Return values with gaps as NaN and packed numbers unpacked, as CF writes them."""
    stated = packing.get("units")
    unit = column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS + TIME_UNITS)
    if isinstance(stated, str) and unit and stated in _KNOWN and stated != unit:
        message = (f"data set {name}: its name says {unit} and its attribute units says {stated}; "
                   "make them agree")
        raise TraceError(message)
    for key in ("_FillValue", "missing_value"):
        if isinstance(packing.get(key), int | float):
            values[values == packing[key]] = np.nan
    scale, offset = packing.get("scale_factor", 1.0), packing.get("add_offset", 0.0)
    return values if (scale, offset) == (1.0, 0.0) else values * float(scale) + float(offset)


_KNOWN = {*VOLTAGE_UNITS, *PRESSURE_UNITS, *TIME_UNITS}


def _plain(value):
    """Return an attribute as Python's own number, text or list."""
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    if isinstance(value, np.ndarray):
        items = [_plain(item) for item in value.ravel().tolist()]
        return items[0] if len(items) == 1 else items
    return value.item() if isinstance(value, np.generic) else value


def _overrides(attributes, source):
    """Return the values that attributes set, and the others as comments."""
    overrides, comments = {}, []
    for name, value in attributes.items():
        if split_path(name) is None:
            comments.append(printable(f"{name} = {value}"))
        else:
            number = isinstance(value, int) and not isinstance(value, bool)
            overrides[name] = float(value) if number else value
            check_override(name, overrides[name], f"{source}: attribute")
    return overrides, tuple(comments)


def _time(sets, header, source):
    """Return the sample times [s], which must increase."""
    found = [name for name in _TIME_COLUMNS if name in sets]
    if len(found) != 1:
        what = f"{' and '.join(found)} both give the time" if found else "there is no time column"
        names = ", ".join(header) or "none"
        raise _refused(source, f"{what}; exactly one data set of {', '.join(_TIME_COLUMNS)} is "
                               f"needed, the data sets are {names}")
    name = found[0]
    time = sets[name]
    wrong = np.flatnonzero(~np.isfinite(time))
    if wrong.size:
        raise _refused(source, f"sample {wrong[0] + 1}, data set {name}: a sample without a "
                               f"time{_NOT_REPAIRED}")
    wrong = np.flatnonzero(np.diff(time) <= 0)
    if wrong.size:
        before, here = time[wrong[0]], time[wrong[0] + 1]
        what = "stands still at" if here == before else f"runs backwards from {before:.12g} to"
        raise _refused(source, f"sample {wrong[0] + 2}, data set {name}: time {what} "
                               f"{here:.12g}{_NOT_REPAIRED}")
    if time.size < FEWEST_SAMPLES:
        raise _refused(source, f"{time.size} samples, at least {FEWEST_SAMPLES} are needed")
    return np.ascontiguousarray(to_si(time, column_unit(name, TIME_UNITS)))


def _columns(sets, time, source):
    """Return voltages [V] and pressures [Pa] by data set."""
    columns = {}
    for name, values in sets.items():
        unit = column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS)
        if unit is None:
            continue
        if len(values) != len(time):
            raise _refused(source, f"data set {name}: {len(values)} samples, the times are "
                                   f"{len(time)}{_NOT_REPAIRED}")
        readings = np.ascontiguousarray(to_si(values, unit))
        readings[~np.isfinite(readings)] = math.nan
        columns[name] = readings
    return columns
