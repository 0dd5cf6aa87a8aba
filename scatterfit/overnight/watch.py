"""Fits each trace once it is completely written, for as long as a night lasts."""

import os
import time
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path

from scatterfit.errors import ChamberFileError, ScatterfitError
from scatterfit.files import PULSES_NAME
from scatterfit.overnight.batch import Listener, local_crew
from scatterfit.overnight.catalogue import (
    Look,
    NoTraceError,
    is_trace_name,
    job_of,
    survey,
    traces_in,
)
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.night import bind, check_plan
from scatterfit.overnight.settling import Settling
from scatterfit.overnight.shares import on_network_share
from scatterfit.overnight.stopping import Stopper

EXTRA = "pip install 'scatterfit[watch]'"
"""What installs the library that notices changes."""

_STEP_MS = 50
_DEBOUNCE_MS = 100
_TICK_MS = 50
_POLL_MS = 300
_LOOK_AGAIN_SECONDS = 30.0
_NO_END = 1 << 30


class WatchError(ScatterfitError):
    """A folder that cannot be watched."""


@dataclass(frozen=True)
class Watching:
    """How a folder is watched."""

    recursive: bool = False
    """Whether folders in the folder count."""
    workers: int | None = None
    """Worker processes; as many as there are processors by default."""
    settle: float = 0.3
    """How long a file must stand still to be taken for complete [s]."""
    poll: bool | None = None
    """Whether to look at all files again and again, in place of being told by the system; by
    default on network shares, where the system tells nothing."""
    look_again: float = field(default=_LOOK_AGAIN_SECONDS)
    """How often the whole folder is looked at, lest a change was missed [s]."""


class Watcher:
    """One watch of a folder; `run` lasts until it is asked to stop.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted.
    ledger_path : str or Path
        Where results go.
    watching : Watching, optional
        How the folder is watched.
    listener : Listener, optional
        Is told of every pulse; its ``begin`` of what there is to do at the start.
    news : callable, optional
        Called without arguments again and again, with results stored or not; returns soon.
    """

    def __init__(self, plan, ledger_path, watching=None, *, listener=None, news=None):
        self.plan = plan
        self._ledger_path = Path(ledger_path)
        self._watching = watching or Watching()
        self._listener = listener or Listener()
        self._news = news or (lambda: None)
        shared = on_network_share(plan.folder)
        self.polls = shared if self._watching.poll is None else self._watching.poll
        self._settling = Settling(plan.folder, self._watching.settle, shared=shared)
        self._chamber = check_plan(plan)
        self._chamber_state = _state(plan.chamber)
        self._holds = True
        self._said = None
        self._look_at = 0.0

    def run(self, stop=None, crew=None):
        """Watch until asked to stop.

        Parameters
        ----------
        stop : object, optional
            Its ``asked`` says when to stop; Ctrl-C by default.
        crew : callable, optional
            As for `run_batch`.

        Raises
        ------
        WatchError
            If the library that notices changes is missing, or the folder cannot be watched.
        LedgerError
            If the ledger cannot be written.
        """
        crew = crew or partial(local_crew, workers=self._watching.workers)
        announce = partial(self._listener.remark, "stopping after the pulses at work")
        with Ledger(self._ledger_path) as ledger, Stopper(announce) as ctrl_c:
            bind(ledger, self.plan, self._chamber)
            with crew(self.plan, _NO_END) as team:
                team.wake()
                self._loop(ledger, team, stop or ctrl_c)

    def _loop(self, ledger, crew, stop):
        self._look_around(ledger, first=True)
        for changes in self._changes():
            if stop.asked and not crew.busy:
                return
            if not stop.asked:
                self._take_in(changes, ledger)
                self._hand_out(ledger, crew)
            if crew.busy:
                for outcome in ledger.store(crew.collect(0.01)):
                    self._listener.pulse(outcome)
                ledger.renew()
            self._news()

    def _changes(self):
        """Yield sets of changed paths, an empty one now and then."""
        try:
            from watchfiles import watch  # noqa: PLC0415 - an extra
        except ImportError as error:
            message = f"watching needs watchfiles: {EXTRA}"
            raise WatchError(message) from error
        try:
            for changes in watch(
                self.plan.folder.resolve(), watch_filter=None, debounce=_DEBOUNCE_MS, step=_STEP_MS,
                rust_timeout=_TICK_MS, yield_on_timeout=True, force_polling=self.polls or None,
                poll_delay_ms=_POLL_MS, recursive=self._watching.recursive,
            ):
                yield {path for _, path in changes}
        except OSError as error:
            message = f"{self.plan.folder}: cannot be watched: {error.strerror or error}"
            raise WatchError(message) from error

    def _take_in(self, changes, ledger):
        """Wait for changed traces to stand still; look around where that is due."""
        self._check_chamber(ledger)
        names = {self._name(path) for path in changes} - {None}
        for name in names:
            if is_trace_name(name.rpartition("/")[2]):
                self._settling.note(job_of(name))
        of_all = any(name.rpartition("/")[2] == PULSES_NAME for name in names)
        if of_all or time.monotonic() >= self._look_at:
            self._look_around(ledger)

    def _name(self, path):
        """Return the path from the folder, ``None`` outside of it and in hidden folders."""
        name = os.path.relpath(path, self.plan.folder.resolve()).replace(os.sep, "/")
        parts = name.split("/")
        hidden = any(part.startswith(".") for part in parts)
        deep = len(parts) > 1 and not self._watching.recursive
        return None if hidden or deep else name

    def _look_around(self, ledger, *, first=False):
        """Note every trace of the folder whose result is missing or holds no more."""
        self._look_at = time.monotonic() + self._watching.look_again

        def note(job, reason):
            if reason is not None:
                self._settling.note(job)

        try:
            traces = traces_in(self.plan.folder, recursive=self._watching.recursive)
            catalogue = survey(self._look(ledger), traces, note)
        except (NoTraceError, ChamberFileError) as error:
            self._say_once(str(error))
        else:
            if first:
                self._listener.begin(catalogue, 0)

    def _look(self, ledger):
        return Look(ledger.connection, self.plan, self._chamber)

    def _hand_out(self, ledger, crew):
        """Queue what stands still, and hand free jobs to the workers."""
        ready = self._settling.ready() if self._holds else []
        if ready:
            look = self._look(ledger)
            try:
                with ledger.writing():
                    survey(look, ready, ledger.put)
                    ledger.touch(look.moved)
            except ChamberFileError as error:  # pulses.csv, as it is being edited
                self._say_once(str(error))
                for job in ready:
                    self._settling.note(job)
        if self._holds and crew.room() and ledger.has_free():
            for job in ledger.claim(crew.room()):
                crew.submit(job)

    def _check_chamber(self, ledger):
        """Use a chamber file that was changed; while it is wrong, fit nothing."""
        state = _state(self.plan.chamber)
        if state == self._chamber_state:
            return
        self._chamber_state = state
        try:
            self._chamber = check_plan(self.plan)
            bind(ledger, self.plan, self._chamber)
        except ScatterfitError as error:
            self._holds = False
            self._say_once(f"{error}; waiting until that is put right")
        else:
            self._holds = True
            self._say_once(f"{self.plan.chamber} has changed; it holds from now on")

    def _say_once(self, text):
        """Tell the user something, not twice in a row."""
        if text != self._said:
            self._listener.remark(text)
        self._said = text


def _state(path):
    """Return what tells a file from its later versions, ``None`` where it is not there."""
    try:
        state = Path(path).stat()
    except OSError:
        return None
    return state.st_size, state.st_mtime_ns, state.st_ctime_ns
