"""Worker processes on this machine.

The start method is set on purpose. A forked copy of a process that has threads (a progress bar, a
linear-algebra library) can hang, and a fresh interpreter for each worker takes seconds to import
the numerics; so, where there is one, a fork server imports them once and workers are copies of
that clean process. Linear algebra gets one thread a worker: more would only get in each other's
way.
"""

import multiprocessing
import os
import signal
import threading
import warnings
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager

from scatterfit.overnight.work import own_this_process

_PRELOADED = ["scatterfit.overnight.work"]
_NUMERICS = ["scatterfit.files_fit", "lmfit", "scipy.optimize", "scipy.special"]
_THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMEXPR_NUM_THREADS",
            "VECLIB_MAXIMUM_THREADS", "BLIS_NUM_THREADS", "NUMBA_NUM_THREADS")


def processors():
    """Return how many processors this process may use.

    Returns
    -------
    count : int
        At least one.
    """
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0)) or 1
    return os.cpu_count() or 1


class LocalPool(ProcessPoolExecutor):
    """A pool of processes for fits, which end with the process that made them.

    Parameters
    ----------
    workers : int
        How many.
    numerics : bool
        Whether they will fit pulses, and had better load what that needs beforehand.
    compiled : bool
        Whether each loads compiled loops before its first task.
    """

    def __init__(self, workers, *, numerics=True, compiled=False):
        methods = multiprocessing.get_all_start_methods()
        method = "forkserver" if "forkserver" in methods else "spawn"
        context = multiprocessing.get_context(method)
        if method == "forkserver":
            context.set_forkserver_preload(_PRELOADED + _NUMERICS * numerics)
        super().__init__(workers, mp_context=context, initializer=_begin, initargs=(compiled,))

    def submit(self, fn, /, *args, **kwargs):
        """Hand in a task; processes that start for it see one thread for linear algebra."""
        with _one_thread():
            return super().submit(fn, *args, **kwargs)

    def kill(self):
        """End all workers at once, whatever they do."""
        # The method is public from Python 3.14 on; before, the processes are reached this way.
        processes = list((self._processes or {}).values())
        self.shutdown(wait=False, cancel_futures=True)
        for process in processes:
            process.kill()


@contextmanager
def _one_thread():
    """Set the variables that linear-algebra libraries read when they are loaded."""
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _begin(compiled=False):
    """Prepare a worker: it leaves Ctrl-C to its parent, is silent, and ends with its parent."""
    if compiled:
        from scatterfit.files_compiled import load_compiled  # noqa: PLC0415 - loads the numerics

        load_compiled()
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    warnings.simplefilter("ignore")
    own_this_process()
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()


def _end_with(parent):
    """Wait for the parent's end; without this, a killed parent would leave workers behind."""
    parent.join()
    os._exit(1)
