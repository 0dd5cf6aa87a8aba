"""Kills at random moments, and files damaged at random: nothing lost, nothing twice.

Run ``python tests/studies/night/night_safety.py``;
the numbers go to ``results/night_safety.json``. With
``--pulses N`` and ``--files N`` other numbers than 200 pulses and 1,000 damaged files are used.
"""

import argparse
import json
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

import numpy as np
from night_folder import make_night

from scatterfit.overnight.batch import run_batch
from scatterfit.overnight.jobs import Plan
from scatterfit.overnight.results import open_results

HERE = Path(__file__).resolve().parent
_KILLS, _PULSES, _DAMAGED = 20, 200, 1000
_OWN = {"recorded_utc", "fitted_utc"}


def command(chamber, traces, out):
    """Return the words of the batch command."""
    return [sys.executable, "-m", "scatterfit", "batch", chamber, traces, "--out", out]


def rows_of(path):
    """Return trace to all of its columns but the times of the run."""
    return {row["trace"]: {name: cell for name, cell in row.items() if name not in _OWN}
            for row in open_results(path).rows()}


def stored(path):
    """Return how many pulses a ledger has, 0 before there is one."""
    try:
        return len(open_results(path))
    except Exception:  # noqa: BLE001 - it is just being made
        return 0


def kills(folder, pulses):
    """Kill a batch at 20 random moments; compare with one that was left alone."""
    chamber, traces = make_night(folder, pulses, samples=1000)
    killed, alone = folder / "killed.sqlite", folder / "alone.sqlite"
    rng = np.random.default_rng(11)
    targets = np.sort(rng.integers(0, pulses - 5, _KILLS))
    reached = []
    for target in targets:
        with subprocess.Popen(command(chamber, traces, killed), stdout=subprocess.DEVNULL,
                              stderr=subprocess.DEVNULL, start_new_session=True) as process:
            while stored(killed) < target and process.poll() is None:
                time.sleep(0.01)
            time.sleep(float(rng.uniform(0, 0.3)))
            os.killpg(process.pid, signal.SIGKILL)
        reached.append(stored(killed))
    for out in (killed, alone):
        subprocess.run(command(chamber, traces, out), check=True, capture_output=True)
    one, other = rows_of(killed), rows_of(alone)
    return {"pulses": pulses, "kills": _KILLS, "stored_at_each_kill": reached,
            "rows": len(one), "same_as_left_alone": one == other,
            "differing": sum(one.get(trace) != row for trace, row in other.items())}


def damaged(folder, files):
    """Fit files damaged at random; count what came of them."""
    sys.path.insert(0, str(HERE.parent / "tests"))
    from test_batch import mutated

    chamber, good = make_night(folder, 10, samples=1000)
    contents = [path.read_bytes() for path in sorted(good.iterdir())]
    bad = folder / "bad"
    bad.mkdir()
    rng = np.random.default_rng(12)
    for index in range(files):
        content = mutated(contents[index % len(contents)], rng)
        (bad / f"m{index:04d}.csv").write_bytes(content)
    begun = time.perf_counter()
    run_batch(Plan(chamber, bad, time_limit=60.0), folder / "bad.sqlite")
    reasons = Counter()
    verdicts = Counter()
    surprises = []
    for row in open_results(folder / "bad.sqlite").rows():
        verdicts[row["verdict"]] += 1
        reasons.update(filter(None, row["reasons"].split(";")))
        if row["reasons"] in {"internal-error", "worker-died", "took-too-long"}:
            [reason] = open_results(folder / "bad.sqlite").pulse(row["trace"]).reasons
            surprises.append(reason.text)
    return {"files": files, "rows": sum(verdicts.values()), "verdicts": dict(verdicts),
            "reasons": dict(reasons), "surprises": surprises,
            "seconds": time.perf_counter() - begun}


def main():
    """Measure and store."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pulses", type=int, default=_PULSES)
    parser.add_argument("--files", type=int, default=_DAMAGED)
    sizes = parser.parse_args()
    found = {}
    for study, size in ((kills, sizes.pulses), (damaged, sizes.files)):
        folder = Path(tempfile.mkdtemp())
        try:
            found[study.__name__] = study(folder, size)
        finally:
            shutil.rmtree(folder)
        print(json.dumps(found[study.__name__], indent=2), flush=True)
    (HERE / "results" / "night_safety.json").write_text(json.dumps(found, indent=2) + "\n",
                                                        encoding="utf-8")


if __name__ == "__main__":
    main()
