"""Nucleation rate against saturation ratio, from pulses with deeper and deeper holds.

Each simulated pulse has more droplets than the one before, so a deeper hold. The slope of ln J
against ln S is, by the nucleation theorem, the number of molecules in the critical cluster plus
two (Kashchiev, J. Chem. Phys. 76 (1982) 5098). Run: ``python examples/nucleation_rates.py``.
"""

from math import log
from pathlib import Path

import scatterfit
from scatterfit.files_trace import Trace

BENCH = Path(__file__).with_name("bench.toml")
NUMBERS = (3e8, 1e9, 3e9, 1e10)


def measured(bench, number, seed):
    """Return saturation ratio [-] and nucleation rate [1/(m^3 s)] of one simulated pulse."""
    (pulse,) = scatterfit.simulate(bench, number=number, duration=0.06, rate=4e4, seed=seed)
    trace = Trace(f"pulse {seed}", pulse.time, pulse.columns, tuple(pulse.columns))
    nucleation = scatterfit.fit(bench, trace).nucleation
    return nucleation.saturation_ratio.value, nucleation.rate.value


def main():
    """Print a table and the slope between its ends."""
    bench = scatterfit.read_chamber(BENCH)
    rows = [measured(bench, number, seed) for seed, number in enumerate(NUMBERS)]
    for saturation, rate in rows:
        print(f"S = {saturation:6.3f}   J = {1e-6 * rate:8.2e} per cm3 and s")
    (first_s, first_j), (last_s, last_j) = rows[0], rows[-1]
    print(f"slope d ln J / d ln S = {log(last_j / first_j) / log(last_s / first_s):.0f}")


if __name__ == "__main__":
    main()
