"""The ledger: one SQLite file with what came of every trace, written by one process at a time."""

import time
from collections import Counter
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.ledger_file import LedgerError, connect, explained, settle, transaction
from scatterfit.overnight.owner import is_gone, this_owner
from scatterfit.overnight.work import as_columns

LEASE_SECONDS = 60.0
"""A claim that is not renewed ends after this time."""


class Ledger:
    """A ledger opened for writing; use it in a ``with`` statement.

    Several processes may have one open: each claims the jobs it works on, and only the holder of
    a claim stores its result.

    Parameters
    ----------
    path : str or Path
        The file; made where it is not there.
    lease : float
        Time after which a claim that is not renewed ends [s].

    Raises
    ------
    LedgerError
        If the file cannot be used; the message is one line.
    """

    def __init__(self, path, *, lease=LEASE_SECONDS):
        self.path = Path(path)
        self.owner = this_owner()
        self._lease = lease
        self._renew_at = 0.0
        self.connection = connect(path, write=True)

    def __enter__(self):
        """Return the ledger."""
        return self

    def __exit__(self, *_):
        """Close the ledger."""
        self.close()

    def close(self):
        """Give back what is claimed and close the file."""
        with suppress(LedgerError), self.writing():  # on a lost disk they end by their lease
            self._release("claimed_by = ?", self.owner)
        settle(self.connection)
        self.connection.close()

    @contextmanager
    def writing(self):
        """Do several statements or none; what goes wrong is one line about the ledger."""
        with explained(self.path), transaction(self.connection):
            yield

    def remember(self, **facts):
        """Store facts about the night by name.

        Parameters
        ----------
        **facts : str
            Name to text.
        """
        with self.writing():
            self.connection.executemany(
                "INSERT OR REPLACE INTO about VALUES (?, ?)", list(facts.items()))

    def recall(self, name):
        """Return a fact about the night, or ``None``."""
        with explained(self.path):
            row = self.connection.execute("SELECT value FROM about WHERE name = ?", (name,))
            found = row.fetchone()
        return found[0] if found else None

    def keep_chamber(self, sha256, name, text):
        """Store the text of a chamber file under its hash."""
        with self.writing():
            self.connection.execute(
                "INSERT OR IGNORE INTO chambers VALUES (?, ?, ?)", (sha256, name, text))

    def put(self, job, reason):
        """Queue a job for a reason; within `writing`. ``None`` as reason queues nothing."""
        if reason is not None:
            self.connection.execute(
                "INSERT INTO queue (trace, path, why, seen) VALUES (?, ?, ?, ?) "
                "ON CONFLICT (trace) DO UPDATE SET seen = max(seen, excluded.seen)",
                (job.trace, job.path, reason, time.time()))

    def touch(self, states):
        """Store new times of files whose content is as it was; within `writing`.

        Parameters
        ----------
        states : sequence of tuple
            Size [byte], two times and that of reading [ns since 1970], and the trace's name.
        """
        self.connection.executemany(
            "UPDATE pulses SET size = ?, mtime_ns = ?, ctime_ns = ?, read_ns = ? "
            "WHERE trace = ?", states)

    def drop_older(self, moment):
        """Drop jobs of nobody that were queued before a time [s since 1970]; within `writing`."""
        self._release_expired()
        self.connection.execute(
            "DELETE FROM queue WHERE claimed_by IS NULL AND seen < ?", (moment,))

    def claim(self, count):
        """Take jobs that nobody else works on.

        Parameters
        ----------
        count : int
            At most so many.

        Returns
        -------
        jobs : list of Job
            In the order of their names; empty where none is free.
        """
        if count < 1:
            return []
        with self.writing():
            self._release_expired()
            rows = self.connection.execute(
                "SELECT trace, path, why FROM queue WHERE claimed_by IS NULL ORDER BY trace "
                "LIMIT ?", (count,)).fetchall()
            until = time.time() + self._lease
            self.connection.executemany(
                "UPDATE queue SET claimed_by = ?, claimed_until = ? WHERE trace = ?",
                [(self.owner, until, row["trace"]) for row in rows])
        return [Job(row["trace"], row["path"], row["why"]) for row in rows]

    def renew(self):
        """Make this process's claims last longer; cheap when called often."""
        now = time.time()
        if now < self._renew_at:
            return
        self._renew_at = now + self._lease / 6
        with self.writing():
            self.connection.execute("UPDATE queue SET claimed_until = ? WHERE claimed_by = ?",
                                    (now + self._lease, self.owner))

    def _release_expired(self):
        self._release("claimed_until < ?", time.time())
        owners = self.connection.execute(
            "SELECT DISTINCT claimed_by FROM queue WHERE claimed_by IS NOT NULL").fetchall()
        for (owner,) in owners:
            if owner != self.owner and is_gone(owner):
                self._release("claimed_by = ?", owner)

    def _release(self, condition, value):
        self.connection.execute(
            "UPDATE queue SET claimed_by = NULL, claimed_until = NULL "
            f"WHERE claimed_by IS NOT NULL AND {condition}", (value,))

    def release(self, traces):
        """Give claimed jobs back undone.

        Parameters
        ----------
        traces : iterable of str
            Their names.
        """
        with self.writing():
            self.connection.executemany(
                "UPDATE queue SET claimed_by = NULL, claimed_until = NULL "
                "WHERE trace = ? AND claimed_by = ?", [(trace, self.owner) for trace in traces])

    def store(self, outcomes):
        """Store what came of jobs that this process has claimed, all in one step.

        Parameters
        ----------
        outcomes : sequence of Outcome
            Of jobs that were claimed.

        Returns
        -------
        stored : list of Outcome
            Without those whose claim another process has taken over meanwhile.
        """
        stored = []
        if outcomes:
            with self.writing():
                stored = [outcome for outcome in outcomes if self._store(outcome)]
        return stored

    def _store(self, outcome):
        held = self.connection.execute(
            "DELETE FROM queue WHERE trace = ? AND claimed_by = ?",
            (outcome.job.trace, self.owner)).rowcount
        if not held:
            return False
        columns = as_columns(outcome) | {
            "recorded_utc": _utc_text(outcome.state.mtime_ns),
            "fitted_utc": _utc_text(time.time_ns()),
        }
        pulse = self._upsert(columns)
        self.connection.execute("INSERT OR REPLACE INTO details VALUES (?, ?, ?)",
                                (pulse, outcome.result, outcome.thinned))
        return True

    def _upsert(self, columns):
        names = ", ".join(f'"{name}"' for name in columns)
        marks = ", ".join("?" * len(columns))
        changes = ", ".join(f'"{name}" = excluded."{name}"' for name in columns)
        self.connection.execute(
            f"INSERT INTO pulses ({names}) VALUES ({marks}) "
            f"ON CONFLICT (trace) DO UPDATE SET {changes}", list(columns.values()))
        return self.connection.execute(
            "SELECT id FROM pulses WHERE trace = ?", (columns["trace"],)).fetchone()[0]

    def has_free(self):
        """Return whether there is a job that nobody works on."""
        with explained(self.path):
            return self.connection.execute(
                "SELECT EXISTS (SELECT 1 FROM queue WHERE claimed_by IS NULL)").fetchone()[0] == 1

    def waiting(self):
        """Return how many jobs are free, and how many other processes hold.

        Returns
        -------
        free, elsewhere : int
            Numbers of jobs.
        """
        with explained(self.path):
            row = self.connection.execute(
                "SELECT coalesce(sum(claimed_by IS NULL), 0), "
                "coalesce(sum(claimed_by IS NOT NULL AND claimed_by != ?), 0) FROM queue",
                (self.owner,)).fetchone()
        return row[0], row[1]

    def exclude(self, trace, author, note, *, excluded=True):
        """Exclude a pulse by hand, or take it back in; who did it and why is kept.

        Parameters
        ----------
        trace : str
            Name of the pulse in the ledger.
        author, note : str
            Who and why; neither may be empty.
        excluded : bool
            ``False`` takes the pulse back in.

        Raises
        ------
        LedgerError
            If there is no such pulse, or author or note are empty.
        """
        if not author.strip() or not note.strip():
            message = f"{self.path}: an exclusion needs an author and a note that says why"
            raise LedgerError(message)
        with self.writing():
            known = self.connection.execute(
                "SELECT 1 FROM pulses WHERE trace = ?", (trace,)).fetchone()
            if not known:
                message = printable(f"{self.path}: there is no pulse {trace}")
                raise LedgerError(message)
            self.connection.execute(
                "INSERT INTO exclusions (trace, excluded, author, note, at_utc) "
                "VALUES (?, ?, ?, ?, ?)",
                (trace, int(excluded), author.strip(), note.strip(), _utc_text(time.time_ns())))

    def tally(self):
        """Return how often each verdict and each reason occurs.

        Returns
        -------
        verdicts, reasons : Counter
            Over all pulses of the ledger.
        """
        verdicts, reasons = Counter(), Counter()
        with explained(self.path):
            rows = self.connection.execute(
                "SELECT verdict, reasons, count(*) FROM pulses GROUP BY verdict, reasons")
            for verdict, codes, count in rows:
                verdicts[verdict] += count
                reasons.update(dict.fromkeys(filter(None, codes.split(";")), count))
        return verdicts, reasons


def _utc_text(nanoseconds):
    """Return a time as ISO 8601 text, ``None`` where there is none."""
    try:
        moment = datetime.fromtimestamp(nanoseconds / 1e9, UTC)
    except (TypeError, ValueError, OverflowError, OSError):  # none, or beyond what dates can say
        return None
    return moment.isoformat(timespec="milliseconds").replace("+00:00", "Z")
