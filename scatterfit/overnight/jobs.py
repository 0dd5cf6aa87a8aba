"""What there is to do: one trace is one job, and a plan says how all of them are done."""

import hashlib
import json
import os
import stat
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from importlib import metadata
from pathlib import Path

TIME_LIMIT_SECONDS = 120.0
"""Longest time that one pulse may take by default."""

_BLOCK = 1 << 20


@dataclass(frozen=True)
class Plan:
    """How the pulses of a night are fitted; the same for all of them."""

    chamber: Path
    """The chamber file."""
    folder: Path
    """Where the traces are."""
    overrides: Mapping[str, object] = field(default_factory=dict)
    """Key path to value, above all other sources."""
    time_limit: float = TIME_LIMIT_SECONDS
    """Longest time that one pulse may take [s]."""
    grace: float = 5.0
    """Time after the limit at which a worker process that does not react is ended [s]."""
    fit: Callable | None = None
    """In place of ``scatterfit.fit_file``, with the same arguments."""
    compiled: bool | None = None
    """Whether workers load compiled loops; by default a batch of many traces does."""


@dataclass(frozen=True)
class Job:
    """One trace to be fitted."""

    trace: str
    """Its name in the ledger: path from the folder, ``/`` between parts."""
    path: bytes | None = None
    """The same as the system spells it, where that is not UTF-8 text."""
    why: str = "new"
    """Why it is to be done."""

    def file(self, folder):
        """Return the path of the trace's file.

        Parameters
        ----------
        folder : Path
            Where the traces are.
        """
        name = self.trace if self.path is None else os.fsdecode(self.path)
        return Path(folder) / name


@dataclass(frozen=True)
class Seen:
    """A file as it was when it was read."""

    size: int | None = None
    """[byte]."""
    mtime_ns: int | None = None
    """Last change of the content [ns since 1970]."""
    ctime_ns: int | None = None
    """Last change of anything about the file [ns since 1970]."""


def seen(path):
    """Return what tells a file from its later versions without reading it.

    Parameters
    ----------
    path : str or Path
        A file.

    Returns
    -------
    state : Seen
        Without numbers where there is no such file.
    is_file : bool
        Whether it is a plain file, which can be read without waiting for a writer.
    """
    try:
        state = Path(path).stat()
    except (OSError, ValueError):
        return Seen(), False
    times = Seen(state.st_size, state.st_mtime_ns, state.st_ctime_ns)
    return times, stat.S_ISREG(state.st_mode)


def hash_of(path):
    """Return the hash of a file's bytes.

    Parameters
    ----------
    path : str or Path
        A file.

    Returns
    -------
    sha256 : str or None
        ``None`` where it cannot be read.
    """
    digest = hashlib.sha256()
    try:
        with Path(path).open("rb") as file:
            while block := file.read(_BLOCK):
                digest.update(block)
    except (OSError, ValueError):
        return None
    return digest.hexdigest()


def set_outside(path, folder, overrides):
    """Return what is set for a trace outside the chamber file and the trace itself.

    Parameters
    ----------
    path : str or Path
        The trace.
    folder : str or Path
        Where the traces are.
    overrides : mapping
        Those of the plan, which win over ``pulses.csv``.

    Returns
    -------
    text : str
        Key path to value as JSON, in the order of the keys.

    Raises
    ------
    ChamberFileError
        If a ``pulses.csv`` cannot be understood.
    """
    from scatterfit.files_pulses import pulse_rows  # noqa: PLC0415 - loads no sooner than used

    values = {}
    for row in pulse_rows(path, folder).values():
        values |= row
    return json.dumps(values | dict(overrides), sort_keys=True, default=str)


def version():
    """Return the version of scatterfit, a part of what a result depends on.

    Returns
    -------
    version : str
        For example ``0.1.0``.
    """
    return metadata.version("scatterfit")
