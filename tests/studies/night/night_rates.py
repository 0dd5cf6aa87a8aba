"""Do nucleation rates and activations of many pulses hold the truth as often as they say?

    python tests/studies/night/night_rates.py night      # 400 pulses through batch and rates
    python tests/studies/night/night_rates.py repeats    # 200 nights of rates, 200 seeded runs
    python tests/studies/night/night_rates.py rows       # ten thousand rows
    python tests/studies/night/night_rates.py summary

The numbers go to ``results/night_rates.json``; ``--folder`` keeps the night's traces.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from math import exp, log
from pathlib import Path

import numpy as np

import scatterfit
from scatterfit.cli import main as command
from scatterfit.files import write_trace
from scatterfit.matter import carrier, substance
from scatterfit.nucleation.activation import ActivationSettings, analyse_activation
from scatterfit.nucleation.isotherm import RateSettings
from scatterfit.nucleation.rates import analyse_rates
from scatterfit.nucleation.table import table_from_columns
from scatterfit.nucleation.theory import reference_theory, theories

RESULTS = Path(__file__).resolve().parent / "results" / "night_rates.json"
T, S, J = "nucleation_temperature_K", "nucleation_saturation_ratio", "nucleation_rate_per_cm3_s"
WATER = substance("water")
TEMPERATURES = (254.0, 250.0, 246.0, 242.0)
ASKED = 1e13  # [1/(m3 s)]
GAIN_SIGMA, KELVIN_SIGMA = 0.05, 0.1
BENCH = """
[beam]
wavelength_nm = 632.8
polarization = "perpendicular"
[[detector]]
column = "scatter_V"
angle_deg = 20.0
angle_deg_sigma = 0.1
half_angle_deg = 1.0
gain_V_m = 6.0e4
gain_V_m_sigma = 3000.0
time_constant_ms = 0.01
full_scale_V = 10.0
[pressure]
column = "pressure_kPa"
[vapour]
substance = "water"
mole_fraction = 0.011
[gas]
carrier = "argon"
[chamber]
temperature_K = 296.15
temperature_K_sigma = 0.1
pressure_kPa = 92.0
path_mm = 100.0
"""


def saturation_ratio(law, kelvin, log_rate):
    """Return S at which a theory has a rate [-]."""
    low, high = log(1.5), log(40.0)
    for _ in range(60):
        middle = 0.5 * (low + high)
        below = float(law.log_rate(kelvin, exp(middle))) < log_rate
        low, high = (middle, high) if below else (low, middle)
    return exp(low)


def make_night(folder, each, seed):
    """Write chamber file and traces; return the truth of each pulse and the shared errors."""
    rng = np.random.default_rng(seed)
    chamber, traces = folder / "bench.toml", folder / "night"
    traces.mkdir(parents=True, exist_ok=True)
    chamber.write_text(BENCH, encoding="utf-8")
    bench = scatterfit.read_chamber(chamber)
    errors = {"temperature_K": KELVIN_SIGMA * float(rng.standard_normal()),
              "gain": GAIN_SIGMA * float(rng.standard_normal()),
              "angle_deg": 0.1 * float(rng.standard_normal())}
    law = theories(WATER)[1]  # the rate that the simulator's droplets are born with
    truths = {}
    gas = carrier(dict(bench.carrier))
    for kelvin in TEMPERATURES:
        for place in range(each):
            number = float(np.exp(rng.uniform(log(3e8), log(8e9))))
            cold = kelvin / bench.chamber.temperature
            pressure = bench.chamber.pressure * cold ** (float(gas.heat_capacity(kelvin)) / 8.31446)
            ratio = saturation_ratio(law, kelvin, log(number / 1e-3))
            vapour = round(ratio * float(WATER.saturation_pressure(kelvin)) / pressure, 7)
            detector = replace(
                bench.detectors[0], gain=bench.detectors[0].gain * (1 + errors["gain"]),
                angle=bench.detectors[0].angle + np.radians(errors["angle_deg"]))
            true = replace(
                bench, detectors=(detector,), vapour=replace(bench.vapour, mole_fraction=vapour),
                chamber=replace(bench.chamber, temperature=bench.chamber.temperature
                                + errors["temperature_K"]))
            (pulse,) = scatterfit.simulate(true, number=number, duration=0.05, rate=4e4,
                                           seed=int(rng.integers(2**31)))
            name = f"{kelvin:.0f}K-{place + 1:03d}.csv"
            write_trace(traces / name, pulse.time, pulse.columns,
                        [f"vapour.mole_fraction = {vapour}"])
            truths[name] = [pulse.truth[key] for key in ("T_nuc", "S_nuc", "J_per_cm3_s")]
    return chamber, traces, truths, errors


def night(folder, each=100, seed=2026):
    """Return what one night says against its truth."""
    begun = time.perf_counter()
    chamber, traces, truths, errors = make_night(folder, each, seed)
    made = time.perf_counter()
    ledger = folder / "night.sqlite"
    assert command(["batch", str(chamber), str(traces), "--out", str(ledger), "--jobs", "1"]) == 0
    fitted = time.perf_counter()
    words = [sys.executable, "-m", "scatterfit", "rates", str(ledger), "--json"]
    found = json.loads(subprocess.run(words, check=True, capture_output=True, text=True).stdout)
    done = time.perf_counter()
    rows = list(scatterfit.open_results(ledger).rows())
    verdicts = [row["verdict"] for row in rows]
    result = {
        "pulses": len(truths), "seed": seed, "errors": errors,
        "verdicts": {word: verdicts.count(word) for word in sorted(set(verdicts))},
        "seconds": {"simulate": made - begun, "batch_one_job": fitted - made,
                    "rates": done - fitted},
        "isotherms": [],
    }
    used = np.array([truths[row["trace"]] for row in rows if row["verdict"] == "accepted"])
    for isotherm in found["isotherms"]:
        near = used[np.abs(used[:, 0] - isotherm["temperature_K"]) < 1.5]
        slope, level = np.polyfit(np.log(near[:, 1]), np.log(near[:, 2]), 1)
        (at,) = isotherm["saturation_ratio_at"]
        truth = {"temperature_K": near[:, 0].mean(), "slope": slope,
                 "saturation_ratio_at": exp((log(1e7) - level) / slope)}
        line = {"temperature_K": isotherm["temperature_K"], "pulses": isotherm["pulses"],
                "true_temperature_K": truth["temperature_K"],
                "reasons": [reason["code"] for reason in isotherm["reasons"]]}
        for name, quantity in (("slope", isotherm["slope"]),
                               ("saturation_ratio_at", at["saturation_ratio"])):
            low, high = quantity["interval_95"]
            line[name] = {"truth": truth[name], "value": quantity["value"],
                          "sigma": quantity["sigma"],
                          "sigma_statistical": quantity["sigma_statistical"],
                          "sigmas_off": (quantity["value"] - truth[name]) / quantity["sigma"],
                          "in_interval_95": bool(low <= truth[name] <= high)}
        result["isotherms"].append(line)
    return result


def rate_cells(rng, columns, each=25):
    """Return a table of four isotherms with shared and single errors, stated as asked for."""
    law = reference_theory(WATER)
    kelvin = np.repeat(TEMPERATURES, each) + 0.02 * rng.standard_normal(4 * each)
    middle = np.repeat([saturation_ratio(law, t, log(ASKED)) for t in TEMPERATURES], each)
    x = np.log(middle) + rng.uniform(-0.07, 0.07, kelvin.size)
    rate = np.exp(law.log_rate(kelvin, np.exp(x))) * 1e-6
    start, gain = 0.1 * rng.standard_normal(), 0.05 * rng.standard_normal()
    own = {T: 0.03, S: 0.002, J: 0.08}
    # One start temperature: T0 up by 1 K is T up by 0.82 K and ln S down by 0.085 (Clapeyron).
    shared = {T: 0.82 * start, S: -0.085 * start * 0.82, J: gain}
    sizes = {T: 0.082, S: 0.00697, J: 0.05}
    cells = {
        T: kelvin + shared[T] + own[T] * rng.standard_normal(kelvin.size),
        S: np.exp(x + shared[S] + own[S] * rng.standard_normal(kelvin.size)),
        J: rate * np.exp(shared[J] + own[J] * rng.standard_normal(kelvin.size)),
    }
    for name in (T, S, J) if columns != "none" else ():
        scale = 1.0 if name == T else cells[name]
        cells[f"{name}_sigma"] = np.hypot(own[name], sizes[name]) * scale * np.ones(kelvin.size)
        if columns == "divided":
            cells[f"{name}_sigma_systematic"] = sizes[name] * scale * np.ones(kelvin.size)
    return cells, kelvin, x


def rates_repeats(count, columns, *, to_isotherm=False):
    """Return how often intervals of slopes and of S at a rate hold the truth.

    Brought to the isotherm, S is quoted at the temperature that is stated for it, else at the
    one that the pulses had in truth.
    """
    law = reference_theory(WATER)
    settings = RateSettings(WATER, tolerance=1.5, to_isotherm=to_isotherm)
    slopes, places, seconds = [], [], 0.0
    for repeat in range(count):
        cells, kelvin, x = rate_cells(np.random.default_rng([11, repeat]), columns)
        begun = time.perf_counter()
        found = analyse_rates(table_from_columns(cells), settings)
        seconds += time.perf_counter() - begun
        for isotherm in found.isotherms:
            rows = isotherm.measured.row
            mean, here = float(np.mean(kelvin[rows])), x[rows]
            true = np.polyfit(here, law.log_rate(mean, np.exp(here)), 1)[0]
            slopes.append((isotherm.slope, true))
            ((_, ratio),) = isotherm.ratio_at
            at = isotherm.temperature if to_isotherm else mean
            places.append((ratio, saturation_ratio(law, at, log(ASKED))))
    return {"nights": count, "isotherms": len(slopes), "slope": coverage(slopes),
            "saturation_ratio_at_1e7": coverage(places), "seconds_a_night": seconds / count}


def coverage(pairs):
    """Return how often one sigma and the 95 percent interval hold the truth."""
    error = np.array([found.value - truth for found, truth in pairs])
    sigma = np.array([found.sigma for found, _ in pairs])
    inside = [found.interval[0] <= truth <= found.interval[1] for found, truth in pairs]
    truth = float(np.mean([truth for _, truth in pairs]))
    return {"within_1_sigma": float(np.mean(np.abs(error) < sigma)),
            "in_interval_95": float(np.mean(inside)),
            "rms_error": float(np.sqrt(np.mean(error**2))),
            "median_sigma": float(np.median(sigma)), "mean_error": float(error.mean()),
            "mean_truth": truth}


def seeded_repeats(count, columns):
    """Return how often intervals of onset and width hold the truth of a seeded run."""
    onset, width, seeds, each = 1.22, 0.03, 900.0, 30
    settings = ActivationSettings(WATER)
    onsets, widths = [], []
    for repeat in range(count):
        rng = np.random.default_rng([13, repeat])
        x = np.linspace(log(onset) - 0.1, log(onset) + 0.1, each)
        part = 0.5 * (1.0 + erf((x - log(onset)) / width / 2**0.5))
        gain, start = 0.05 * rng.standard_normal(), 0.007 * rng.standard_normal()
        counted = rng.poisson(seeds * part) * np.exp(0.03 * rng.standard_normal(each) + gain)
        cells = {T: np.full(each, 268.0), S: np.exp(x + start + 0.001 * rng.standard_normal(each)),
                 "concentration_per_cm3": counted, "seed_diameter_nm": np.full(each, 14.0),
                 "seed_concentration_per_cm3": np.full(each, seeds)}
        if columns == "divided":
            own = np.hypot(np.sqrt(np.maximum(counted, 1.0)), 0.03 * counted)
            cells["concentration_per_cm3_sigma"] = np.hypot(own, 0.05 * counted)
            cells["concentration_per_cm3_sigma_systematic"] = 0.05 * counted
            cells[f"{S}_sigma"] = 0.00707 * cells[S]
            cells[f"{S}_sigma_systematic"] = 0.007 * cells[S]
        (run,) = analyse_activation(table_from_columns(cells), settings).runs
        onsets.append((run.onset, onset))
        if run.width is not None:
            widths.append((run.width, width))
    return {"runs": count, "onset": coverage(onsets), "width": coverage(widths)}


def erf(z):
    """Return the error function."""
    from math import erf as one

    return np.array([one(value) for value in z])


def rows(count=10_000):
    """Return the processor seconds of the command on so many rows, and of its parts."""
    cells, *_ = rate_cells(np.random.default_rng(3), "divided", count // 4)
    cells = {"trace": [f"p{place}.csv" for place in range(count)], **cells}
    plain = {"nucleation_pressure_kPa": 55.0, "nucleation_effective_ms": 1.0,
             "background_concentration_per_cm3": 1e4, "background_diameter_nm": 200.0}
    found = {}
    with tempfile.TemporaryDirectory() as folder:
        for name, more in (("rates", {}), ("rates_with_background", plain)):
            table = {**cells, **{key: np.full(count, value) for key, value in more.items()}}
            path = Path(folder) / f"{name}.csv"
            lines = [",".join(map(str, row)) for row in zip(*table.values(), strict=True)]
            path.write_text("\n".join([",".join(table), *lines]) + "\n", encoding="utf-8")
            taken = []
            for _ in range(3):
                words = [sys.executable, "-m", "scatterfit", "rates", str(path), "--json"]
                taken.append(processor_seconds(words))
            begun = time.process_time()
            analyse_rates(table_from_columns(table), RateSettings(WATER, gas=carrier("argon")))
            found[name] = {"command_seconds_best_of_3": min(taken),
                           "analysis_alone_seconds": time.process_time() - begun}
        words = [sys.executable, "-c", "import numpy, typer"]
        found["python_numpy_typer_seconds"] = processor_seconds(words)
    return found


def processor_seconds(words):
    """Return what a command takes of the processor, whatever else runs on the machine [s]."""
    before = os.times()
    subprocess.run(words, check=True, capture_output=True)
    after = os.times()
    return (after.children_user - before.children_user
            + after.children_system - before.children_system)


def store(name, found):
    """Put a part's numbers into the file of results."""
    stored = json.loads(RESULTS.read_text(encoding="utf-8")) if RESULTS.exists() else {}
    stored[name] = rounded(found)
    RESULTS.write_text(json.dumps(stored, indent=1) + "\n", encoding="utf-8")


