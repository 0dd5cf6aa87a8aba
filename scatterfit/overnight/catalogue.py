"""What there is to do in a folder: which traces are new or changed, and which are done."""

import os
import time
from collections import Counter
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.errors import ScatterfitError
from scatterfit.files import PULSES_NAME, TRACE_SUFFIXES
from scatterfit.overnight.jobs import Job, Seen, hash_of, seen, set_outside, version

_AT_ONCE = 500
_EXAMPLES = 5
_SETTLED_NS = 2_000_000_000
"""A file read so soon after its change may have changed again without a new time."""


class NoTraceError(ScatterfitError):
    """A folder that cannot be read or has no trace in it."""


@dataclass(frozen=True)
class Catalogue:
    """What a look at the folder found."""

    found: int = 0
    """Traces in the folder."""
    done: int = 0
    """Of them, those whose result holds."""
    why: Counter = field(default_factory=Counter)
    """Reason to number of those that are to be done."""
    examples: dict = field(default_factory=dict)
    """Reason to the first few traces, for a dry run."""

    @property
    def todo(self):
        """Number of traces to be done."""
        return sum(self.why.values())


def traces_in(folder, *, recursive=False):
    """Yield the traces of a folder.

    Parameters
    ----------
    folder : str or Path
        Where to look; hidden files and folders, and ``pulses.csv``, are passed over.
    recursive : bool
        Whether to look into its folders too; links to folders are not followed.

    Yields
    ------
    job : Job
        One for each trace, in no particular order.

    Raises
    ------
    NoTraceError
        If the folder cannot be read.
    """
    folder = Path(folder)
    waiting = [""]
    while waiting:
        inside = waiting.pop()
        try:
            with os.scandir(folder / inside) as entries:
                for entry in entries:
                    name = inside + entry.name
                    if recursive and _is_folder(entry):
                        waiting.append(f"{name}/")
                    elif is_trace_name(entry.name) and not entry.is_dir():
                        yield job_of(name)
        except OSError as error:
            text = f"{folder / inside}: cannot be read: {error.strerror or error}"
            raise NoTraceError(printable(text)) from error


def _is_folder(entry):
    return not entry.name.startswith(".") and entry.is_dir(follow_symlinks=False)


def is_trace_name(name):
    """Return whether a file is taken for a trace.

    Parameters
    ----------
    name : str
        Name of a file, without folders.

    Returns
    -------
    wanted : bool
        By its ending; not for hidden files and ``pulses.csv``.

    Examples
    --------
    >>> is_trace_name("p001.csv"), is_trace_name("pulses.csv"), is_trace_name("notes.md")
    (True, False, False)
    """
    ending = os.path.splitext(name)[1].lower()  # noqa: PTH122 - twice as fast as Path for a name
    return ending in TRACE_SUFFIXES and not name.startswith(".") and name != PULSES_NAME


def job_of(name):
    r"""Return the job of a trace.

    Parameters
    ----------
    name : str
        Its path from the folder, as the system gives it.

    Returns
    -------
    job : Job
        With the system's own spelling beside it where that is not UTF-8 text.

    Examples
    --------
    >>> job_of("a.csv")
    Job(trace='a.csv', path=None, why='new')
    >>> print(job_of("caf" + chr(0xdce9) + ".csv").trace)
    caf\xe9.csv
    """
    name = name.replace(os.sep, "/")
    try:
        name.encode("utf-8")
    except UnicodeEncodeError:
        raw = os.fsencode(name)
        return Job(raw.decode("utf-8", "backslashreplace"), raw)
    return Job(name)


class Look:
    """Decides whether a trace is to be done.

    Parameters
    ----------
    connection : sqlite3.Connection or None
        Of the ledger; without one, every trace is new.
    plan : Plan
        How pulses are fitted.
    chamber_sha256 : str
        Hash of the chamber file.
    retry_failed : bool
        Whether pulses that failed are to be done again.
    """

    def __init__(self, connection, plan, chamber_sha256, *, retry_failed=False):
        self._connection = connection
        self._plan = plan
        self._chamber = chamber_sha256
        self._version = version()
        self._retry_failed = retry_failed
        self._since_ns = time.time_ns()
        self.moved = []
        """Files found unchanged under new times, with these times."""

    def reason(self, job):
        """Return why a trace is to be done, ``None`` where its result holds."""
        row = None if self._connection is None else self._connection.execute(
            "SELECT * FROM pulses WHERE trace = ?", (job.trace,)).fetchone()
        if row is None:
            return "new"
        path = job.file(self._plan.folder)
        if row["chamber_sha256"] != self._chamber:
            return "chamber file changed"
        if row["version"] != self._version:
            return "other version of scatterfit"
        if row["set_outside"] != set_outside(path, self._plan.folder, self._plan.overrides):
            return "overrides changed"
        if self._retry_failed and row["verdict"] == "failed" and row["read_ns"] < self._since_ns:
            return "failed before"
        return None if self._same_trace(row, path) else "trace changed"

    def _same_trace(self, row, path):
        """Return whether a trace is as it was read; its bytes are looked at only in doubt."""
        state, is_file = seen(path)
        known = Seen(row["size"], row["mtime_ns"], row["ctime_ns"])
        settled = (row["read_ns"] or 0) - (row["mtime_ns"] or 0) > _SETTLED_NS
        if state == known and settled:
            return True
        now = time.time_ns()
        same = (hash_of(path) if is_file else None) == row["trace_sha256"]
        if same and is_file:
            self.moved.append((state.size, state.mtime_ns, state.ctime_ns, now, row["trace"]))
        return same


def survey(look, jobs, note=None):
    """Return what there is to do.

    Parameters
    ----------
    look : Look
        Decides.
    jobs : iterable of Job
        The traces there are.
    note : callable, optional
        Told each job with the reason why it is to be done, ``None`` where it is not.

    Returns
    -------
    catalogue : Catalogue
        What was found.

    Raises
    ------
    ChamberFileError
        If a ``pulses.csv`` cannot be understood.
    """
    found, why, examples = 0, Counter(), {}
    for job in jobs:
        found += 1
        reason = look.reason(job)
        if note is not None:
            note(job, reason)
        if reason is not None:
            why[reason] += 1
            shown = examples.setdefault(reason, [])
            if len(shown) < _EXAMPLES:
                shown.append(job.trace)
    return Catalogue(found, found - sum(why.values()), why, examples)


def enqueue(ledger, look, jobs):
    """Put into the queue what is missing or changed, and drop what is there no more.

    Parameters
    ----------
    ledger : Ledger
        Where results and queue are.
    look : Look
        Decides.
    jobs : iterable of Job
        All traces of the folder.

    Returns
    -------
    catalogue : Catalogue
        What was found.

    Raises
    ------
    ChamberFileError
        If a ``pulses.csv`` cannot be understood.
    """
    begun, jobs, parts = time.time(), iter(jobs), []
    while chunk := list(islice(jobs, _AT_ONCE)):
        with ledger.writing():  # look and put in one step, for another process may store between
            parts.append(survey(look, chunk, ledger.put))
            ledger.touch(look.moved)
            look.moved.clear()
    with ledger.writing():
        ledger.drop_older(begun)
    return _summed(parts)


def _summed(parts):
    why, examples = Counter(), {}
    for part in parts:
        why += part.why
        for reason, traces in part.examples.items():
            examples[reason] = (examples.get(reason, []) + traces)[:_EXAMPLES]
    return Catalogue(sum(part.found for part in parts), sum(part.done for part in parts), why,
                     examples)
