"""Who holds a claim on a job, and whether that process is certainly gone.

A claim ends by itself after its lease. Where the claimant ran on this machine and is no more, as
after a kill, there is no need to wait for that.
"""

import os
import socket
import uuid
from pathlib import Path

_PROC = Path("/proc")


def this_owner():
    """Return a name for this process that no other process has.

    Returns
    -------
    owner : str
        Machine, process and its start where the system tells them, and a random part.
    """
    random = uuid.uuid4().hex[:12]
    return f"{_machine()}|{os.getpid()}|{_start_of(os.getpid())}|{random}"


def is_gone(owner):
    """Return whether the process that a name stands for has certainly ended.

    Parameters
    ----------
    owner : str
        As `this_owner` made it, perhaps on another machine.

    Returns
    -------
    gone : bool
        ``False`` where that cannot be known.
    """
    machine, _, rest = owner.partition("|")
    pid, _, rest = rest.partition("|")
    start = rest.partition("|")[0]
    if not start or machine != _machine():
        return False
    return _start_of(pid) != start


def _machine():
    """Return a name for the machine and for the set of process numbers that it shows us."""
    try:
        boot = (_PROC / "sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
        numbers = (_PROC / "self/ns/pid").readlink()
    except OSError:
        boot = numbers = ""
    return f"{socket.gethostname()}/{boot}/{numbers}".replace("|", "_")


def _start_of(pid):
    """Return when a process started, in the system's ticks; empty where there is none."""
    try:
        text = (_PROC / str(pid) / "stat").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return ""
    # The name in brackets may hold blanks and brackets; the state follows it, Z is a dead one.
    fields = text.rpartition(")")[2].split()
    return "" if fields[0] in {"Z", "X"} else fields[19]