def rounded(found):
    """Return numbers at five digits."""
    if isinstance(found, dict):
        return {name: rounded(value) for name, value in found.items()}
    if isinstance(found, list | tuple):
        return [rounded(value) for value in found]
    return float(f"{found:.5g}") if isinstance(found, float) else found


def summary(stored):
    """Return the coverage tables as Markdown."""
    lines = ["| repeats | quantity | in 1 sigma | in 95 % interval | rms error | median sigma |",
             "|---|---|---|---|---|---|"]
    for part, quantities in (("rates", ("slope", "saturation_ratio_at_1e7")),
                             ("seeded", ("onset", "width"))):
        for columns, found in stored.get(part, {}).items():
            for name in quantities:
                one = found[name]
                lines.append(
                    f"| {part}, sigmas: {columns} | {name} | {100 * one['within_1_sigma']:.1f} % | "
                    f"{100 * one['in_interval_95']:.1f} % | {one['rms_error']:.3g} | "
                    f"{one['median_sigma']:.3g} |")
    for line in stored.get("night", {}).get("isotherms", ()):
        parts = [f"{line[name]['value']:.4g} ± {line[name]['sigma']:.2g} "
                 f"({line[name]['truth']:.4g}, {line[name]['sigmas_off']:+.1f})"
                 for name in ("slope", "saturation_ratio_at")]
        lines.append(f"| {line['temperature_K']:.2f} | {line['pulses']} | {' | '.join(parts)} |")
    return "\n".join(lines)


def main():
    """Run one part and store its numbers."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("part", choices=("night", "repeats", "rows", "summary"))
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--each", type=int, default=100)
    parser.add_argument("--count", type=int, default=200)
    args = parser.parse_args()
    if args.part == "night":
        folder = args.folder or Path(tempfile.mkdtemp(prefix="night-"))
        store("night", night(folder, args.each))
    elif args.part == "repeats":
        found = {columns: rates_repeats(args.count, columns)
                 for columns in ("divided", "whole", "none")}
        found["divided, --to-isotherm"] = rates_repeats(args.count, "divided", to_isotherm=True)
        store("rates", found)
        store("seeded", {columns: seeded_repeats(args.count, columns)
                         for columns in ("divided", "none")})
    elif args.part == "rows":
        store("rows", rows())
    print(summary(json.loads(RESULTS.read_text(encoding="utf-8"))))


if __name__ == "__main__":
    main()
