"""What ``calibrate`` learns from series whose truth is known: one JSON file a study.

    python tests/studies/series/series_study.py bench --out bench.json
    python tests/studies/series/series_study.py accommodation --out accommodation.json
    python tests/studies/series/series_study.py real ../shared/real --out real.json

``bench``: pulses of a bench whose angle is off by 0.4 degrees, gain by 15 percent, temperature by
0.4 K and computed growth rate by 1.5 percent, the thin ones fitted before and after; in ``drift``
the gain falls by 6 percent through the series as well. ``accommodation``: planted coefficients from
a series at four pressures, and at one. ``real``: the open recordings. Not part of the test run.
"""

import argparse
import os
import sys
import tempfile
import time as clock
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from shared_data import TUBE

from scatterfit import cli_calibrate, files
from scatterfit.files_fit import fit_loaded
from scatterfit.files_simulate import simulate
from scatterfit.measured_series.calibrate import calibrate
from scatterfit.measured_series.choice import chosen
from scatterfit.measured_series.look import SeriesPulse
from scatterfit.measured_series.placing import with_value

BENCH = """
[beam]
wavelength_nm = 532.0
polarization = "perpendicular"
[[detector]]
column = "scatter1_V"
angle_deg = 30.0
angle_deg_sigma = 0.3
half_angle_deg = 2.0
gain_V_m = 6e4
gain_V_m_sigma = 1.2e4
full_scale_V = 10.0
time_constant_ms = 0.02
[transmission]
column = "transmitted_V"
path_mm = 120.0
path_mm_sigma = 2.0
[pressure]
column = "pressure_kPa"
[vapour]
substance = "water"
mole_fraction = 0.0085
mole_fraction_sigma = 0.0001
refractive_index = 1.3368
[gas]
carrier = "argon"
[chamber]
temperature_K = 297.0
temperature_K_sigma = 0.4
pressure_kPa = 90.0
path_mm = 120.0
"""
TRUTH = {"detector.scatter1_V.gain_V_m": 6.9e4, "detector.scatter1_V.angle_deg": np.radians(30.4),
         "chamber.temperature_K": 297.4}
SCALE = 1.015
THIN = 500.0
_WINDOW = "[analysis]\nwindow_ms = [-300.0, 500.0]\n"


def chamber(text):
    """Write a chamber file and return its path."""
    path = Path(tempfile.mkdtemp()) / "bench.toml"
    path.write_text(text, encoding="utf-8")
    return path


def joint(bench, pulses, free=(), hold=(), jobs=None):
    """Return the calibration and how long it took [s]."""
    settings = cli_calibrate.settings_of([(p.name, None) for p in pulses], by_file_time=False)
    settings["progress"] = lambda turn, size: print(f"round {turn}: {size:.3g}", flush=True)
    begin = clock.time()
    with cli_calibrate.workers(jobs, len(pulses)) as settings["map"]:
        found, _ = calibrate(bench, pulses, chosen(bench, free, hold), settings)
    return found, clock.time() - begin


def made(bench, stated, number, seed, **more):
    """Return one pulse of the true bench, with the stated one beside it."""
    pulse = simulate(bench, count=1, number=number, seed=seed, rate=20e3, **more)[0]
    return SeriesPulse(f"p{seed:02d}", stated, pulse.time, pulse.columns)


def study_bench(count, drift):
    """Return what became of a bench that is off, and of its pulses' numbers."""
    path = chamber(BENCH)
    stated = files.read_chamber(path)
    true = stated
    for key, value in TRUTH.items():
        true = with_value(true, key, value)
    numbers = 10 ** np.random.default_rng([7, count]).uniform(7.5, 10.7, count)
    pulses = []
    for i, number in enumerate(numbers):
        gain = TRUTH["detector.scatter1_V.gain_V_m"] * (1.0 - drift * (i / (count - 1) - 0.5))
        here = with_value(true, "detector.scatter1_V.gain_V_m", gain)
        pulses.append(made(here, stated, number, i, cloud={"scale": np.log(SCALE)}))
    found, seconds = joint(stated, pulses)
    out = path.with_name("calibrated.toml")
    cli_calibrate.write_calibrated(out, path, found, (stated, pulses, {}))
    after = files.read_chamber(out)
    rows = []
    for pulse, number in zip(pulses, numbers, strict=True):
        if number * 1e-6 >= THIN:
            continue
        row = {"trace": pulse.name, "N_per_cm3": number * 1e-6}
        for name, bench in (("before", stated), ("after", after)):
            got = _fitted(bench, pulse).concentration
            row[name] = None if got is None else [got.value / number - 1.0, got.sigma / number]
        rows.append(row)
        print(row, flush=True)
    truth = {k: (np.degrees(v) if k.endswith("deg") else v) for k, v in TRUTH.items()}
    truth |= {"analysis.growth_scale": SCALE, "transmission.path_mm": 120.0,
              "vapour.mole_fraction": 0.0085}
    return {"seconds": seconds, "drift": drift, "truth": truth, "shared": _against(found, truth),
            "thin_pulses": rows, "thin": _thin(rows), "calibration": found.to_dict()}


