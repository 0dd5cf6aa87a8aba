"""Does the fit get all that a trace holds? Scatter over noise draws, and the least there can be.

    python tests/studies/efficiency.py --count 200

Pulses of one bench that differ by their noise alone. The bound is that of Cramér and Rao, from the
information of the noiseless trace at the truth, with what is known beforehand as information too:
for an estimate that uses it, the part of its variance that comes from the noise.
"""

import argparse
import json
import os
import sys
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from interval_coverage import DURATION, NOISE, RATE, bench

from scatterfit.files_compiled import load_compiled
from scatterfit.files_fit import fit_loaded
from scatterfit.files_kernel import default_store
from scatterfit.files_simulate import simulate
from scatterfit.files_trace import Trace
from scatterfit.forward.simulate import Scenario
from scatterfit.measured_pulse.expected import expect

NUMBERS = (4e8, 2e9, 6e9)
"""Droplets per volume [1/m^3]."""


def one_number(number, count, seed):
    """Return scatter, bound and bias of radius and number over noise draws, relative [-]."""
    apparatus = bench()
    scenario = Scenario(number, DURATION, RATE, NOISE)
    expected = expect(apparatus, scenario, default_store(), rivals=False)
    pulses = simulate(apparatus, count=count, number=number, duration=DURATION, rate=RATE,
                      noise=NOISE, seed=seed)
    fits = [fit_loaded(apparatus, Trace(str(i), p.time, p.columns, tuple(p.columns)))
            for i, p in enumerate(pulses)]
    rows = {}
    for name, key, unit, truth in (
        ("radius", "final_radius_um", 1e6, pulses[0].truth["final_radius_um"] * 1e-6),
        ("number", "concentration_per_cm3", 1e-6, number),
    ):
        noise = next(x.sigma for x in expected.pulse.budget
                     if (x.input, x.quantity) == ("noise", key))
        field = {"radius": "final_radius", "number": "concentration"}[name]
        found = np.array([getattr(fit, field).value for fit in fits]) / truth - 1.0
        rows[name] = {
            "scatter": float(np.std(found, ddof=1)), "bound": noise / unit / truth,
            "ratio": float(np.std(found, ddof=1)) / (noise / unit / truth),
            "mean": float(np.mean(found)), "pulses": len(fits),
            "accepted": sum(fit.verdict == "accepted" for fit in fits),
        }
    return rows


def main():
    """Fit and store."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--count", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, default=Path("efficiency.json"))
    args = parser.parse_args()
    load_compiled()
    found = {f"{number:g}": one_number(number, args.count, args.seed) for number in NUMBERS}
    args.out.write_text(json.dumps(found, indent=1) + "\n")
    for number, rows in found.items():
        for name, row in rows.items():
            sys.stdout.write(
                f"{number:>6} per m3  {name:<7} scatter {100 * row['scatter']:.4f} %, bound "
                f"{100 * row['bound']:.4f} %, ratio {row['ratio']:.2f}, mean "
                f"{100 * row['mean']:+.4f} %, {row['accepted']} of {row['pulses']} accepted\n")


if __name__ == "__main__":
    main()
