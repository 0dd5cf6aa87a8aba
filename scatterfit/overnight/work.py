"""One job in a worker: whatever happens to a pulse, a row comes of it."""

import json
import time
import tomllib
import traceback
from contextlib import nullcontext
from dataclasses import asdict, dataclass, field
from functools import lru_cache
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.errors import ChamberFileError, ScatterfitError
from scatterfit.measured_pulse.record import MeasuredPulse, Reason
from scatterfit.overnight.columns import STATED, flat_row
from scatterfit.overnight.deadline import TookTooLongError, last_resort, time_limit
from scatterfit.overnight.jobs import Job, Plan, Seen, hash_of, seen, set_outside, version
from scatterfit.overnight.thin import thinned

REASONS = {
    "unreadable": "the trace's file cannot be read",
    "not-a-bench": "an override of this pulse does not describe a bench",
    "took-too-long": "the fit did not end within the limit of time",
    "worker-died": "the process that fitted the pulse ended before it was done",
    "internal-error": "the fit broke in a way that nobody foresaw",
}
"""Code to meaning of the reasons that a night adds to those of a pulse."""

_own_process = False


@dataclass(frozen=True)
class Outcome:
    """What came of a job, ready to be stored; plain values only, as it crosses processes."""

    job: Job
    row: dict
    """The flat columns."""
    result: str
    """The result as JSON."""
    thinned: str = "[]"
    """Trace and fit with fewer points as JSON."""
    overrides: str = "{}"
    """Every override that held, as JSON."""
    set_outside: str = "{}"
    """Those from outside the trace, as JSON."""
    trace_sha256: str | None = None
    chamber_sha256: str | None = None
    version: str = field(default_factory=version)
    state: Seen = field(default_factory=Seen)
    """The file as it was when it was read."""
    read_ns: int = 0
    """When it was read [ns since 1970]."""
    seconds: float = 0.0
    """How long the job took [s]."""


def own_this_process():
    """Allow a worker to end its process where nothing else stops a fit."""
    global _own_process  # noqa: PLW0603 - said once, when the process starts
    _own_process = True


def nothing():
    """Do nothing, to see whether a worker is alive."""


def measure(plan: Plan, job: Job) -> Outcome:
    """Fit one trace of a night.

    Parameters
    ----------
    plan : Plan
        How.
    job : Job
        Which.

    Returns
    -------
    outcome : Outcome
        Always: where the trace or the fit failed, with verdict ``failed`` and the reason.
    """
    if plan.compiled and plan.fit is None:
        # Once a process, and outside the limit of time, which is the pulse's.
        from scatterfit.files_compiled import load_compiled  # noqa: PLC0415 - loads the numerics

        load_compiled()
    begun, read_ns = time.monotonic(), time.time_ns()
    path = job.file(plan.folder)
    state, is_file = seen(path)
    inputs = {
        "trace_sha256": hash_of(path) if is_file else None,
        "chamber_sha256": hash_of(plan.chamber),
        "state": state,
        "read_ns": read_ns,
        "set_outside": _outside(plan, path),
    }
    guard = last_resort(plan.time_limit + plan.grace) if _own_process else nullcontext()
    try:
        with guard, time_limit(plan.time_limit):
            made = _ready(plan, job, _fitted(plan, path, is_file))
    except TookTooLongError:
        text = (f"not done within {plan.time_limit:g} s: look at the trace, or raise "
                "--time-limit-s")
        made = failed(plan, job, "took-too-long", text)
    except ChamberFileError as error:
        made = failed(plan, job, "not-a-bench", str(error))
    except (Exception, SystemExit) as error:  # noqa: BLE001 - the row says what happened
        made = failed(plan, job, "internal-error", _described(error))
    return Outcome(job, **made, **inputs, seconds=time.monotonic() - begun)


def _outside(plan, path):
    """Return what was set outside the trace; an error in it is the fit's to report."""
    try:
        return set_outside(path, plan.folder, plan.overrides)
    except ChamberFileError:
        return json.dumps(dict(plan.overrides), sort_keys=True, default=str)


def _fitted(plan, path, is_file):
    if not is_file:
        what = "is not a plain file" if path.exists() else "there is no such file any more"
        return _failure(str(path), "unreadable", f"{path}: {what}")
    fit = plan.fit
    if fit is None:
        from scatterfit.files_fit import fit_file as fit  # noqa: PLC0415 - loads the numerics
    return fit(plan.chamber, path, overrides=dict(plan.overrides), folder=plan.folder)


