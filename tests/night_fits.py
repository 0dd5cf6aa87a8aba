"""Cheap stand-ins for a fit, and folders of small traces, for tests of the night.

Worker processes import this module by its name, so its functions may be handed to them.
"""

import hashlib
import os
import re
import signal
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

from scatterfit.files import read_trace
from scatterfit.measured_pulse.record import (
    ChannelView,
    Concentration,
    MeasuredPulse,
    Quantity,
    Reason,
)
from scatterfit.overnight.jobs import Plan
from scatterfit.report.template import chamber_template

SAMPLES = 40


def make_folder(folder, count, *, start=0):
    """Write a chamber file and so many small traces; return a plan for them."""
    traces = folder / "night"
    traces.mkdir(parents=True, exist_ok=True)
    for index in range(start, start + count):
        write_trace(traces / f"p{index:03d}.csv", index)
    chamber = folder / "bench.toml"
    if not chamber.exists():
        chamber.write_text(chamber_template(), encoding="utf-8")
    return Plan(chamber, traces, fit=plain, time_limit=20.0)


def write_trace(path, number):
    """Write a small trace that no other number has."""
    rows = [f"{0.1 * i:.1f},{0.01 * ((i * 7 + number) % 100):.2f},1.0,80.0" for i in range(SAMPLES)]
    header = "time_ms,scatter1_V,transmitted_V,pressure_kPa"
    path.write_text("\n".join([f"# pulse {number}", header, *rows]) + "\n", encoding="utf-8")


def plain(_chamber, trace, *, overrides=None, folder=None):
    """Return a result that depends on the trace's bytes alone, with two reasons in it."""
    record = read_trace(trace)
    number = int(hashlib.sha256(Path(trace).read_bytes()).hexdigest()[:8], 16) / 2**32
    time_s = record.time
    column = next(iter(record.columns))
    view = ChannelView(column, "scattered", time_s, record.columns[column],
                       np.full(len(time_s), number), np.zeros(len(time_s)),
                       np.ones(len(time_s), bool))
    return MeasuredPulse(
        str(trace), "accepted",
        reasons=(Reason("caution", "one thing"), Reason("second", f"another; {folder is None}")),
        final_radius=Quantity(1e-6 * (1 + number), 1e-9),
        final_time=float(time_s[-1]),
        concentration=Concentration(1e9 * (1 + number), 1e7, 8e6, 6e6),
        growth_scale=Quantity(1.0 + 0.01 * number, 0.002),
        chi2_reduced=1.0 + number,
        residual_lag1=0.01,
        provenance={"overrides": dict(overrides or {}), "trace_sha256": record.sha256},
        channels=(view,),
    )


def by_name(chamber, trace, **settings):
    """Do what the trace's name says: die, throw, hang; else as `plain`."""
    name = Path(trace).name
    if name.startswith("dies"):
        os.kill(os.getpid(), signal.SIGKILL)
    if name.startswith("throws"):
        message = "a\nsurprise"
        raise KeyError(message)
    if name.startswith("leaves"):
        raise SystemExit(3)
    if name.startswith("loops"):
        while True:
            time.sleep(0)
    if name.startswith("stuck"):  # inside a compiled loop that never looks at Python again
        re.match(r"(a+)+$", "a" * 64 + "b")
    return plain(chamber, trace, **settings)


def mixed(chamber, trace, **settings):
    """Give verdicts and numbers of all kinds, by the number in the trace's name."""
    pulse = plain(chamber, trace, **settings)
    number = int(Path(trace).stem[1:4])
    if number % 10 == 3:
        reason = Reason("no-cloud", "no rise of the light <b>at all</b>")
        return replace(pulse, verdict="rejected", final_radius=None, concentration=None,
                       growth_scale=None, reasons=(reason,), upper_limit=1e5)
    if number % 10 == 7:
        return replace(pulse, verdict="ambiguous", reasons=(Reason("rival", "another lobe"),))
    if number % 10 == 9:
        return MeasuredPulse(str(trace), "failed", (Reason("unusable", "row 3: not a number"),))
    far = 5.0 if number == 20 else 1.0
    return replace(pulse, reasons=(), final_radius=Quantity(far * 1e-6 * (1 + number / 1e4), 1e-9),
                   growth_scale=Quantity(1 - number / 1e3, 1e-3), chi2_reduced=1 + number / 1e3)


def logged(chamber, trace, **settings):
    """Note every call in a file beside the folder, take 10 ms, then do as `plain`."""
    log = Path(settings["folder"]).parent / "calls.log"
    handle = os.open(log, os.O_WRONLY | os.O_APPEND | os.O_CREAT)
    os.write(handle, f"{Path(trace).name}\n".encode())
    os.close(handle)
    time.sleep(0.01)
    return plain(chamber, trace, **settings)


def surroundings(_chamber, trace, **_settings):
    """Tell how the worker is set up, in the words of a reason."""
    threads = os.environ.get("OPENBLAS_NUM_THREADS")
    ignored = signal.getsignal(signal.SIGINT) is signal.SIG_IGN
    return MeasuredPulse(str(trace), "rejected", (Reason("set-up", f"{threads} {ignored}"),))
