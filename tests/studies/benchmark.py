"""Time one pulse: from the shell, the inversion alone, a first kernel, and the direct way.

Prints a table; asserts nothing, for machines differ. Run it on a machine that does nothing else:

    python tests/studies/benchmark.py

The direct way is lmfit around miepython, called at each sample for one direction, with the law
r^2 = k (t - t0) and a scale: three parameters and an offset. A whole fit of it takes many minutes,
so its cost is the measured time of a residual on the whole trace times the number of residuals
that the same fit needs on every fiftieth sample.
"""

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
BENCH = ROOT / "examples" / "bench.toml"
RUNS = 7


def seconds(command):
    """Return the wall time of a command [s]."""
    start = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    return time.perf_counter() - start


def shell_ratio(chamber, trace):
    """Return medians of `scatterfit fit` and of `import lmfit`, run in turn [s]."""
    ours, theirs = [], []
    for _ in range(RUNS):
        ours.append(seconds([sys.executable, "-m", "scatterfit", "fit", str(chamber), str(trace)]))
        theirs.append(seconds([sys.executable, "-c", "import lmfit"]))
    return np.median(ours), np.median(theirs)


def inversion(apparatus, trace):
    """Return medians of the whole analysis of a trace in memory, and of the inversion in it [s].

    Each by the array code and by compiled loops, in turn. The inversion is search and refinement;
    the whole has the reading of the pressure, noise, uncertainty and verdict as well.
    """
    import scatterfit
    from scatterfit.compiled import use_compiled
    from scatterfit.measured_pulse import measure

    spent, search = [], measure.fit_pulse

    def timed(*given):
        start = time.process_time()
        found = search(*given)
        spent.append(time.process_time() - start)
        return found

    measure.fit_pulse = timed
    compiled = scatterfit.load_compiled()
    times = {True: ([], []), False: ([], [])}
    for run in range(RUNS + 1):
        for on in (True, False):
            use_compiled(on and compiled)
            start = time.process_time()
            scatterfit.fit(apparatus, trace)
            whole = time.process_time() - start
            if run:
                times[on][0].append(whole)
                times[on][1].append(spent[-1])
    use_compiled(False)
    measure.fit_pulse = search
    return {on: tuple(np.median(part) for part in parts) for on, parts in times.items()}


def first_kernel(apparatus):
    """Return the time to build a bench's first kernel, the check with miepython included [s]."""
    from scatterfit.cloud_optics.build import build_kernel

    start = time.perf_counter()
    build_kernel(apparatus, 1.0002, [1.334])
    return time.perf_counter() - start


def direct(apparatus, trace):
    """Return the time of one direct residual [s] and how many residuals a fit needs."""
    import lmfit
    import miepython

    detector = apparatus.detectors[0]
    signal, when = trace.columns[detector.column], trace.time
    wavenumber = 2.0 * np.pi * 1.0002 / apparatus.beam.wavelength
    cosine = np.array([np.cos(detector.angle)])

    def light(radius):
        return np.array([
            abs(miepython.S1_S2(1.334, wavenumber * r, cosine, norm="wiscombe")[0][0]) ** 2
            for r in radius
        ])

    def residual(values, step):
        age = np.maximum(when[::step] - values["t0"], 0.0)
        radius = np.sqrt(values["k"] * age) + 1e-9
        return signal[::step] - values["offset"] - values["scale"] * light(radius)

    parameters = lmfit.Parameters()
    parameters.add("k", value=3.2e-11, min=1e-12)
    parameters.add("t0", value=8.4e-3)
    parameters.add("scale", value=1e-3, min=0.0)
    parameters.add("offset", value=0.05)
    count = lmfit.minimize(residual, parameters, args=(50,)).nfev
    start = time.perf_counter()
    residual(parameters.valuesdict(), 1)
    return time.perf_counter() - start, count


def main():
    """Print the table."""
    import scatterfit
    from scatterfit.files_write import write_trace

    apparatus = scatterfit.read_chamber(BENCH)
    pulse = scatterfit.simulate(apparatus, number=4e9, seed=5)[0]
    with tempfile.TemporaryDirectory() as folder:
        trace = Path(folder) / "pulse.csv"
        write_trace(trace, pulse.time, pulse.columns)
        alone = inversion(apparatus, scatterfit.read_trace(trace))
        plain, quick = alone[False], alone[True]
        ours, theirs = shell_ratio(BENCH, trace)
        one, count = direct(apparatus, scatterfit.read_trace(trace))
    kernel = first_kernel(apparatus)
    rows = [
        ("samples", f"{pulse.time.size}"),
        ("shell to result, warm kernel", f"{ours:.2f} s"),
        ("import lmfit alone", f"{theirs:.2f} s"),
        ("ratio", f"{ours / theirs:.2f}"),
        ("whole analysis, array code", f"{1e3 * plain[0]:.0f} ms"),
        ("whole analysis, compiled loops", f"{1e3 * quick[0]:.0f} ms"),
        ("inversion alone, array code", f"{1e3 * plain[1]:.0f} ms"),
        ("inversion alone, compiled loops", f"{1e3 * quick[1]:.0f} ms"),
        ("first kernel", f"{kernel:.2f} s"),
        ("direct way: one residual", f"{one:.2f} s"),
        ("direct way: residuals a fit needs", f"{count}"),
        ("direct way over ours", f"{one * count / plain[0]:.0f}"),
    ]
    for name, value in rows:
        sys.stdout.write(f"{name:<36}{value:>12}\n")


if __name__ == "__main__":
    main()
