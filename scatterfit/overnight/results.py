"""Reading a ledger: records, rows and tables; safe while another process writes it."""

import json
from contextlib import closing
from pathlib import Path

from scatterfit.apparatus.values import nearest, printable
from scatterfit.overnight.columns import KEPT_BY_HAND, NUMBERS, RECORD, TEXTS
from scatterfit.overnight.ledger_file import LedgerError, connect, explained
from scatterfit.overnight.restore import pulse_from

_FLAT = (*TEXTS, *NUMBERS, *KEPT_BY_HAND, *RECORD)


def open_results(path, *, excluded=False):
    """Open a ledger to read it.

    Parameters
    ----------
    path : str or Path
        The ledger, a file made by ``scatterfit batch`` or ``scatterfit watch``.
    excluded : bool
        Whether pulses that were excluded by hand come too.

    Returns
    -------
    results : Results
        A sequence of pulses, read from the file as they are asked for.

    Raises
    ------
    LedgerError
        If there is no such file, or it is no ledger.
    """
    return Results(path, excluded=excluded)


class Results:
    """The pulses of a ledger, in the order of their names.

    Iterating gives a ``MeasuredPulse`` for each, in SI, with its channels as thinned for the
    ledger. Every call reads the file anew, so that what is written meanwhile is seen.

    Parameters
    ----------
    path : str or Path
        The ledger.
    excluded : bool
        Whether pulses that were excluded by hand come too.
    """

    def __init__(self, path, *, excluded=False):
        self.path = Path(path)
        self.excluded = excluded
        self._connected().close()

    def _connected(self):
        return connect(self.path, write=False)

    def _where(self):
        return "" if self.excluded else "WHERE NOT excluded"

    def _query(self, statement, values=()):
        with explained(self.path), closing(self._connected()) as connection:
            yield from connection.execute(statement, values)

    def __len__(self):
        """Return how many pulses there are."""
        return next(self._query(f"SELECT count(*) FROM night {self._where()}"))[0]

    def __iter__(self):
        """Yield each pulse as a record."""
        for row in self._query("SELECT result, thinned FROM night JOIN details "
                               f"ON details.pulse = night.id {self._where()} ORDER BY trace"):
            yield pulse_from(json.loads(row["result"]), json.loads(row["thinned"]))

    def pulse(self, trace):
        """Return one pulse, also an excluded one.

        Parameters
        ----------
        trace : str
            Its name in the ledger; the end of the name will do where only one pulse has it.

        Returns
        -------
        pulse : MeasuredPulse
            The record.

        Raises
        ------
        LedgerError
            If no pulse or several have that name; the message tells similar ones.
        """
        row = next(self._query(
            "SELECT result, thinned FROM pulses JOIN details ON details.pulse = pulses.id "
            "WHERE trace = ?", (self.name_of(trace),)))
        return pulse_from(json.loads(row["result"]), json.loads(row["thinned"]))

    def name_of(self, trace):
        """Return the full name of a pulse that is named in full or by the end of its name."""
        names = [row["trace"] for row in self._query("SELECT trace FROM pulses ORDER BY trace")]
        wanted = str(trace).replace("\\", "/")
        if wanted in names:
            return wanted
        stems = [name for name in names if wanted in _short_names(name)]
        if len(stems) == 1:
            return stems[0]
        if stems:
            remedy = f"several pulses have that name: {', '.join(stems[:5])}"
        else:
            near = nearest(wanted, names)
            remedy = "there is no such pulse" + (f"; did you mean {near}?" if near else "")
        message = printable(f"{self.path}: {trace}: {remedy}")
        raise LedgerError(message)

    def columns(self):
        """Return the names of the table's columns: the flat ones and one for each override."""
        return [*_FLAT, *self._overridden()]

    def _overridden(self):
        names = set()
        for row in self._query("SELECT DISTINCT overrides FROM pulses"):
            names |= json.loads(row["overrides"]).keys()
        return sorted(names)

    def rows(self):
        """Yield one mapping a pulse: column name to number, text or ``None``.

        Units are those that the columns' names tell, not SI.
        """
        overridden = self._overridden()
        for row in self._query(f"SELECT * FROM night {self._where()} ORDER BY trace"):
            overrides, there = json.loads(row["overrides"]), set(row.keys())
            yield {name: row[name] if name in there else None for name in _FLAT} | {
                name: _cell(overrides.get(name)) for name in overridden}

    def table(self):
        """Return all rows as a table.

        Returns
        -------
        table : pandas.DataFrame or dict of list
            Column name to values; a plain dict where pandas is not installed.
        """
        columns = {name: [] for name in self.columns()}
        for row in self.rows():
            for name, values in columns.items():
                values.append(row.get(name))
        try:
            import pandas as pd  # noqa: PLC0415 - not everyone has it
        except ImportError:
            return columns
        return pd.DataFrame(columns)

    def sheets(self):
        """Yield each pulse, also excluded ones, in the order in which they were recorded.

        Yields
        ------
        row : sqlite3.Row
            All columns of the view ``night``, ``said`` (the reasons as JSON) and ``thinned`` (trace
            and fit with fewer points as JSON).
        """
        yield from self._query(
            "SELECT night.*, json_extract(details.result, '$.reasons') AS said, details.thinned "
            "FROM night JOIN details ON details.pulse = night.id ORDER BY mtime_ns, trace")

    def provenance(self):
        """Return what the newest result that has any says about versions and sources."""
        row = next(self._query(
            "SELECT json_extract(result, '$.provenance') AS found FROM pulses JOIN details "
            "ON details.pulse = pulses.id WHERE verdict != 'failed' "
            "ORDER BY fitted_utc DESC LIMIT 1"), None)
        return {} if row is None else json.loads(row["found"])

    def chambers(self):
        """Return the chamber files that pulses were fitted with, as a list of mappings."""
        return [dict(row) for row in self._query(
            "SELECT name, sha256, text FROM chambers WHERE sha256 IN "
            "(SELECT chamber_sha256 FROM pulses)")]

    def exclusions(self):
        """Return every exclusion and its withdrawal, oldest first, as a list of mappings."""
        return [dict(row) for row in self._query(
            "SELECT trace, excluded, author, note, at_utc FROM exclusions ORDER BY id")]

    def about(self):
        """Return what the ledger says about itself: folder, chamber file, version."""
        return {row["name"]: row["value"] for row in self._query("SELECT * FROM about")}


def _short_names(name):
    """Return the ends of a name by which a person may call it."""
    parts = name.split("/")
    ends = {"/".join(parts[i:]) for i in range(len(parts))}
    return ends | {end.rpartition(".")[0] for end in ends}


def _cell(value):
    """Return an override as one cell: lists and tables as JSON."""
    return json.dumps(value) if isinstance(value, list | dict) else value
