"""Tables of pulses for other programs: CSV, Parquet and netCDF, each with its units."""

import csv
import json
import os
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from scatterfit.apparatus.keys import KEYS_OF
from scatterfit.apparatus.overrides import split_path
from scatterfit.apparatus.values import printable
from scatterfit.errors import ScatterfitError

EXTRA = "pip install 'scatterfit[formats]'"
"""What installs the libraries for the binary formats."""

_UDUNITS = {
    "": "1", "deg": "degree", "V_m": "V m", "per_cm3": "cm-3", "kg_m3": "kg m-3", "N_m": "N m-1",
    "mm2_s": "mm2 s-1", "kJ_mol": "kJ mol-1", "J_mol_K": "J mol-1 K-1", "mW_m_K": "mW m-1 K-1",
    "uPa_s": "uPa s", "g_mol": "g mol-1", "Torr": "torr",
}
_PARTS = ("_sigma", "_sigma_statistical", "_sigma_systematic")


class ExportError(ScatterfitError):
    """A table that cannot be written."""


def write_table(path, table, meanings, about=None):
    """Write a table of pulses; the file's ending chooses the format.

    Parameters
    ----------
    path : str or Path
        ``.csv``, ``.parquet`` or ``.nc``.
    table : mapping of str to list
        Column name to cells: numbers, texts or ``None``; all of one length.
    meanings : mapping of str to tuple
        Column name to its unit, in the spelling of UDUNITS, and its meaning.
    about : mapping of str to str, optional
        Facts for the file's own attributes.

    Raises
    ------
    ExportError
        If the ending is not known, a library is missing, or the file cannot be written.
    """
    path = Path(path)
    writer = _WRITERS.get(path.suffix.lower())
    if writer is None:
        message = (f"{path}: the ending must be {', '.join(_WRITERS)}; {path.suffix or 'none'} is "
                   "not known")
        raise ExportError(printable(message))
    columns = {name: _Column(name, cells, *meanings.get(name, _meaning(name)))
               for name, cells in table.items()}
    try:
        with _in_place(path) as part:
            writer(part, columns, about or {})
    except OSError as error:
        message = f"{path}: cannot be written: {error.strerror or error}"
        raise ExportError(printable(message)) from error


def _meaning(path):
    """Return unit and meaning of an override's column, whose name is its key path."""
    parts = split_path(path)
    if parts is None:
        return "", path
    table, column, name = parts
    if column and table == "gas":
        return "1", f"mole fraction of {column} in the dry gas, set for this pulse"
    key = KEYS_OF[table].get(name) or KEYS_OF[table][name.removesuffix("_sigma")]
    unit = _UDUNITS.get(key.unit, key.unit) if key.takes_sigma else ""
    return unit, f"{path}, set for this pulse"


@contextmanager
def _in_place(path):
    """Give the name of a file beside the wanted one, which takes its place when complete."""
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        yield part
        part.replace(path)
    finally:
        with suppress(OSError):
            part.unlink(missing_ok=True)


class _Column:
    """One column with its unit; of numbers where all its cells are."""

    def __init__(self, name, cells, unit, meaning):
        self.name, self.unit, self.meaning = name, unit, meaning
        self.cells = cells
        known = [cell for cell in cells if cell is not None]
        numeric = all(isinstance(cell, int | float) and not isinstance(cell, bool)
                      for cell in known)
        self.is_flag = numeric and bool(known) and all(isinstance(cell, int) for cell in known)
        self.is_number = numeric and (bool(known) or bool(unit)) and not self.is_flag

    def numbers(self):
        return np.array([np.nan if cell is None else cell for cell in self.cells], dtype=float)

    def texts(self):
        return [_text(cell) for cell in self.cells]


def _text(cell):
    if cell is None or isinstance(cell, str):
        return cell
    return repr(cell) if isinstance(cell, float) else json.dumps(cell)


def _write_csv(path, columns, _about):
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        cells = [column.cells for column in columns.values()]
        for row in zip(*cells, strict=True):
            writer.writerow(["" if cell is None else _text(cell) for cell in row])


