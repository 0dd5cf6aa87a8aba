"""A ledger as the table that rates and activation are taken from."""

import tomllib
from contextlib import closing

from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.nucleation.table import table_from_columns
from scatterfit.overnight.ledger_file import connect, explained
from scatterfit.overnight.results import open_results

_FROM_CHAMBER = ("chamber.temperature_K", "chamber.pressure_kPa")


def pulse_table(path):
    """Return the pulses of a ledger as a table, and the bench they were made with.

    Parameters
    ----------
    path : str or Path
        The ledger; pulses that were excluded by hand do not come.

    Returns
    -------
    table : Table
        One row a pulse, with the values of the chamber file where no override replaced them.
    bench : Apparatus or None
        That of the first pulse; ``None`` where the ledger has none.
    """
    results = open_results(path)
    rows = list(results.rows())
    columns = {name: [row[name] for row in rows] for name in results.columns()}
    chambers = _chambers(path)
    stated = [chambers.get(row["chamber_sha256"], {}) for row in rows]
    for name in _FROM_CHAMBER:
        table, _, key = name.partition(".")
        written = columns.get(name, [None] * len(rows))
        filled = [mapping.get(table, {}).get(key) if cell is None else cell
                  for cell, mapping in zip(written, stated, strict=True)]
        if any(cell is not None for cell in filled):
            columns[name] = filled
    first = next(filter(None, stated), None)
    bench = None if first is None else apparatus_from_mapping(first, f"{path}: chamber file")
    return table_from_columns(columns, str(path)), bench


def _chambers(path):
    """Return hash to tables of every chamber file that the ledger keeps."""
    with explained(path), closing(connect(path, write=False)) as connection:
        texts = {row["sha256"]: row["text"]
                 for row in connection.execute("SELECT sha256, text FROM chambers")}
    return {sha256: _parsed(text) for sha256, text in texts.items()}


def _parsed(text):
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return {}
