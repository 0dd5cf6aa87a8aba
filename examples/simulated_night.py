"""A night of simulated pulses in a few isotherms, ready for ``scatterfit batch`` and ``rates``.

For each temperature of the hold the vapour is set so that classical theory gives the wanted number
of droplets in about a millisecond. All pulses share an error of the start temperature, as those of
a bench do. Run: ``python examples/simulated_night.py --out night``, then
``scatterfit batch examples/bench.toml night --out night.sqlite`` and
``scatterfit rates night.sqlite --figure rates.png``.
"""

import argparse
import tempfile
from dataclasses import replace
from math import exp, log
from pathlib import Path

import numpy as np

import scatterfit
from scatterfit.files import write_trace
from scatterfit.matter import carrier, substance
from scatterfit.nucleation.theory import theories

BENCH = Path(__file__).with_name("bench.toml")
TEMPERATURES = (252.0, 246.0, 240.0)
NUMBERS = tuple(np.geomspace(3e8, 1e10, 8))
HOLD = 1e-3
SHARED_ERROR = 0.05


def saturation_ratio(law, kelvin, number):
    """Return S at which theory gives a number of droplets in the hold [-]."""
    low, high = log(1.5), log(40.0)
    for _ in range(60):
        middle = 0.5 * (low + high)
        below = float(law.log_rate(kelvin, exp(middle))) < log(number / HOLD)
        low, high = (middle, high) if below else (low, middle)
    return exp(low)


def mole_fraction(bench, law, kelvin, number):
    """Return the vapour that an expansion to a temperature needs [-]."""
    water, gas = substance(bench.vapour.substance), carrier(dict(bench.carrier))
    cold = kelvin / bench.chamber.temperature
    power = float(gas.heat_capacity(kelvin)) / 8.314462618
    pressure = bench.chamber.pressure * cold**power
    ratio = saturation_ratio(law, kelvin, number)
    return ratio * float(water.saturation_pressure(kelvin)) / pressure


def main(folder):
    """Write one trace a pulse."""
    bench = scatterfit.read_chamber(BENCH)
    law = theories(substance(bench.vapour.substance))[0]
    folder.mkdir(parents=True, exist_ok=True)
    for kelvin in TEMPERATURES:
        for place, number in enumerate(NUMBERS):
            fraction = round(mole_fraction(bench, law, kelvin, number), 6)
            true = replace(
                bench, vapour=replace(bench.vapour, mole_fraction=fraction),
                chamber=replace(bench.chamber,
                                temperature=bench.chamber.temperature + SHARED_ERROR))
            (pulse,) = scatterfit.simulate(true, number=number, duration=0.05, rate=4e4,
                                           seed=int(kelvin) * 100 + place)
            path = folder / f"{kelvin:.0f}K-{place + 1}.csv"
            write_trace(path, pulse.time, pulse.columns,
                        [f"vapour.mole_fraction = {fraction}"])
            print(path)


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--out", type=Path, help="folder for the traces; a temporary one if absent")
    chosen, _ = parser.parse_known_args()
    main(chosen.out or Path(tempfile.mkdtemp(prefix="night-")))