def _write_parquet(path, columns, about):
    try:
        import pyarrow as pa  # noqa: PLC0415 - an extra, large
        from pyarrow import parquet  # noqa: PLC0415
    except ImportError as error:
        message = f"Parquet needs pyarrow: {EXTRA}"
        raise ExportError(message) from error
    arrays, fields = [], []
    for column in columns.values():
        if column.is_number:
            kind, cells = pa.float64(), column.cells
        elif column.is_flag:
            kind, cells = pa.int64(), column.cells
        else:
            kind, cells = pa.string(), column.texts()
        arrays.append(pa.array(cells, kind))
        notes = {"unit": column.unit, "meaning": column.meaning}
        fields.append(pa.field(column.name, kind, metadata=notes))
    schema = pa.schema(fields, metadata={name: str(value) for name, value in about.items()})
    parquet.write_table(pa.Table.from_arrays(arrays, schema=schema), path)


def _write_netcdf(path, columns, about):
    try:
        import h5netcdf  # noqa: PLC0415 - an extra
        import h5py  # noqa: PLC0415
    except ImportError as error:
        message = f"netCDF needs h5netcdf and h5py: {EXTRA}"
        raise ExportError(message) from error
    count = len(next(iter(columns.values())).cells) if columns else 0
    with h5netcdf.File(path, "w") as file:
        file.attrs.update(_global_attributes(about))
        file.dimensions = {"pulse": count}
        names = _plain_names(columns)
        for column in columns.values():
            if column.is_number:
                variable = file.create_variable(names[column.name], ("pulse",), "f8",
                                                data=column.numbers(), fillvalue=np.nan)
            elif column.is_flag:
                variable = file.create_variable(names[column.name], ("pulse",), "i1")
                variable[:] = np.array([cell or 0 for cell in column.cells], dtype="i1")
            else:
                variable = file.create_variable(names[column.name], ("pulse",),
                                                h5py.string_dtype())
                variable[:] = np.array([text or "" for text in column.texts()], dtype=object)
            variable.attrs.update(_attributes(column, names))
        _write_time(file, columns)


def _plain_names(columns):
    """Return what each column is called.

    ``seed.diameter_nm``, set for a pulse, is another column than ``seed_diameter_nm``.
    """
    names = {}
    for name in columns:
        plain = _plain_name(name)
        names[name] = f"override_{plain}" if plain in names.values() else plain
    return names


def _plain_name(name):
    """Return a name of letters, digits and underscores, as the CF conventions ask for."""
    return "".join(mark if mark.isascii() and mark.isalnum() else "_" for mark in name)


def _global_attributes(about):
    now = datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
    return {
        "Conventions": "CF-1.11",
        "title": "Droplet growth and nucleation in an expansion chamber, one entry a pulse",
        "source": f"scatterfit {about.get('version', '')}".strip(),
        "history": f"{now}: scatterfit export",
        **{f"scatterfit_{name}": str(value) for name, value in about.items()},
    }


def _attributes(column, names):
    """Return the attributes of a variable after the CF conventions."""
    attributes = {"long_name": column.meaning}
    if column.is_number:
        attributes["units"] = column.unit or "1"
        attributes["coordinates"] = "time trace"
        beside = [names[column.name + part] for part in _PARTS if column.name + part in names]
        if beside:
            attributes["ancillary_variables"] = " ".join(beside)
    if column.name == "excluded":
        attributes["flag_values"] = np.array([0, 1], dtype="i1")
        attributes["flag_meanings"] = "kept excluded"
    return attributes


def _write_time(file, columns):
    """Write when each trace was recorded, as the coordinate that CF knows as time."""
    recorded = columns.get("recorded_utc")
    if recorded is None:
        return
    seconds = [np.nan if cell is None else datetime.fromisoformat(cell).timestamp()
               for cell in recorded.cells]
    variable = file.create_variable("time", ("pulse",), "f8", data=np.array(seconds, dtype=float),
                                    fillvalue=np.nan)
    variable.attrs.update({
        "standard_name": "time", "long_name": recorded.meaning, "calendar": "standard",
        "units": "seconds since 1970-01-01 00:00:00", "units_metadata": "leap_seconds: none",
    })


_WRITERS = {".csv": _write_csv, ".parquet": _write_parquet, ".nc": _write_netcdf}
