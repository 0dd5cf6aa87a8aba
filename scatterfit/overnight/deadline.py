"""A limit of time for one pulse.

A pool of processes cannot stop a task that it has begun. So the worker stops itself: at the limit
an exception is raised in the thread that fits, and where that does not help, as in a loop inside
a compiled library, the worker's whole process ends a little later.
"""

import ctypes
import faulthandler
import os
import threading
from contextlib import contextmanager, suppress

_STEPS = 1000


class TookTooLongError(BaseException):
    """The limit has passed; no ``except Exception`` on the way may swallow it."""


@contextmanager
def time_limit(seconds):
    """Raise an exception in the body once the time has passed, whichever thread it runs in.

    Parameters
    ----------
    seconds : float
        Limit [s].

    Yields
    ------
    None
        For the body of a ``with``.

    Raises
    ------
    TookTooLongError
        In the body, between two steps of Python code.
    """
    thread, lock, state = threading.get_ident(), threading.Lock(), {"over": False, "fired": False}

    def interrupt():
        with lock:
            if not state["over"]:
                state["fired"] = True
                _raise_in(thread, TookTooLongError)

    timer = threading.Timer(seconds, interrupt)
    timer.daemon = True
    timer.start()
    try:
        yield
    finally:
        with lock:
            state["over"] = True
        timer.cancel()
        if state["fired"]:
            _let_it_arrive()


def _let_it_arrive():
    """Meet an exception that was asked for just as the work ended, which then counts as done.

    Taking the request back would leave Python 3.11 looking for it for ever, under a profiler in
    an endless loop.
    """
    with suppress(TookTooLongError):
        for _ in range(_STEPS):
            pass


def _raise_in(thread, exception):
    ctypes.pythonapi.PyThreadState_SetAsyncExc(ctypes.c_ulong(thread), ctypes.py_object(exception))


@contextmanager
def last_resort(seconds):
    """End this process once the time has passed, even where no Python code runs any more.

    Parameters
    ----------
    seconds : float
        Limit [s].

    Yields
    ------
    None
        For the body of a ``with``.
    """
    with open(os.devnull, "w", encoding="utf-8") as nowhere:  # noqa: PTH123 - not a path of ours
        faulthandler.dump_traceback_later(seconds, exit=True, file=nowhere)
        try:
            yield
        finally:
            faulthandler.cancel_dump_traceback_later()
