"""Do one-sigma intervals hold the truth as often as they should?

    python tests/studies/interval_coverage.py --count 1000 --out tests/studies/coverage.jsonl
    python tests/studies/interval_coverage.py --count 60 --independent --out elsewhere.jsonl
    python tests/studies/interval_coverage.py --summary tests/studies/coverage.jsonl

One bench whose chamber file states angle, gain, temperature and index with sigmas; the true values
of each pulse are drawn from them, its number, growth scale and noise as well. A file that exists
is continued. With ``--independent`` the pulses are made by ``independent_pulse.py``, diffusivity,
conductivity, vapour pressure and nucleation barrier off by what a handbook is. Not part of the
test run.
"""

import argparse
import json
import os
import sys
from dataclasses import replace
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from scatterfit import matter
from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.files_compiled import load_compiled
from scatterfit.files_fit import fit_loaded
from scatterfit.files_kernel import default_store
from scatterfit.files_trace import Trace
from scatterfit.forward.growth_model import Cloud
from scatterfit.forward.model import channel_signals
from scatterfit.forward.simulate import Scenario, hold_pressure, pressure_profile
from scatterfit.measured_pulse.prepare import pulse_kernel, pulse_model

ANGLE, ANGLE_SIGMA = 30.0, 0.15
GAIN, GAIN_SIGMA = 4.2e4, 0.05
TEMPERATURE, TEMPERATURE_SIGMA = 296.4, 0.15
INDEX, INDEX_SIGMA = 1.3368, 1e-4
GROWTH_SIGMA = 0.012
RATE, DURATION, NOISE, HOLD = 50e3, 0.095, 0.01, 1e-3


def bench(temperature=TEMPERATURE, index=INDEX):
    """Return the bench as its chamber file states it, or as it is."""
    return apparatus_from_mapping({
        "beam": {"wavelength_nm": 532.0, "polarization": "perpendicular"},
        "detector": [{
            "column": "scatter_V", "angle_deg": ANGLE, "angle_deg_sigma": ANGLE_SIGMA,
            "half_angle_deg": 2.0, "gain_V_m": GAIN, "gain_V_m_sigma": GAIN_SIGMA * GAIN,
            "time_constant_ms": 0.02, "full_scale_V": 10.0}],
        "vapour": {"substance": "water", "mole_fraction": 0.0096, "refractive_index": index,
                   "refractive_index_sigma": INDEX_SIGMA},
        "gas": {"carrier": "argon"},
        "chamber": {"temperature_K": temperature, "temperature_K_sigma": TEMPERATURE_SIGMA,
                    "pressure_kPa": 89.35, "path_mm": 120.0},
        "pressure": {"column": "gauge_kPa"},
    })


def made_here(rng, time, errors, number):
    """Return light [V], pressure [Pa] and truth of a pulse by scatterfit's own simulation."""
    angle, warmth = errors
    index = INDEX + INDEX_SIGMA * rng.standard_normal()
    true, store = bench(TEMPERATURE + TEMPERATURE_SIGMA * warmth, index), default_store()
    fine = np.arange(-5e-3, DURATION + 1e-6, 1e-5)
    ratio, start = 0.78, true.chamber.pressure
    low = hold_pressure(true, Scenario(number, DURATION, RATE, NOISE, HOLD, ratio))
    levels = (start, low, ratio * start)
    setup = growth_setup(true, fine, pressure_profile(fine, levels, HOLD), classes=48)
    setup = replace(setup, births=replace(setup.births, finer=()))
    kernel, relative, _ = pulse_kernel(setup, store)
    model = pulse_model(setup, kernel, relative, (np.radians(ANGLE_SIGMA * angle),))
    cloud = Cloud(number=np.log(number), scale=float(GROWTH_SIGMA * rng.standard_normal()),
                  variance=7e-6, angles=(0.0,))
    signals, state = channel_signals(model, cloud, time)
    births, hold, path = setup.births, setup.hold, setup.path
    squares = state.radius[:, -1] ** 2
    radius = float(np.sqrt(np.interp(births.median, births.times, squares)))
    back = hold.pressure / hold.temperature * path.reference_temperature / path.reference_pressure
    return signals[0].shape, pressure_profile(time, levels, HOLD), {
        "radius": radius, "number": number, "J": number * back / hold.effective,
        "T": hold.temperature, "S": hold.saturation_ratio}


def made_elsewhere(rng, time, errors, number):
    """Return the same by the independent simulator; angles are drawn from nine."""
    import independent_pulse as ip

    steps, warmth = round(2.0 * errors[0]), errors[1]
    true = bench(TEMPERATURE + TEMPERATURE_SIGMA * warmth)
    liquid, gas = matter.substance("water"), matter.carrier("argon")
    start, fraction = true.chamber.pressure, true.vapour.mole_fraction
    nature = ip.Nature(
        spread=0.004, diffusivity=float(np.exp(rng.normal(0, 0.01))),
        conductivity=float(np.exp(rng.normal(0, 0.01))), barrier=float(rng.uniform(0.95, 1.05)),
        saturation=float(np.exp(rng.normal(0, 0.003))))
    props = ip.Properties(liquid, gas, fraction, nature)
    cloud, pressure = ip.grow(props, time, (
        true.chamber.temperature, (start, 0.78 * start), HOLD, fraction), number, nature)
    truth = cloud.truth
    gas_index = float(gas.refractive_index(532e-9, truth["T_growth"],
                                           truth["p_growth_kPa"] * 1e3))
    tables = independent_light(steps, INDEX / gas_index, gas_index)
    shapes, *_ = ip.channel_shapes(cloud, tables, nature.spread, (0.12, 0.12), 1.0 / RATE, [2e-5])
    return GAIN * shapes[0], pressure, {
        "radius": float(cloud.median[-1]), "number": number, "J": truth["J_per_cm3_s"] * 1e6,
        "T": truth["T_nuc"], "S": truth["S_nuc"]}


