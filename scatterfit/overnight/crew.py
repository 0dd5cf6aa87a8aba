"""Jobs in flight on an executor: few at a time, none lost when a worker dies."""

import time
from collections import deque
from concurrent.futures import BrokenExecutor, CancelledError, wait
from functools import partial
from queue import Empty, SimpleQueue

from scatterfit.errors import ScatterfitError
from scatterfit.overnight.work import broken, lost, measure, nothing

_PROBE_SECONDS = 120.0
_DRAIN_SECONDS = 30.0
_FIRST_ALONE = 4


class CrewError(ScatterfitError):
    """Workers that cannot do anything at all."""


class Crew:
    """Hands jobs to an executor and gathers what comes of them.

    A dead worker breaks a pool of processes with every job in it. The pool is then made again
    and each of these jobs is tried alone: the one that kills its worker again gets a row that
    says so, the others their result.

    The first job runs alone, until one has come out well: it fills the cache that the others use.

    Parameters
    ----------
    plan : Plan
        How pulses are fitted.
    make_executor : callable
        Returns a ``concurrent.futures.Executor``; called again after a worker has died.
    window : callable
        Returns how many jobs may be handed in at a time, about twice the number of workers.
    patience : float, optional
        Time after which a job that was handed in is given up [s], for an executor whose workers
        do not end themselves; forever by default.
    """

    def __init__(self, plan, make_executor, window, *, patience=None):
        self._plan = plan
        self._make = make_executor
        self._window = window
        self._patience = patience
        self._work = partial(measure, plan)
        self._executor = make_executor()
        self._finished = SimpleQueue()
        self._flying = {}
        self._suspects = deque()
        self._alone = None
        self._is_broken = False
        self._warm = 0

    @property
    def busy(self):
        """Whether there are jobs whose outcome is still to come."""
        return bool(self._flying or self._suspects)

    @property
    def traces(self):
        """Names of the jobs whose outcome is still to come."""
        return [job.trace for job, _ in self._flying.values()] + [
            job.trace for job in self._suspects]

    def room(self):
        """Return how many jobs may be handed in now."""
        if self._suspects or self._alone:
            return 0
        window = self._window() if self._warm >= _FIRST_ALONE else 1
        return max(0, window - len(self._flying))

    def wake(self):
        """Start the workers before there is work, so that the first job need not wait."""
        self._executor.submit(nothing)

    def submit(self, job):
        """Hand in one job; return whether the executor took it, or it waits to be tried alone."""
        try:
            future = self._executor.submit(self._work, job)
        except BrokenExecutor:
            self._suspects.append(job)
            self._is_broken = True
            return False
        self._flying[future] = (job, time.monotonic())
        future.add_done_callback(self._finished.put)
        return True

    def collect(self, timeout):
        """Return what has come of jobs, waiting for the first.

        Parameters
        ----------
        timeout : float
            Longest wait [s].

        Returns
        -------
        outcomes : list of Outcome
            Perhaps empty.

        Raises
        ------
        CrewError
            If workers end as soon as they start, or the executor gives up its tasks.
        """
        if self._suspects and not self._flying and not self._is_broken:
            suspect = self._suspects.popleft()
            self._alone = suspect if self.submit(suspect) else None
        outcomes = [made for future in self._done(timeout) for made in self._taken(future)]
        outcomes += self._given_up()
        if self._is_broken:
            wait(list(self._flying), timeout=_DRAIN_SECONDS)
            outcomes += [made for future in list(self._flying) for made in self._taken(future)]
            self._rebuild()
        good = sum(outcome.row["verdict"] != "failed" for outcome in outcomes)
        self._warm += len(outcomes) + _FIRST_ALONE * good
        return outcomes

    def _given_up(self):
        """Yield the outcomes of jobs that have been out for too long, the oldest first."""
        while self._patience is not None and self._flying:
            future, (job, begun) = next(iter(self._flying.items()))
            seconds = time.monotonic() - begun
            if future.done() or seconds < self._patience:
                return
            future.cancel()
            del self._flying[future]
            yield lost(self._plan, job, seconds)

    def _taken(self, future):
        """Yield the outcome of a future that is done, unless its job is to be tried alone."""
        job, begun = self._flying.pop(future, (None, 0.0))
        if job is None:
            return
        alone, self._alone = self._alone is job, None
        try:
            yield future.result(timeout=0)
        except (BrokenExecutor, TimeoutError):
            self._is_broken = True
            if alone:
                yield lost(self._plan, job, time.monotonic() - begun)
            else:
                self._suspects.append(job)
        except CancelledError as error:
            message = "the workers gave up their tasks; has their scheduler ended?"
            raise CrewError(message) from error
        except (Exception, SystemExit) as error:  # noqa: BLE001 - becomes the pulse's row
            yield broken(self._plan, job, error)

    def _done(self, timeout):
        """Yield finished futures: the first within the time, then those that are there."""
        try:
            yield self._finished.get(timeout=timeout)
            while True:
                yield self._finished.get_nowait()
        except Empty:
            return

    def _rebuild(self):
        """Make the executor again, and see that it works."""
        self._close_executor(now=True)
        self._executor, self._is_broken = self._make(), False
        try:
            self._executor.submit(nothing).result(timeout=_PROBE_SECONDS)
        except (BrokenExecutor, TimeoutError) as error:
            message = ("the worker processes end as soon as they start; is there enough memory? "
                       "--jobs 1 needs the least")
            raise CrewError(message) from error

    def _close_executor(self, *, now):
        kill = getattr(self._executor, "kill", None)
        if now and kill is not None:
            kill()
        else:
            self._executor.shutdown(wait=not now)

    def close(self, *, now=False):
        """End the workers.

        Parameters
        ----------
        now : bool
            Whether to end them in the middle of their work.
        """
        self._close_executor(now=now)
