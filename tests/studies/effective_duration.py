"""How well is the effective duration of a hold known from a gauge that is slow or noisy?

    python tests/studies/effective_duration.py --count 400

Pulses of ``draws.py``; the truth is the same pressure every 10 us and without noise. One line a
pulse goes to ``effective_duration.jsonl``. Not part of the test run.
"""

import argparse
import json
import sys
from itertools import pairwise
from pathlib import Path

import numpy as np
from draws import _scenario as scenario_of
from draws import chamber, draw_pulse

from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.forward.simulate import hold_pressure, pressure_profile

RESULTS = Path(__file__).with_suffix(".jsonl")
NOISE = 2e-4
SAMPLING = 0.22  # as in measured_pulse.conditions


def run(seed):
    """Return what a gauge makes of one pulse's hold, without and with noise."""
    pulse = draw_pulse(seed)
    bench = apparatus_from_mapping(chamber(pulse, {"pressure": True}))
    levels = (pulse["p0"], hold_pressure(bench, scenario_of(pulse)), pulse["ratio"] * pulse["p0"])
    fine = np.arange(-5e-3, pulse["duration"], 1e-5)
    truth = growth_setup(bench, fine, pressure_profile(fine, levels, pulse["hold"])).hold
    count = round((pulse["duration"] + 5e-3) * pulse["rate"]) + 1
    time = -5e-3 + np.arange(count) / pulse["rate"]
    clean = pressure_profile(time, levels, pulse["hold"])
    noise = NOISE * pulse["p0"] * np.random.default_rng([9, seed]).standard_normal(count)
    silent, noisy = (growth_setup(bench, time, clean + more).hold for more in (0.0, noise))
    line = {"seed": seed, "samples": truth.effective * pulse["rate"],
            "silent": silent.effective / truth.effective - 1.0,
            "noisy": noisy.effective / truth.effective - 1.0,
            "sigma": float(np.hypot(noisy.effective_sigma, SAMPLING / noisy.samples))}
    return {name: float(f"{value:.4g}") for name, value in line.items()} | {"seed": seed}


def summarise(lines):
    """Return the errors by how many samples fall into the hold, as Markdown."""
    rows = ["| samples | pulses | silent gauge: mean, rms | noisy: mean, rms | median sigma | "
            "within 1; 2 sigma |", "|---|---|---|---|---|---|"]
    edges = (0, 4, 8, 16, 32, 100, np.inf)
    columns = {name: np.array([line[name] for line in lines]) for name in lines[0]}
    for low, high in (*pairwise(edges), (0, np.inf)):
        chosen = (columns["samples"] >= low) & (columns["samples"] < high)
        silent, noisy, sigma = (columns[name][chosen] for name in ("silent", "noisy", "sigma"))
        z = np.abs(noisy / sigma)
        rows.append(
            f"| {low} to {high} | {z.size} | {silent.mean():+.2%}, "
            f"{np.sqrt(np.mean(silent**2)):.2%} | "
            f"{noisy.mean():+.2%}, {np.sqrt(np.mean(noisy**2)):.2%} | {np.median(sigma):.2%} | "
            f"{np.mean(z < 1):.0%}; {np.mean(z < 2):.0%} |")
    return "\n".join(rows)


def main():
    """Run, store and summarise."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--first", type=int, default=5000)
    parser.add_argument("--count", type=int, default=400)
    args = parser.parse_args()
    lines = []
    for seed in range(args.first, args.first + args.count):
        pulse = draw_pulse(seed)
        if not pulse["blank"]:
            lines.append(run(seed))
    RESULTS.write_text("".join(json.dumps(line) + "\n" for line in lines), encoding="utf-8")
    sys.stdout.write(summarise(lines) + "\n")


if __name__ == "__main__":
    main()