def independent_light(steps, relative_index, gas_index):
    """Return tables of light at one of nine angles; the gas differs too little to matter."""
    import independent_pulse as ip

    if steps not in _KNOWN:
        angle = np.radians(ANGLE + 0.5 * ANGLE_SIGMA * steps)
        optics = (532e-9, np.pi / 2, [(angle, np.radians(2.0))], 0.0)
        _KNOWN[steps] = ip.light_tables(optics, relative_index, gas_index, 4.5e-6)
    return _KNOWN[steps]


_KNOWN = {}


def run(seed, maker):
    """Return errors and sigmas of one pulse."""
    rng = np.random.default_rng([7, seed])
    angle, gain, warmth = rng.standard_normal(3)
    number = float(np.exp(rng.uniform(np.log(3e8), np.log(6e9))))
    count = round((DURATION + 5e-3) * RATE) + 1
    time = np.round(-5e-3 + np.arange(count) / RATE, 12)
    light, pressure, truth = maker(rng, time, (angle, warmth), number)
    light = light * (1.0 + GAIN_SIGMA * gain)
    noise = np.hypot(0.0013 * light.max(), NOISE * light)
    volts = 0.05 + light + noise * rng.standard_normal(count)
    gauge = pressure + 2e-4 * pressure[0] * rng.standard_normal(count)
    columns = {"scatter_V": np.round(volts / 3e-4) * 3e-4, "gauge_kPa": gauge}
    found = fit_loaded(bench(), Trace(f"pulse{seed}", time, columns, ("time_s", *columns)))
    line = {"seed": seed, "verdict": found.verdict, "chi2": float(f"{found.chi2_reduced:.4g}")}
    for name, quantity in (
        ("radius", found.final_radius), ("number", found.concentration),
        ("J", found.nucleation.rate), ("T", found.nucleation.temperature),
        ("S", found.nucleation.saturation_ratio),
    ):
        if quantity is not None:
            value = truth[name]
            line[name] = [float(f"{quantity.value / value - 1:.4g}"),
                          float(f"{quantity.sigma / value:.4g}")]
    return line


def summarise(lines):
    """Return how often truths lie within one and two sigma, as Markdown."""
    rows = ["| quantity | pulses | within 1 sigma | within 2 sigma | rms error | median sigma |",
            "|---|---|---|---|---|---|"]
    for name in ("radius", "number", "J", "T", "S"):
        pairs = np.array([x[name] for x in lines if name in x])
        if not pairs.size:
            continue
        z = np.abs(pairs[:, 0] / pairs[:, 1])
        rms = np.sqrt(np.mean(pairs[:, 0] ** 2))
        rows.append(
            f"| {name} | {z.size} | {100 * np.mean(z < 1):.1f} % | {100 * np.mean(z < 2):.1f} % | "
            f"{100 * rms:.3g} % | {100 * np.median(pairs[:, 1]):.3g} % |")
    accepted = sum(x["verdict"] == "accepted" for x in lines)
    return "\n".join([*rows, "", f"{accepted} of {len(lines)} accepted."])


def draw(lines, path):
    """Draw the share of pulses within so many sigmas, beside that of a Gaussian."""
    from matplotlib.figure import Figure
    from scipy.special import erf

    figure = Figure(figsize=(6.4, 4.0), layout="constrained")
    axis = figure.add_subplot()
    z = np.linspace(0.0, 3.2, 200)
    axis.plot(z, 100 * erf(z / np.sqrt(2.0)), color="black", lw=4, alpha=0.25, label="Gaussian")
    for name, colour, dash in (("radius", "#0072B2", "-"), ("number", "#D55E00", "--"),
                               ("J", "#009E73", "-."), ("T", "#CC79A7", ":"),
                               ("S", "#56B4E9", (0, (5, 1, 1, 1)))):
        pairs = np.array([x[name] for x in lines if name in x])
        apart = np.sort(np.abs(pairs[:, 0] / pairs[:, 1]))
        share = 100.0 * np.arange(1, apart.size + 1) / apart.size
        axis.plot(apart, share, color=colour, ls=dash, label=f"{name}, {apart.size} pulses")
    for n, low, high in ((1, 64, 72), (2, 93.5, 97.5)):
        axis.plot([n, n], [low, high], color="black", lw=2, marker="_", ms=10)
    axis.set(xlim=(0.0, 3.2), ylim=(0.0, 101.0), xlabel="|value - truth| / stated sigma",
             ylabel="pulses within it (%)", title="Do stated uncertainties cover the truth?")
    axis.legend(loc="lower right")
    figure.savefig(path, dpi=120)


def main():
    """Run pulses or summarise them."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--count", type=int, default=100)
    parser.add_argument("--out", type=Path, default=Path("coverage.jsonl"))
    parser.add_argument("--summary", type=Path)
    parser.add_argument("--figure", type=Path, help="where to draw what --summary reads")
    parser.add_argument("--independent", action="store_true")
    args = parser.parse_args()
    if args.summary:
        lines = [json.loads(x) for x in args.summary.read_text().splitlines()]
        sys.stdout.write(summarise(lines) + "\n")
        if args.figure:
            draw(lines, args.figure)
        return
    load_compiled()
    done = set()
    if args.out.exists():
        done = {json.loads(x)["seed"] for x in args.out.read_text().splitlines()}
    maker = made_elsewhere if args.independent else made_here
    with args.out.open("a") as file:
        for seed in range(args.first, args.first + args.count):
            if seed not in done:
                print(json.dumps(run(seed, maker)), file=file, flush=True)


if __name__ == "__main__":
    main()
