"""Every trace of a folder, each once, on whatever executor there is."""

import time
from collections import Counter
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from functools import partial
from itertools import chain
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.files import TRACE_SUFFIXES
from scatterfit.overnight.catalogue import (
    Catalogue,
    Look,
    NoTraceError,
    enqueue,
    survey,
    traces_in,
)
from scatterfit.overnight.crew import Crew
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.ledger_file import connect, explained
from scatterfit.overnight.night import bind, check_plan
from scatterfit.overnight.pool import LocalPool, processors
from scatterfit.overnight.stopping import Stopper

_WAIT_SECONDS = 0.5
_PATIENCE_SECONDS = 0.25


class Listener:
    """Is told what a batch or a watch does; this one keeps quiet."""

    def begin(self, catalogue, count):
        """Take what the look at the folder found, and how many pulses will be fitted now."""

    def pulse(self, outcome):
        """Take the outcome of one pulse, once it is stored."""

    def remark(self, text):
        """Take one line for the user."""


@dataclass(frozen=True)
class Choice:
    """Which of the traces are done, and by how many workers."""

    recursive: bool = False
    """Whether folders in the folder count."""
    limit: int | None = None
    """Most pulses to fit now."""
    retry_failed: bool = False
    """Whether pulses that failed are fitted again."""
    workers: int | None = None
    """Processes; as many as there are processors by default."""


@dataclass(frozen=True)
class BatchReport:
    """What a batch did."""

    catalogue: Catalogue
    """What was found at the start."""
    verdicts: Counter = field(default_factory=Counter)
    """Verdict to number of pulses fitted now."""
    seconds: float = 0.0
    """From the first pulse handed in to the last stored [s]."""
    stopped: bool = False
    """Whether a user ended it early."""

    @property
    def fitted(self):
        """Number of pulses fitted now."""
        return sum(self.verdicts.values())


def look_at_folder(plan, ledger_path, choice=None):
    """Return what a batch would do, without doing any of it.

    Parameters
    ----------
    plan : Plan
        How the pulses would be fitted.
    ledger_path : str or Path
        The ledger, which need not exist.
    choice : Choice, optional
        Which traces.

    Returns
    -------
    catalogue : Catalogue
        What there is to do, by reason.

    Raises
    ------
    ChamberFileError
        If the chamber file does not describe a bench.
    NoTraceError
        If there is no trace in the folder.
    LedgerError
        If the ledger cannot be read.
    """
    choice = choice or Choice()
    chamber_sha256 = check_plan(plan)
    traces = _some(plan.folder, traces_in(plan.folder, recursive=choice.recursive))
    exists = Path(ledger_path).exists()
    connection = connect(ledger_path, write=False) if exists else None
    try:
        with explained(ledger_path):
            look = Look(connection, plan, chamber_sha256, retry_failed=choice.retry_failed)
            return survey(look, traces)
    finally:
        if connection is not None:
            connection.close()


def run_batch(plan, ledger_path, choice=None, *, crew=None, listener=None):
    """Fit every trace of a folder that is not done yet.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted.
    ledger_path : str or Path
        Where results go; made where it is not there.
    choice : Choice, optional
        Which traces, and how many workers.
    crew : callable, optional
        Returns a context that gives a `Crew` for a plan and a number of pulses; worker processes
        on this machine by default.
    listener : Listener, optional
        Is told what happens.

    Returns
    -------
    report : BatchReport
        What was done.

    Raises
    ------
    ChamberFileError
        If the chamber file does not describe a bench.
    NoTraceError
        If there is no trace in the folder.
    LedgerError
        If the ledger cannot be used.
    CrewError
        If the workers cannot work.
    """
    choice, listener = choice or Choice(), listener or Listener()
    crew = crew or partial(local_crew, workers=choice.workers)
    chamber_sha256 = check_plan(plan)
    traces = _some(plan.folder, traces_in(plan.folder, recursive=choice.recursive))
    with Ledger(ledger_path) as ledger:
        bind(ledger, plan, chamber_sha256)
        look = Look(ledger.connection, plan, chamber_sha256, retry_failed=choice.retry_failed)
        catalogue = enqueue(ledger, look, traces)
        count = min(catalogue.todo, catalogue.todo if choice.limit is None else choice.limit)
        listener.begin(catalogue, count)
        if not count:
            return BatchReport(catalogue)
        if plan.compiled is None:
            plan = replace(plan, compiled=catalogue.found >= MANY)
        begun = time.monotonic()
        with Stopper(partial(listener.remark, _STOPPING)) as stop, crew(plan, count) as at_work:
            verdicts = _work_off(ledger, at_work, count, stop, listener)
        seconds = time.monotonic() - begun
        return BatchReport(catalogue, verdicts, seconds, stop.asked)


MANY = 200
"""Traces in a folder from which on compiled loops pay, their first compilation included."""
_STOPPING = "stopping after the pulses at work; Ctrl-C again stops at once"


def _some(folder, traces):
    """Return the traces, or refuse a folder that has none."""
    first = next(traces, None)
    if first is None:
        endings = ", ".join(TRACE_SUFFIXES)
        message = printable(f"{folder}: there is no trace in it (files ending in {endings}); "
                            "--recursive looks into its folders too")
        raise NoTraceError(message)
    return chain([first], traces)


@contextmanager
def local_crew(plan, count, *, workers=None):
    """Give a crew of processes on this machine.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted.
    count : int
        How many there are.
    workers : int, optional
        Processes at most; as many as there are processors by default.

    Yields
    ------
    crew : Crew
        Ended with the ``with`` statement, in the middle of its work where that fails.
    """
    workers = max(1, min(workers or processors(), count))
    pool = partial(LocalPool, workers, numerics=plan.fit is None)
    crew = Crew(plan, pool, lambda: 2 * workers)
    with ended(crew):
        yield crew


@contextmanager
def ended(crew):
    """End a crew with a ``with`` statement, in the middle of its work where that fails.

    Parameters
    ----------
    crew : Crew
        The crew.

    Yields
    ------
    crew : Crew
        The same.
    """
    try:
        yield crew
    except BaseException:
        crew.close(now=True)
        raise
    crew.close()


def _work_off(ledger, crew, count, stop, listener):
    """Fit what is queued, at most so many, and return the verdicts."""
    verdicts, left, told = Counter(), count, False
    while True:
        if not stop.asked:
            for job in ledger.claim(min(crew.room(), left)):
                crew.submit(job)
                left -= 1
        if crew.busy:
            for outcome in ledger.store(crew.collect(_WAIT_SECONDS)):
                verdicts[outcome.row["verdict"]] += 1
                listener.pulse(outcome)
            ledger.renew()
            continue
        free, elsewhere = ledger.waiting()
        if stop.asked or not left or not free + elsewhere:
            return verdicts
        if not free:
            if not told:
                listener.remark(f"waiting for {elsewhere} pulses that another process works on")
            told = True
            time.sleep(_PATIENCE_SECONDS)
