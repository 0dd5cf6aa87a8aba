"""Folders of simulated traces for the benchmarks of the night."""

from pathlib import Path

import numpy as np

import scatterfit
from scatterfit.files import write_trace
from scatterfit.report.template import chamber_template

_KINDS = 12


def make_night(folder, count, *, samples=5000, seed=1):
    """Write a chamber file and so many traces that all differ; return both places.

    Numbers of droplets span a factor of 30; the noise is new in every trace. Those of more
    droplets reach the detector's full scale, as happens in a night.

    Parameters
    ----------
    folder : Path
        Where to write.
    count, samples : int
        Traces, and samples in each.
    seed : int
        Of the random numbers.

    Returns
    -------
    chamber, traces : Path
        Chamber file and folder of traces.
    """
    folder = Path(folder)
    traces = folder / "night"
    traces.mkdir(parents=True, exist_ok=True)
    chamber = folder / "bench.toml"
    chamber.write_text(chamber_template(), encoding="utf-8")
    bench = scatterfit.read_chamber(chamber)
    numbers = np.geomspace(2e8, 6e9, min(_KINDS, count))
    for kind, number in enumerate(numbers.tolist()):
        names = range(kind, count, len(numbers))
        pulses = scatterfit.simulate(bench, count=len(names), number=number, rate=samples / 0.1,
                                     seed=seed + kind)
        for index, pulse in zip(names, pulses, strict=True):
            write_trace(traces / f"p{index:05d}.csv", pulse.time, pulse.columns)
    return chamber, traces
