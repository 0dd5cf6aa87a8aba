"""Opening the ledger's file: journal, locks, and every way it can fail as one plain line."""

import sqlite3
from contextlib import contextmanager
from pathlib import Path
from urllib.parse import quote

from scatterfit.apparatus.values import printable
from scatterfit.errors import ScatterfitError
from scatterfit.overnight.schema import ADDED, APPLICATION_ID, SCHEMA, VERSION, VIEW
from scatterfit.overnight.shares import on_network_share

_BUSY_SECONDS = 60.0
_HEADER = b"SQLite format 3\0"
_EXPLAINED = (
    ("disk is full", "the disk is full; what was stored is safe: free some space, then give the "
                     "same command again"),
    ("file size limit", "the disk is full"),
    ("readonly", "cannot be written: the file or its folder is read-only; choose another place "
                 "with --out"),
    ("unable to open", "cannot be opened or made there; check that the folder exists and may be "
                       "written"),
    ("not a database", "not a ledger of scatterfit; choose another file name"),
    ("malformed", "the file is damaged; rename it and give the same command again, or rescue it "
                  "with: sqlite3 FILE .recover"),
    ("locked", f"another program has kept it locked for {_BUSY_SECONDS:.0f} s; close that program"),
    ("disk i/o error", "the disk cannot be read or written; what was stored is safe: check the "
                       "disk, then give the same command again"),
)


class LedgerError(ScatterfitError):
    """A ledger that cannot be opened, read or written."""


@contextmanager
def explained(path):
    """Turn the errors of SQLite and of the disk into one line about the ledger.

    Parameters
    ----------
    path : str or Path
        The ledger's file.

    Yields
    ------
    None
        For the body of a ``with``.

    Raises
    ------
    LedgerError
        In place of ``sqlite3.Error`` and ``OSError``.
    """
    try:
        yield
    except sqlite3.Error as error:
        text = str(error).lower()
        remedy = next((remedy for key, remedy in _EXPLAINED if key in text), f"SQLite: {error}")
        raise LedgerError(printable(f"{path}: {remedy}")) from error
    except OSError as error:
        text = f"{path}: cannot be used: {error.strerror or error}"
        raise LedgerError(printable(text)) from error


def connect(path, *, write):
    """Open a ledger's file.

    Parameters
    ----------
    path : str or Path
        The file; made, with its folder, where it is to be written and is not there.
    write : bool
        Whether it is to be written.

    Returns
    -------
    connection : sqlite3.Connection
        In autocommit mode; to be closed by the caller.

    Raises
    ------
    LedgerError
        If the file cannot be opened, is no ledger, or has tables of a newer version.
    """
    path = Path(path)
    with explained(path):
        if path.is_dir():
            message = f"{path}: is a folder; name a file, such as {path / 'night.sqlite'}"
            raise LedgerError(printable(message))
        if write:
            path.parent.mkdir(parents=True, exist_ok=True)
        elif not path.exists():
            message = f"{path}: there is no such ledger; scatterfit batch makes one"
            raise LedgerError(printable(message))
        connection = _opened(path, write)
    try:
        with explained(path):
            _check(connection, path, write)
            if write:
                connection.execute("PRAGMA foreign_keys = ON")
                _choose_journal(connection, path)
    except BaseException:
        connection.close()
        raise
    return connection


def _opened(path, write):
    """Return a connection that has been tried."""
    if write:
        return _tried(path, "mode=rwc")
    try:
        return _tried(path, "mode=ro")
    except sqlite3.OperationalError:
        # A ledger at rest on a read-only medium, where no file for locks can be made.
        if path.with_name(f"{path.name}-wal").exists():
            raise
        return _tried(path, "immutable=1")


def _tried(path, way):
    uri = f"file:{quote(str(path.absolute()))}?{way}"
    connection = sqlite3.connect(uri, uri=True, timeout=_BUSY_SECONDS, isolation_level=None)
    try:
        connection.execute("PRAGMA schema_version").fetchone()
    except BaseException:
        connection.close()
        raise
    connection.row_factory = sqlite3.Row
    return connection


def _check(connection, path, write):
    """Make the tables of a new ledger; refuse a file that is none, or a newer one."""
    if _is_empty(connection):
        if not write:
            message = f"{path}: not a ledger of scatterfit (there are no tables in it)"
            raise LedgerError(printable(message))
        _make_tables(connection)
    mark = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if mark != APPLICATION_ID:
        message = f"{path}: an SQLite file, but not a ledger of scatterfit; choose another name"
        raise LedgerError(printable(message))
    if version > VERSION:
        message = (f"{path}: written by a newer scatterfit (ledger version {version}, this one "
                   f"knows up to {VERSION}); update scatterfit, or choose another file")
        raise LedgerError(printable(message))
    if write and version < VERSION:
        _bring_up(connection)


def _bring_up(connection):
    """Add what newer tables have, for a ledger of an older version."""
    with transaction(connection):
        there = {row["name"] for row in connection.execute("PRAGMA table_info(pulses)")}
        for name in ADDED:
            if name not in there:  # another process may have been quicker
                connection.execute(f'ALTER TABLE pulses ADD COLUMN "{name}" REAL')
        connection.execute("DROP VIEW IF EXISTS night")
        connection.execute(VIEW)  # a view keeps the columns that there were when it was made
        connection.execute(f"PRAGMA user_version = {VERSION}")


def _is_empty(connection):
    return not connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]


def _make_tables(connection):
    """Make all tables in one transaction; another process may have been quicker."""
    with transaction(connection):
        if _is_empty(connection):
            for statement in SCHEMA.split(";\n"):
                connection.execute(statement)
            connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            connection.execute(f"PRAGMA user_version = {VERSION}")


@contextmanager
def transaction(connection):
    """Do several statements or none of them, with the right to write from the start.

    Parameters
    ----------
    connection : sqlite3.Connection
        In autocommit mode.

    Yields
    ------
    None
        For the body of a ``with``.
    """
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
        connection.execute("COMMIT")
    except BaseException:
        if connection.in_transaction:
            connection.execute("ROLLBACK")
        raise


def _choose_journal(connection, path):
    """Use the write-ahead log, by which others read while one writes, where it is safe.

    It needs memory that all processes share, so it fails silently between the machines of a
    network share; there the plain rollback journal is used.
    """
    wanted = "DELETE" if on_network_share(path) else "WAL"
    got = connection.execute(f"PRAGMA journal_mode = {wanted}").fetchone()[0]
    safe_without_flush = got.upper() == "WAL"
    connection.execute(f"PRAGMA synchronous = {'NORMAL' if safe_without_flush else 'FULL'}")


def settle(connection):
    """Fold the write-ahead log into the file, so that one file is all there is.

    Parameters
    ----------
    connection : sqlite3.Connection
        Of a ledger opened for writing; left as it is where another process uses the ledger.
    """
    try:
        connection.execute("PRAGMA busy_timeout = 0")
        connection.execute("PRAGMA journal_mode = DELETE")
    except sqlite3.Error:
        pass  # another process reads or writes; the last one to close folds it
