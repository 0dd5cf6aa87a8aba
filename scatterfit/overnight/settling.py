"""Which files are completely written: those whose size and times have stood still for a while."""

import os
import time
from contextlib import suppress

from scatterfit.overnight.jobs import seen

_EMPTY_FACTOR = 10.0


class Settling:
    """Files that were seen to change, until they stand still.

    Parameters
    ----------
    folder : Path
        Where the traces are.
    seconds : float
        How long size and times of a file must stay the same [s]; an empty file, which its writer
        has only just made, is given ten times that.
    shared : bool
        Whether the folder is on a network share, whose answers about a file may be old until it
        is opened.
    clock : callable
        Returns a time that only goes forward [s].
    """

    def __init__(self, folder, seconds, *, shared=False, clock=time.monotonic):
        self._folder = folder
        self._seconds = seconds
        self._shared = shared
        self._clock = clock
        self._known = {}

    def __len__(self):
        """Return how many files are waited for."""
        return len(self._known)

    def note(self, job):
        """Wait for a trace to stand still."""
        self._known.setdefault(job.trace, (job, None, self._clock()))

    def ready(self):
        """Return the jobs of traces that stand still now, and wait for them no longer."""
        now, done = self._clock(), []
        for trace, (job, before, since) in list(self._known.items()):
            path = job.file(self._folder)
            if self._shared:
                _ask_the_server(path)
            state, _ = seen(path)
            if not os.path.lexists(path) or path.is_dir():  # taken away again, or no file
                del self._known[trace]
            elif state != before:
                self._known[trace] = (job, state, now)
            elif now - since >= self._seconds * (1 if state.size else _EMPTY_FACTOR):
                del self._known[trace]
                done.append(job)
        return done


def _ask_the_server(path):
    """Open a file for a moment, upon which a network share tells its true size."""
    with suppress(OSError):
        os.close(os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0)))
