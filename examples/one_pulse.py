"""Simulate one pulse of the example bench, fit it and compare with what was put in.

Run from anywhere: ``python examples/one_pulse.py``.
"""

from pathlib import Path

import scatterfit
from scatterfit.files_trace import Trace

BENCH = Path(__file__).with_name("bench.toml")


def main():
    """Print what was found beside what was put in."""
    bench = scatterfit.read_chamber(BENCH)
    (simulated,) = scatterfit.simulate(
        bench, number=3e9, duration=0.06, rate=4e4, noise=0.01, seed=3
    )
    # A recording from disk would be scatterfit.read_trace("pulse.csv").
    trace = Trace("simulated", simulated.time, simulated.columns, tuple(simulated.columns))
    pulse = scatterfit.fit(bench, trace)
    radius, number, truth = pulse.final_radius, pulse.concentration, simulated.truth
    print(f"verdict       {pulse.verdict}")
    print(f"final radius  {1e6 * radius.value:.4f} +/- {1e6 * radius.sigma:.4f} um, "
          f"put in {truth['final_radius_um']:.4f} um")
    print(f"number        {1e-6 * number.value:.0f} +/- {1e-6 * number.sigma:.0f} per cm3, "
          f"put in {truth['N_per_cm3']:.0f} per cm3")


if __name__ == "__main__":
    main()
