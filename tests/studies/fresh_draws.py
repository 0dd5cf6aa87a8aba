"""Random benches and pulses against the fit: one JSON line a draw.

    python tests/studies/fresh_draws.py --first 1000 --count 500 --out fresh_draws.jsonl
    python tests/studies/fresh_draws.py --summary fresh_draws.jsonl

A file that exists is continued: seeds in it are not drawn again. Every sixth bench is simulated by
``independent_pulse.py`` (mark ``I``), the others by scatterfit's own forward model (mark ``S``)
with growth, sticking and spread of their own. Not part of the test run.
"""

import argparse
import json
import os
import sys
import time as clock
import traceback
import warnings
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from draws import (
    SAME_BENCH,
    TOP,
    draw_pulse,
    record,
    simulate_independent,
    simulate_shared,
)
from scipy.signal import find_peaks

from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.errors import InvalidInputError
from scatterfit.files_compiled import load_compiled
from scatterfit.files_fit import fit_loaded
from scatterfit.files_kernel import default_store
from scatterfit.files_trace import Trace
from scatterfit.measured_pulse.prepare import prepare_setup, pulse_kernel


def count_extrema(shapes, noise, limits):
    """Return how many peaks and troughs stand out below full scale in the best channel."""
    best = 0
    for shape, limit in zip(shapes, limits, strict=True):
        top = float(shape.max())
        if not top > 0.0:
            continue
        y = np.log(np.minimum(shape, limit / TOP * top) + 0.01 * top)
        turns = sum(find_peaks(s * y, prominence=max(0.04, 2 * noise), plateau_size=(1, 2))[0].size
                    for s in (1, -1))
        best = max(best, turns)
    return best


def run(seed):
    """Return the outcome of one draw as a flat dict."""
    pulse = draw_pulse(seed)
    rng = np.random.default_rng([5, seed])
    made, kind = None, "I" if pulse["independent"] else "S"
    if pulse["independent"]:
        try:
            made = simulate_independent(pulse, rng)
        except InvalidInputError:
            kind = "S"
    if made is None:
        made = simulate_shared(pulse, rng)
    columns, tables, tags, full = record(pulse, made, rng)
    time, shapes, truth = made[0], made[1], made[4]
    apparatus = apparatus_from_mapping(tables)
    trace = Trace(f"draw{seed}", time, columns, ("time_s", *columns))
    line = {
        "seed": seed, "sim": kind, "n": time.size,
        "ext": count_extrema(shapes, pulse["noise"], full),
        "noise": _r(pulse["noise"]), "N": _r(truth["N_per_cm3"]), "blank": pulse["blank"],
        "r": _r(truth["final_radius_um"]), "S": _r(truth["S_growth"]),
        "depth": _r(truth["optical_depth_end"]), "vap": pulse["vapour"][:5],
        "lam": pulse["wavelength"], "ang": [d[0] for d in pulse["detectors"]],
        "has": "".join(c for c, on in zip("gtpka", (
            pulse["gain"], pulse["transmission"], pulse["pressure"], pulse["kelvin"],
            pulse["angle_sigma"]), strict=True) if on),
        "stick": _r(pulse["sticking"]), "spread": _r(100 * pulse["spread"]),
        "hold": _r(1e3 * pulse["hold"]), "dur": _r(1e3 * pulse["duration"]), "tags": tags,
    }
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            pulse_kernel(prepare_setup(apparatus, trace.time, trace.columns), default_store())
            begin = clock.process_time()
            found = fit_loaded(apparatus, trace)
            line["s"] = _r(clock.process_time() - begin)
        except Exception as error:  # noqa: BLE001  any exception is a finding
            last = traceback.extract_tb(error.__traceback__)[-1]
            where = next((f for f in reversed(traceback.extract_tb(error.__traceback__))
                          if "scatterfit" in f.filename), last)
            return {**line, "verdict": "exception", "error": (
                f"{type(error).__name__}: {error} at {Path(where.filename).name}:{where.lineno}")}
    return {**line, **_compared(found, truth)}


def _compared(found, truth):
    """Return verdict and errors."""
    out = {"verdict": found.verdict, "why": [r.code for r in found.reasons],
           "chi2": _r(found.chi2_reduced), "lag1": _r(found.residual_lag1)}
    if found.upper_limit is not None:
        out["limit"] = _r(found.upper_limit * 1e-6)
    if found.final_radius is None:
        if found.verdict == "failed":
            out["error"] = found.reasons[0].text
        return out
    real = truth["final_radius_um"]
    got = found.final_radius
    out["er"] = _r(got.value * 1e6 / real - 1, 3)
    out["sr"] = _r(got.sigma / got.value, 3)
    at = np.array(truth["time_ms"]) * 1e-3
    curve = np.interp(at, found.curve.time, found.curve.radius) * 1e6
    out["ec"] = _r(np.max(np.abs(curve / np.array(truth["radius_um"]) - 1)), 3)
    number = found.concentration
    if number is not None and truth["N_per_cm3"]:
        out["eN"] = _r(number.value * 1e-6 / truth["N_per_cm3"] - 1, 3)
        out["sN"] = _r(number.sigma / number.value, 3)
    if found.growth_scale is not None:
        out["scale"] = _r(found.growth_scale.value)
    out["alt"] = [[_r(a.final_radius * 1e6 / real - 1, 2), _r(a.delta_chi2, 3)]
                  for a in found.alternatives[:3]]
    rate = found.nucleation.rate
    if rate is not None and truth.get("J_per_cm3_s"):
        out["eJ"] = _r(rate.value * 1e-6 / truth["J_per_cm3_s"] - 1, 3)
        out["sJ"] = _r(rate.sigma / rate.value, 3)
    return out


def _r(value, digits=4):
    return None if value is None else float(f"{float(value):.{digits}g}")


def _safe_run(seed):
    try:
        return run(seed)
    except Exception as error:  # noqa: BLE001  the study's own trouble, not the fit's
        where = traceback.extract_tb(error.__traceback__)[-1]
        return {"seed": seed, "verdict": "study-error", "error": (
            f"{type(error).__name__}: {error} at {Path(where.filename).name}:{where.lineno}")}


def main():
    """Run draws or summarise them."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--count", type=int, default=20)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--seeds", type=int, nargs="*")
    parser.add_argument("--out", type=Path, default=Path("fresh_draws.jsonl"))
    parser.add_argument("--summary", type=Path)
    args = parser.parse_args()
    if args.summary:
        from fresh_summary import summarise

        lines = [json.loads(x) for x in args.summary.read_text().splitlines()]
        sys.stdout.write(summarise(lines) + "\n")
        return
    load_compiled()
    done = set()
    if args.out.exists():
        done = {json.loads(x)["seed"] for x in args.out.read_text().splitlines()}
    wanted = args.seeds or range(args.first, args.first + args.count)
    todo = [seed for seed in wanted if seed not in done]
    with args.out.open("a") as file:
        if args.jobs > 1:
            with ProcessPoolExecutor(args.jobs) as pool:
                for line in pool.map(_safe_run, todo, chunksize=SAME_BENCH):
                    print(json.dumps(line), file=file, flush=True)
        else:
            for seed in todo:
                print(json.dumps(_safe_run(seed)), file=file, flush=True)


if __name__ == "__main__":
    main()
