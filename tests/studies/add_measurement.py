"""Which measurement to add where two solutions remain: one ambiguous pulse, seen in other ways.

A red beam, one detector near the forward direction, a record of 30 ms with 15 percent noise, the
start temperature known to 0.5 K: several radii describe it. The same cloud is simulated for
benches with one thing more each. Run: ``python tests/studies/add_measurement.py``. About five
minutes; the table in docs/add-a-measurement.md is its output.
"""

import copy
import sys

import numpy as np

from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.files_simulate import simulate
from scatterfit.measured_pulse.measure import measure

SEEDS = range(1, 9)
NOISE, DURATION = 0.15, 0.03
RED = {"name": "red", "wavelength_nm": 632.8, "polarization": "perpendicular"}
BLUE = {"name": "blue", "wavelength_nm": 405.0, "polarization": "perpendicular"}
TURNED = {**RED, "name": "turned", "polarization": "parallel"}
FIRST = {"column": "first_V", "angle_deg": 12.0, "half_angle_deg": 2.0, "beam": "red"}
BENCH = {
    "beam": [RED], "detector": [FIRST],
    "pressure": {"column": "pressure_kPa"},
    "vapour": {"substance": "water", "mole_fraction": 0.0085, "mole_fraction_sigma": 3e-4},
    "gas": {"carrier": "argon"},
    "chamber": {"temperature_K": 297.0, "temperature_K_sigma": 0.5, "pressure_kPa": 90.0,
                "path_mm": 120.0},
    "analysis": {"max_radius_um": 3.0},
}


def second(beam="red", angle=12.0):
    """Return a second detector."""
    return {"column": "second_V", "angle_deg": angle, "half_angle_deg": 2.0, "beam": beam}


CASES = {
    "nothing": ({}, {}),
    "a second angle, 30 degrees": ({"detector": [FIRST, second(angle=30.0)]}, {}),
    "a second angle, 90 degrees": ({"detector": [FIRST, second(angle=90.0)]}, {}),
    "a second colour, 405 nm, at the same angle": (
        {"beam": [RED, BLUE], "detector": [FIRST, second("blue")]}, {}),
    "a second polarization, parallel, at the same angle": (
        {"beam": [RED, TURNED], "detector": [FIRST, second("turned")]}, {}),
    "a second polarization, parallel, at 60 degrees": (
        {"beam": [RED, TURNED], "detector": [FIRST, second("turned", 60.0)]}, {}),
    "the transmission, 120 mm": (
        {"transmission": {"column": "through_V", "path_mm": 120.0, "beam": "red"}}, {}),
    "a known gain": ({"detector": [{**FIRST, "gain_V_m": 2e4}]}, {}),
    "a temperature known to 0.1 K, vapour to 0.5 percent": ({
        "chamber": {**BENCH["chamber"], "temperature_K_sigma": 0.1},
        "vapour": {**BENCH["vapour"], "mole_fraction_sigma": 4e-5}}, {}),
    "a record of 60 ms": ({}, {"duration": 0.06}),
}
"""What is added: tables of the bench, and options of the simulation."""


def study():
    """Write one line a case."""
    write = sys.stdout.write
    write("| added | accepted | ambiguous | rejected | radius to | off by, at most |\n")
    write("|---|---|---|---|---|---|\n")
    for name, (tables, options) in CASES.items():
        bench = apparatus_from_mapping({**copy.deepcopy(BENCH), **tables})
        verdicts, sigmas, off = [], [], []
        for seed in SEEDS:
            pulse = simulate(bench, rate=10e3, seed=seed, noise=NOISE,
                             **{"duration": DURATION, **options})[0]
            result = measure(bench, pulse.time, pulse.columns)
            verdicts.append(result.verdict)
            radius = result.final_radius
            if result.verdict == "accepted":
                truth = pulse.truth["final_radius_um"] * 1e-6
                sigmas.append(radius.sigma / truth)
                off.append(abs(radius.value - truth) / radius.sigma)
        counts = " | ".join(str(verdicts.count(v)) for v in ("accepted", "ambiguous", "rejected"))
        size = f"{100 * np.median(sigmas):.2f} % | {max(off):.1f} sigma" if sigmas else " | "
        write(f"| {name} | {counts} | {size} |\n")
        sys.stdout.flush()


if __name__ == "__main__":
    study()
