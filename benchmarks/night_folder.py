"""Folders of simulated traces for the benchmarks of the night."""

from pathlib import Path

import numpy as np

import scatterfit
from scatterfit.files import write_trace
from scatterfit.report.template import chamber_template

_KINDS = 12


def make_night(folder, count, *, samples=5000, seed=1):
    """Write a chamber file and so many traces that all differ; return both places.

    Numbers of droplets span a factor of 30; the noise is new in every trace.

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
    rng = np.random.default_rng(seed)
    kinds = [scatterfit.simulate(bench, number=float(number), rate=samples / 0.1,
                                 seed=int(rng.integers(1 << 30)))[0]
             for number in np.geomspace(5e8, 1.5e10, min(_KINDS, count))]
    for index in range(count):
        pulse = kinds[index % len(kinds)]
        columns = {name: values[:samples] + 0.002 * np.std(values) * rng.standard_normal(samples)
                   for name, values in pulse.columns.items()}
        write_trace(traces / f"p{index:05d}.csv", pulse.time[:samples], columns)
    return chamber, traces