def _fitted(bench, pulse):
    from scatterfit.files_trace import Trace

    trace = Trace(pulse.name, pulse.time, pulse.columns, ("time_s", *pulse.columns))
    return fit_loaded(bench, trace)


def _against(found, truth):
    """Return how far each shared value is from the truth, in sigmas afterwards."""
    return [{"key": s.key, "truth": truth[s.key], "before": s.before, "after": s.after,
             "sigma": s.sigma, "off_by_sigmas": (s.after - truth[s.key]) / s.sigma}
            for s in found.shared if s.key in truth]


def _thin(rows):
    """Return the errors in size of thin pulses' numbers before and after."""
    thin = [r for r in rows if r["before"] and r["after"]]
    size = {name: np.abs([r[name][0] for r in thin]) for name in ("before", "after")}
    return {"pulses": len(thin), **{f"median_{k}": float(np.median(v)) for k, v in size.items()},
            **{f"largest_{k}": float(v.max()) for k, v in size.items()},
            "improved": float(np.median(size["before"]) / np.median(size["after"]))}


def _well_known(text):
    """Return the bench with what growth depends on known well."""
    for old, new in (("temperature_K_sigma = 0.4", "temperature_K_sigma = 0.05"),
                     ("mole_fraction_sigma = 0.0001", "mole_fraction_sigma = 0.00002"),
                     ("angle_deg_sigma = 0.3", "angle_deg_sigma = 0.05"),
                     ("gain_V_m_sigma = 1.2e4", "gain_V_m_sigma = 1200.0")):
        text = text.replace(old, new)
    return text


def study_accommodation(mass, thermal, pressures, seed, rough=False):
    """Return what a series at several pressures says about two accommodation coefficients."""
    text = BENCH if rough else _well_known(BENCH)
    stated = files.read_chamber(chamber(text))
    rng = np.random.default_rng([11, seed])
    spread = float(rng.normal(0.0, 0.02))
    pulses = []
    for i, kilopascal in enumerate(pressures):
        # The same partial pressure, so that the expansion does much the same.
        own = with_value(stated, "chamber.pressure_kPa", 1e3 * kilopascal)
        own = with_value(own, "vapour.mole_fraction", 0.0085 * 90.0 / kilopascal)
        true = with_value(own, "vapour.mass_accommodation", mass)
        true = with_value(true, "vapour.thermal_accommodation", thermal)
        from scatterfit.measured_series.placing import stands_for

        key = "vapour.diffusivity_mm2_s"
        true = with_value(true, key, stands_for(own, key) * np.exp(spread))
        pulses.append(made(true, own, 10 ** rng.uniform(8.3, 9.7), i, duration=0.08,
                           noise=0.05 if rough else 0.01))
    free = ("vapour.mass_accommodation", "vapour.thermal_accommodation", key)
    found, seconds = joint(stated, pulses, free)
    truth = {"vapour.mass_accommodation": mass, "vapour.thermal_accommodation": thermal,
             key: 1e6 * stands_for(stated, key) * np.exp(spread)}
    return {"pressures_kPa": list(pressures), "seconds": seconds, "truth": truth,
            "shared": _against(found, truth), "calibration": found.to_dict()}


def study_real(folder):
    """Return what the open recordings say together about their tube."""
    path = chamber(TUBE + _WINDOW)
    bench = files.read_chamber(path)
    listed = cli_calibrate.traces_of(Path(folder), recursive=False, limit=None)
    pulses, failed = cli_calibrate.read_pulses(path, Path(folder), listed, {})
    found, seconds = joint(bench, pulses)
    return {"seconds": seconds, "failed": failed, "calibration": found.to_dict()}


def main():
    """Run a study and write its result."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("study", choices=("bench", "drift", "accommodation", "real"))
    parser.add_argument("folder", nargs="?")
    parser.add_argument("--count", type=int, default=40)
    parser.add_argument("--out", type=Path, required=True)
    words = parser.parse_args()
    if words.study in ("bench", "drift"):
        result = study_bench(words.count, 0.06 * (words.study == "drift"))
    elif words.study == "accommodation":
        result = {
            "four_pressures": study_accommodation(0.5, 0.8, [20.0, 40.0, 60.0, 90.0] * 2, 1),
            "one_pressure": study_accommodation(0.5, 0.8, [90.0] * 8, 1),
            "high_pressure": study_accommodation(0.5, 0.8, [400.0] * 3, 1, rough=True),
        }
    else:
        result = study_real(words.folder)
    files.write_json(words.out, result)
    for one in result.get("shared", ()):
        print(one)
    print(result.get("thin", ""))


if __name__ == "__main__":
    main()
