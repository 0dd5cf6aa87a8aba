"""``pulses.csv``: one file in a folder of traces that holds values of many pulses."""

import csv
from functools import lru_cache
from pathlib import Path

from scatterfit.apparatus.overrides import known_paths, paths_like, split_path
from scatterfit.apparatus.values import nearest, printable, suggestion
from scatterfit.errors import ChamberFileError
from scatterfit.files_text import delimiter_of, parse_scalar

PULSES_NAME = "pulses.csv"
"""Name of the file."""


def pulse_rows(trace_path, folder=None):
    """Return what the ``pulses.csv`` around a trace say about it.

    Parameters
    ----------
    trace_path : str or Path
        The trace; its row is found by its path from where ``pulses.csv`` is, with ``/`` between
        folders, with or without its ending.
    folder : str or Path, optional
        Folder that holds the trace's own folder: its ``pulses.csv`` counts too.

    Returns
    -------
    rows : dict
        Path of each ``pulses.csv`` that has a row for the trace, the nearest last, to key path
        and value in the key's unit.

    Raises
    ------
    ChamberFileError
        If a ``pulses.csv`` cannot be understood; the message is one line with file and row.
    """
    path = Path(trace_path)
    places = [path.parent]
    if folder is not None and Path(folder) in path.parent.parents:
        places.insert(0, Path(folder))
    rows = {}
    for place in places:
        source = place / PULSES_NAME
        try:
            state = source.stat()
        except OSError:
            continue
        table = _table(str(source), state.st_mtime_ns, state.st_size)
        name = path.relative_to(place)
        row = table.get(name.as_posix()) or table.get(name.with_suffix("").as_posix())
        if row:
            rows[str(source)] = dict(row)
    return rows


@lru_cache(maxsize=8)
def _table(source, _modified, _size):
    """Return trace name to its overrides; read again only when the file has changed."""
    try:
        lines = Path(source).read_bytes().decode("utf-8-sig").splitlines()
    except OSError as error:
        raise _refused(source, f"cannot be read: {error.strerror or error}") from error
    except UnicodeDecodeError as error:
        raise _refused(source, "not UTF-8 text; save it as UTF-8 text") from error
    first = next((line for line in lines if line.strip() and not line.startswith("#")), "")
    delimiter = delimiter_of(first)
    header, table = None, {}
    for number, row in enumerate(csv.reader(lines, delimiter=delimiter), start=1):
        cells = [cell.strip() for cell in row]
        where = f"{source}: row {number}"
        if not any(cells) or cells[0].startswith("#"):
            continue
        if header is None:
            header = _header(cells, where)
        else:
            _add_row(table, header, cells, where, delimiter == ";")
    return table


def _refused(where, text):
    return ChamberFileError(printable(f"{where}: {text}"))


def _header(names, where):
    """Return the columns after the first: key paths, and None for remarks."""
    if names[0] != "trace":
        raise _refused(where, f'the first column must be "trace", it is "{names[0]}"')
    header = []
    for name in names[1:]:
        known = split_path(name) is not None
        if not known:
            _check_remark(name, where)
        if known and name in header:
            raise _refused(where, f"column {name} is there twice")
        header.append(name if known else None)
    return tuple(header)


def _check_remark(name, where):
    """Refuse a column that looks like a mistyped key path; other names are remarks."""
    by_key = {path.rpartition(".")[2]: path for path in reversed(known_paths())}
    if "." in name:
        raise _refused(where, f"column {name}: unknown key path; "
                              f"{suggestion(name, paths_like(name))}")
    match = nearest(name, by_key)
    if match:
        raise _refused(where, f"column {name}: not a key path; did you mean {by_key[match]}?")


def _add_row(table, header, cells, where, decimal_comma):
    name = cells[0]
    if len(cells) != len(header) + 1:
        raise _refused(where, f"{len(cells)} cells, the header has {len(header) + 1}")
    if name in table:
        raise _refused(where, f"trace {name} is there twice")
    table[name] = {
        path: parse_scalar(cell, decimal_comma=decimal_comma)
        for path, cell in zip(header, cells[1:], strict=True)
        if path is not None and cell
    }