def _failure(trace, code, text):
    return MeasuredPulse(trace, "failed", (Reason(code, printable(text)),))


def failed(plan, job, code, text):
    """Return the stored parts of a pulse that gave no result.

    Parameters
    ----------
    plan : Plan
        Of the night.
    job : Job
        The pulse.
    code : str
        One of `REASONS`.
    text : str
        What happened and what would help.

    Returns
    -------
    parts : dict
        For `Outcome`.
    """
    return _ready(plan, job, _failure(job.trace, code, text))


def _ready(plan, job, pulse):
    """Return row and texts of a result, named as the ledger names the trace."""
    result = pulse.to_dict() | {"trace": job.trace}
    overrides = result["provenance"].get("overrides") or {}
    return {
        "row": flat_row(result, _stated(plan.chamber, overrides)),
        "result": json.dumps(result, allow_nan=False, ensure_ascii=False, default=str),
        "thinned": json.dumps(thinned(pulse.channels), allow_nan=False, separators=(",", ":")),
        "overrides": json.dumps(overrides, ensure_ascii=False, default=str),
    }


def _stated(chamber, overrides):
    """Return what the chamber file states of `STATED`, with this pulse's own values."""
    try:
        tables = dict(_tables(Path(chamber).read_bytes()))
    except OSError:
        tables = {}
    for path, value in overrides.items():
        table, _, name = path.partition(".")
        if table in STATED:
            tables[table] = {**tables.get(table, {}), name: value}
    return tables


@lru_cache(maxsize=4)
def _tables(content):
    try:
        found = tomllib.loads(content.decode("utf-8-sig"))
    except ValueError:
        return ()
    return tuple((name, found[name]) for name in STATED if isinstance(found.get(name), dict))


def _described(error):
    """Return an unforeseen error on one line, with the place in our code where it arose."""
    what = str(error) if isinstance(error, ScatterfitError) else f"{type(error).__name__}: {error}"
    frames = [frame for frame in traceback.extract_tb(error.__traceback__)
              if "scatterfit" in Path(frame.filename).parts]
    where = f" ({Path(frames[-1].filename).name}, line {frames[-1].lineno})" if frames else ""
    return f"{what[:300]}{where}; please report it with the files"


def lost(plan, job, seconds):
    """Return the outcome of a job whose worker process ended.

    Parameters
    ----------
    plan : Plan
        Of the night.
    job : Job
        The job, tried alone.
    seconds : float
        How long it had been at work [s].

    Returns
    -------
    outcome : Outcome
        Verdict ``failed``.
    """
    if seconds >= plan.time_limit:
        code, text = "took-too-long", (
            f"not done within {plan.time_limit:g} s, and could not be stopped inside the fit: "
            "look at the trace")
    else:
        code, text = "worker-died", (
            "the process that fitted this pulse ended before it was done, also when it had the "
            "machine to itself: too little memory, or a fault in a library; scatterfit batch "
            "--retry-failed tries it again")
    return _without_reading(plan, job, code, text, seconds)


def broken(plan, job, error):
    """Return the outcome of a job whose executor gave an error in place of a result.

    Parameters
    ----------
    plan : Plan
        Of the night.
    job : Job
        The job.
    error : BaseException
        What the executor gave.

    Returns
    -------
    outcome : Outcome
        Verdict ``failed``.
    """
    code = "worker-died" if type(error).__name__ == "KilledWorker" else "internal-error"
    return _without_reading(plan, job, code, _described(error), 0.0)


def _without_reading(plan, job, code, text, seconds):
    path = job.file(plan.folder)
    state, is_file = seen(path)
    return Outcome(
        job, **failed(plan, job, code, text),
        set_outside=_outside(plan, path),
        trace_sha256=hash_of(path) if is_file else None,
        chamber_sha256=hash_of(plan.chamber),
        state=state, read_ns=time.time_ns(), seconds=seconds,
    )


def as_columns(outcome):
    """Return the columns of the ledger's table of pulses for an outcome.

    Parameters
    ----------
    outcome : Outcome
        What came of a job.

    Returns
    -------
    columns : dict
        Column name to value.
    """
    return outcome.row | asdict(outcome.state) | {
        "overrides": outcome.overrides,
        "set_outside": outcome.set_outside,
        "trace_sha256": outcome.trace_sha256,
        "chamber_sha256": outcome.chamber_sha256,
        "version": outcome.version,
        "read_ns": outcome.read_ns,
        "fit_seconds": outcome.seconds,
    }
