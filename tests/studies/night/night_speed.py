"""How fast a night is fitted, where the time goes, and what the parent keeps in memory.

Run ``python tests/studies/night/night_speed.py``;
the numbers go to ``results/night_speed.json``. With
``--pulses N`` another number than 1,000 is fitted.
"""

import argparse
import cProfile
import json
import os
import pstats
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from night_folder import make_night

from scatterfit.compiled import use_compiled
from scatterfit.files import read_trace
from scatterfit.measured_pulse.record import MeasuredPulse
from scatterfit.overnight.batch import Choice, run_batch
from scatterfit.overnight.jobs import Job, Plan
from scatterfit.overnight.pool import processors
from scatterfit.overnight.work import measure

HERE = Path(__file__).resolve().parent
_ALONE = 100
_FEW, _MANY = 1000, 10_000


def nothing_to_fit(_chamber, trace, **_settings):
    """Return a result without reading anything, to see what the rest costs."""
    return MeasuredPulse(str(trace), "rejected")


def batch(chamber, traces, out, workers, fit=None):
    """Fit all traces in a process of its own; return seconds, pulses and peak memory [MB]."""
    code = ("import json, sys, night_speed as n; print(json.dumps(n.batch_here(*sys.argv[1:])))")
    words = [sys.executable, "-c", code, *map(str, (chamber, traces, out, workers, fit or ""))]
    done = subprocess.run(words, capture_output=True, text=True, check=True, cwd=HERE)
    return json.loads(done.stdout)


def batch_here(chamber, traces, out, workers, fit):
    """Do what `batch` says, in this process."""
    plan = Plan(Path(chamber), Path(traces), fit=globals()[fit] if fit else None)
    begun = time.perf_counter()
    report = run_batch(plan, out, Choice(workers=int(workers)))
    status = Path("/proc/self/status").read_text(encoding="utf-8")
    peak = next(line.split()[1] for line in status.splitlines() if line.startswith("VmHWM"))
    times = os.times()
    return {"pulses": report.fitted, "seconds": time.perf_counter() - begun,
            "fitting_seconds": report.seconds, "parent_peak_MB": int(peak) / 1024,
            "parent_cpu_seconds": times.user + times.system,
            "verdicts": dict(report.verdicts)}


def reading_alone(traces):
    """Return the seconds that reading every trace takes in one process."""
    begun = time.perf_counter()
    for path in sorted(traces.iterdir()):
        read_trace(path)
    return time.perf_counter() - begun


def one_process(chamber, traces):
    """Return pulses a second, by wall clock and by processor time, and the profile of the fit.

    The same again, by processor time, with compiled loops.
    """
    plan = Plan(chamber, traces)
    names = sorted(path.name for path in traces.iterdir())[:_ALONE]
    measure(plan, Job(names[0]))  # loads the kernel
    begun, used = time.perf_counter(), time.process_time()
    for name in names:
        measure(plan, Job(name))
    wall, cpu = time.perf_counter() - begun, time.process_time() - used
    profile = cProfile.Profile()
    profile.enable()
    for name in names[:30]:
        measure(plan, Job(name))
    profile.disable()
    quick = Plan(chamber, traces, compiled=True)
    measure(quick, Job(names[0]))
    used = time.process_time()
    for name in names:
        measure(quick, Job(name))
    compiled = time.process_time() - used
    use_compiled(False)
    return len(names) / wall, len(names) / cpu, shares(profile), len(names) / compiled


def shares(profile):
    """Return the share of the time in the stages of a pulse, by cumulative time."""
    stats = pstats.Stats(profile).stats
    total = max(entry[3] for entry in stats.values())
    wanted = {("work.py", "measure"), ("files_trace.py", "read_trace"), ("jobs.py", "hash_of"),
              ("prepare.py", "prepare"), ("search.py", "search"), ("fit.py", "fit_pulse"),
              ("fit.py", "refine"), ("uncertainty.py", "posterior"), ("work.py", "_ready"),
              ("files.py", "load_pulse"), ("files_fit.py", "fit_file")}
    found = {}
    for (file, _, name), entry in stats.items():
        if (Path(file).name, name) in wanted:
            found[f"{Path(file).stem}.{name}"] = round(entry[3] / total, 3)
    return dict(sorted(found.items(), key=lambda item: -item[1]))


def main():
    """Measure and store."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pulses", type=int, default=_FEW)
    count = parser.parse_args().pulses
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        chamber, traces = make_night(folder, count)
        found = {"processors": processors(), "load_average_before": os.getloadavg()[0],
                 "pulses": count, "samples": 5000, "reading_alone_seconds": reading_alone(traces)}
        wall, cpu, profile, compiled = one_process(chamber, traces)
        found |= {"one_process_per_second": wall, "one_process_per_cpu_second": cpu,
                  "one_process_compiled_per_cpu_second": compiled, "profile_shares": profile}
        found["batch"] = batch(chamber, traces, folder / "a.sqlite", processors())
        rate = found["batch"]["pulses"] / found["batch"]["seconds"]
        found |= {"batch_per_second": rate, "batch_over_one_process": rate / wall,
                  "batch_over_reading": found["batch"]["seconds"] / found["reading_alone_seconds"]}
        again = batch(chamber, traces, folder / "a.sqlite", processors())
        found["resume_with_nothing_to_do_seconds"] = again["seconds"]
        for size in (_FEW, _MANY):
            many = folder / f"many-{size}"
            many.mkdir()
            for index in range(size):
                (many / f"p{index:06d}.csv").write_text(f"{index}\n", encoding="utf-8")
            found[f"without_fits_{size}"] = batch(
                chamber, many, folder / f"{size}.sqlite", processors(), "nothing_to_fit")
        found["load_average_after"] = os.getloadavg()[0]
    (HERE / "results" / "night_speed.json").write_text(json.dumps(found, indent=2) + "\n",
                                                       encoding="utf-8")
    print(json.dumps(found, indent=2))


if __name__ == "__main__":
    main()
