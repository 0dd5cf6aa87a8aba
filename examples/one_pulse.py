"""Simulate one pulse of the example bench, fit it and compare with what was put in.

Run from anywhere: ``python examples/one_pulse.py``.
"""

from pathlib import Path

import scatterfit

BENCH = Path(__file__).with_name("bench.toml")


def main():
    bench = scatterfit.read_chamber(BENCH)
    (simulated,) = scatterfit.simulate(
        bench, count=1, number=3e9, duration=0.06, rate=4e4, noise=0.01, seed=3
    )
    trace = scatterfit.trace_from_arrays(simulated.time, simulated.columns)
    pulse = scatterfit.fit(bench, trace)
    radius, truth = pulse.final_radius, simulated.truth["final_radius_um"]
    print(f"verdict       {pulse.verdict}")
    print(f"final radius  {1e6 * radius.value:.4f} +/- {1e6 * radius.sigma:.4f} um")
    print(f"put in        {truth:.4f} um")
    print(f"number        {1e-6 * pulse.concentration.value:.0f} per cm3")


if __name__ == "__main__":
    main()
