"""Kills at random moments, and files damaged at random: nothing lost, nothing twice.

Run ``python tests/studies/night/night_safety.py``;
the numbers go to ``results/night_safety.json``. With
``--pulses N`` and ``--files N`` other numbers than 200 pulses and 1,000 damaged files are used,
``--only damaged`` leaves the stored kills as they are.
"""

import argparse
import json
import os
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections import Counter
from contextlib import closing
from pathlib import Path

import numpy as np
from night_folder import make_night

from scatterfit.overnight.batch import Choice, run_batch
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
    sys.path.insert(0, str(HERE.parents[1]))
    from test_batch import mutated

    chamber, good = make_night(folder, 10, samples=1000)
    contents = [path.read_bytes() for path in sorted(good.iterdir())]
    bad = folder / "bad"
    bad.mkdir()
    rng = np.random.default_rng(12)
    for index in range(files):
        change = mutated if index % 2 else misled
        content = change(contents[index % len(contents)], rng)
        (bad / f"m{index:04d}.csv").write_bytes(content)
    begun = time.perf_counter()
    run_batch(Plan(chamber, bad, time_limit=60.0), folder / "bad.sqlite", Choice(workers=1))
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
            "slowest_fit_seconds": slowest(folder / "bad.sqlite"),
            "seconds": time.perf_counter() - begun}


def slowest(path):
    """Return how long the slowest fit of a ledger took [s]."""
    with closing(sqlite3.connect(path)) as connection:
        return connection.execute("SELECT max(fit_seconds) FROM pulses").fetchone()[0]


def misled(content, rng):
    """Return a trace that can be read but is wrong in its values, as gauges and people make it."""
    lines = content.decode().splitlines()
    head = next(place for place, line in enumerate(lines) if not line.startswith("#"))
    names = lines[head].split(",")
    cells = np.array([line.split(",") for line in lines[head + 1 :]], dtype=object)
    count, column = cells.shape[0], int(rng.integers(1, len(names)))
    first = int(rng.integers(count))
    last = first + int(rng.integers(1, 200))
    numbers = cells[:, column].astype(float)
    kind = int(rng.integers(10))
    if kind == 0:
        cells[first:last, column] = "nan"
    elif kind == 1:
        cells[first, column] = str(rng.choice([1e300, -1e300, 1e-300, 0.0, -5.0, 1e9]))
    elif kind == 2:
        cells[first:last, column] = cells[first, column]
    elif kind == 3:
        cells[:, column] = [repr(float(x)) for x in numbers * 10.0 ** rng.uniform(-6, 6)]
    elif kind == 4:
        cells = cells[np.sort(rng.choice(count, int(rng.integers(20, count)), replace=False))]
    elif kind == 5:
        other = int(rng.integers(1, len(names)))
        cells[:, [column, other]] = cells[:, [other, column]]
    elif kind == 6:
        cells[:, column] = [repr(float(x)) for x in -numbers]
    elif kind == 7:
        cells[:, column] = [repr(float(x)) for x in rng.normal(size=count)]
    elif kind == 8:
        cells[:, column] = [repr(float(x)) for x in numbers[::-1]]
    else:
        cells[:, column] = [repr(float(x)) for x in np.round(numbers, int(rng.integers(0, 3)))]
    lines = [*lines[: head + 1], *(",".join(row) for row in cells)]
    return ("\n".join(lines) + "\n").encode()


def main():
    """Measure and store."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pulses", type=int, default=_PULSES)
    parser.add_argument("--files", type=int, default=_DAMAGED)
    parser.add_argument("--only", choices=("kills", "damaged"))
    sizes = parser.parse_args()
    results = HERE / "results" / "night_safety.json"
    found = json.loads(results.read_text(encoding="utf-8")) if sizes.only else {}
    for study, size in ((kills, sizes.pulses), (damaged, sizes.files)):
        if sizes.only and study.__name__ != sizes.only:
            continue
        folder = Path(tempfile.mkdtemp())
        try:
            found[study.__name__] = study(folder, size)
        finally:
            shutil.rmtree(folder)
        print(json.dumps(found[study.__name__], indent=2), flush=True)
    results.write_text(json.dumps(found, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
