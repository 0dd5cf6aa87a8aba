"""A table of many pulses on disk: CSV or TSV with the contract's columns."""

import csv
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.errors import InvalidInputError
from scatterfit.files_text import delimiter_of
from scatterfit.nucleation.table import table_from_columns

SQLITE_MAGIC = b"SQLite format 3\x00"
"""First bytes of a ledger."""


def is_ledger(path):
    """Return whether a file is a ledger of pulses rather than a text table.

    Parameters
    ----------
    path : str or Path
        A file.

    Returns
    -------
    ledger : bool
        Whether it starts as an SQLite file does.

    Raises
    ------
    OSError
        If it cannot be read.
    """
    with Path(path).open("rb") as file:
        return file.read(len(SQLITE_MAGIC)) == SQLITE_MAGIC


def read_table(path):
    """Read a table of pulses.

    Parameters
    ----------
    path : str or Path
        CSV or TSV; with ``;`` between cells, numbers may have decimal commas. Lines that start
        with ``#`` and empty lines are passed over.

    Returns
    -------
    table : Table
        The pulses.

    Raises
    ------
    InvalidInputError
        If it is not such a table; the message is one line with row and column.
    """
    try:
        lines = Path(path).read_bytes().decode("utf-8-sig").splitlines()
    except UnicodeDecodeError as error:
        raise _refused(path, f"not UTF-8 text (byte {error.start + 1})") from error
    except OSError as error:
        raise _refused(path, f"cannot be read: {error.strerror or error}") from error
    header, cells, rows = _cells(path, lines)
    if rows and "excluded" in header:
        # What a person has excluded in a ledger stays excluded in its export.
        at = header.index("excluded")
        kept = [i for i, row in enumerate(cells) if str(row[at] or "0").strip() in ("0", "0.0", "")]
        cells, rows = [cells[i] for i in kept], [rows[i] for i in kept]
    if not rows:
        raise _refused(path, "no pulses; needed are a row of column names and a row a pulse")
    columns = dict(zip(header, zip(*cells, strict=True), strict=True))
    return table_from_columns(columns, str(path), rows)


def _cells(path, lines):
    """Return column names, rows of cells and the number of each row."""
    first = next((line for line in lines if line.strip() and not line.startswith("#")), "")
    delimiter = delimiter_of(first)
    header, cells, rows = None, [], []
    try:
        for number, row in enumerate(csv.reader(lines, delimiter=delimiter), start=1):
            if not any(row) or row[0].startswith("#"):
                continue
            if header is None:
                header = _header(path, [cell.strip() for cell in row])
            elif len(row) != len(header):
                raise _refused(path, f"row {number}: {len(row)} cells, the header has "
                                     f"{len(header)}")
            else:
                cells.append(_decimal(row) if delimiter == ";" else row)
                rows.append(number)
    except csv.Error as error:
        raise _refused(path, f"not a table: {error}") from error
    return header, cells, rows


def _header(path, names):
    double = next((name for name in names if names.count(name) > 1), None)
    if double is not None:
        raise _refused(path, f"column {double or '(without a name)'} is there twice")
    return names


def _decimal(row):
    """Return cells with decimal points where a comma can only be a decimal comma."""
    return [cell.replace(",", ".") if _is_decimal(cell) else cell for cell in row]


def _is_decimal(cell):
    whole, comma, part = cell.strip().lower().partition(",")
    digits = whole.lstrip("+-") + part.replace("e", "", 1).replace("-", "").replace("+", "")
    return bool(comma) and digits.isdigit()


def _refused(path, text):
    return InvalidInputError(printable(f"{path}: {text}"))
