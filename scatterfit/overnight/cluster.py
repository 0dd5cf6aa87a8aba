"""The same batch on a Dask cluster that already runs: its workers fit, this process writes."""

import logging
import time
import warnings
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.errors import ScatterfitError
from scatterfit.overnight.batch import ended
from scatterfit.overnight.crew import Crew
from scatterfit.overnight.jobs import version

EXTRA = "pip install 'scatterfit[cluster]'"
"""What installs the library."""

_CONNECT_SECONDS = 20.0
_WORKERS_SECONDS = 60.0
_COUNT_AGAIN_SECONDS = 5.0
_QUEUE_DEPTH = 2


class ClusterError(ScatterfitError):
    """A cluster that cannot be reached or used."""


@contextmanager
def cluster_crew(plan, _count, *, address):
    """Give a crew of the workers of a running Dask cluster.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted; its files must be there for the workers under the same path.
    _count : int
        How many there are.
    address : str
        Of the scheduler, such as ``tcp://host:8786``.

    Yields
    ------
    crew : Crew
        Ended with the ``with`` statement; the cluster stays as it is.

    Raises
    ------
    ClusterError
        If the library is missing, the scheduler or its workers do not answer, or they lack the
        files or the same version of scatterfit.
    """
    try:
        from distributed import Client  # noqa: PLC0415 - an extra, slow to load
    except ImportError as error:
        message = f"--cluster needs Dask: {EXTRA}"
        raise ClusterError(message) from error
    plan = replace(plan, chamber=Path(plan.chamber).resolve(), folder=Path(plan.folder).resolve())
    logging.getLogger("distributed").setLevel(logging.CRITICAL)  # what matters comes as an error
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            client = Client(address, timeout=_CONNECT_SECONDS, set_as_default=False)
        except (OSError, TimeoutError, ValueError, TypeError) as error:
            message = (f"{address}: no scheduler of a Dask cluster answers there "
                       f"({_one_line(error)})")
            raise ClusterError(message) from error
        with client:
            _check_workers(client, plan, address)
            patience = (_QUEUE_DEPTH + 1) * (plan.time_limit + plan.grace)
            crew = Crew(plan, client.get_executor, _Window(client), patience=patience)
            with ended(crew):
                yield crew


def _one_line(error):
    return " ".join(str(error).split())[:200] or type(error).__name__


def _check_workers(client, plan, address):
    """Refuse workers that could only produce failures."""
    try:
        client.wait_for_workers(1, timeout=_WORKERS_SECONDS)
        found = client.run(_surroundings, plan.chamber, plan.folder)
    except (OSError, TimeoutError) as error:
        message = (f"{address}: the scheduler has no worker that answers within "
                   f"{_WORKERS_SECONDS:.0f} s")
        raise ClusterError(message) from error
    except (ImportError, AttributeError) as error:
        message = f"{address}: the workers lack scatterfit {version()} ({_one_line(error)})"
        raise ClusterError(message) from error
    for worker, (theirs, missing) in found.items():
        if theirs != version():
            message = (f"{address}: worker {worker} has scatterfit {theirs}, here it is "
                       f"{version()}; install the same everywhere")
            raise ClusterError(message)
        if missing:
            text = (f"{address}: worker {worker} does not see {missing}; the files must be on a "
                    "file system that all share, under the same path")
            raise ClusterError(printable(text))


def _surroundings(chamber, folder):
    """Return, on a worker, its version of scatterfit and the first path that is not there."""
    missing = [str(path) for path in (chamber, folder) if not Path(path).exists()]
    return version(), missing[0] if missing else None


class _Window:
    """How many jobs to hand in at a time: twice the threads, which come and go."""

    def __init__(self, client):
        self._client = client
        self._count = 0
        self._next = 0.0

    def __call__(self):
        """Return the number, counted anew every few seconds."""
        now = time.monotonic()
        if now >= self._next:
            self._next = now + _COUNT_AGAIN_SECONDS
            self._count = _QUEUE_DEPTH * max(1, sum(self._client.nthreads().values()))
        return self._count
