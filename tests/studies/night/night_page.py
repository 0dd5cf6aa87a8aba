"""How long the page of 5,000 pulses takes to be written, to open and to sort in a browser.

Run ``python tests/studies/night/night_page.py``; the numbers go to ``results/night_page.json``.
"""

import json
import os
import sys
import tempfile
import time
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import numpy as np
from night_folder import make_night

from scatterfit.overnight.columns import flat_row
from scatterfit.overnight.jobs import Job, Plan, Seen
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.work import measure
from scatterfit.report.page import write_page

HERE = Path(__file__).resolve().parent
_PULSES = 5000
_SCRIPT = """
  const clock = (act) => {
    const begun = performance.now();
    act();
    document.body.getBoundingClientRect();
    return Math.round(performance.now() - begun);
  };
  const entry = performance.getEntriesByType("navigation")[0];
  found.opened_ms = Math.round(performance.now());
  found.read_ms = Math.round(entry.responseEnd);
  found.sort_ms = {};
  for (const key of ["final_radius_um", "chi2_reduced", "trace", "verdict", "recorded"]) {
    found.sort_ms[key] = clock(() => document.querySelector(`#head [data-key="${key}"]`).click());
  }
"""


def big_ledger(path, folder):
    """Write a ledger of 5,000 pulses: 12 real fits, with numbers varied."""
    chamber, traces = make_night(folder, 12)
    plan = Plan(chamber, traces)
    fitted = [measure(plan, Job(name.name)) for name in sorted(traces.iterdir())]
    rng = np.random.default_rng(3)
    with closing(Ledger(path)) as ledger:
        with ledger.writing():
            for index in range(_PULSES):
                ledger.put(Job(f"p{index:05d}.csv"), "new")
        while jobs := ledger.claim(500):
            ledger.store([_varied(fitted[index % 12], job, rng) for index, job in enumerate(jobs)])


def _varied(outcome, job, rng):
    result = json.loads(outcome.result) | {"trace": job.trace}
    for key in ("final_radius_um", "concentration_per_cm3", "growth_scale"):
        if result[key] is not None:
            result[key]["value"] *= float(np.exp(0.01 * rng.standard_normal()))
    second = 1_700_000_000 + 7 * int(job.trace[1:6])
    return replace(outcome, job=job, row=flat_row(result), result=json.dumps(result),
                   state=Seen(1, second * 1_000_000_000, 0))


def main():
    """Measure and store."""
    sys.path.insert(0, str(HERE.parent / "tests"))
    from browser import browse, instrumented

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        big_ledger(folder / "night.sqlite", folder)
        begun, used = time.perf_counter(), time.process_time()
        page = write_page(folder / "night.sqlite", folder / "night.html")
        found = {"pulses": _PULSES, "page_MB": page.stat().st_size / 1e6,
                 "written_seconds": time.perf_counter() - begun,
                 "written_cpu_seconds": time.process_time() - used,
                 "ledger_MB": (folder / "night.sqlite").stat().st_size / 1e6}
        page.write_text(instrumented(page.read_text(encoding="utf-8"), _SCRIPT), encoding="utf-8")
        found["browser"] = [browse(page.as_uri(), real_time=True) for _ in range(3)]
        found["load_average"] = os.getloadavg()[0]
    (HERE / "results" / "night_page.json").write_text(json.dumps(found, indent=2) + "\n",
                                                      encoding="utf-8")
    print(json.dumps(found, indent=2))


if __name__ == "__main__":
    main()
