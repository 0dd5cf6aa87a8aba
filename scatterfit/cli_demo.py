"""The main job with nothing prepared: an invented bench, simulated pulses, their fits."""

from dataclasses import replace
from pathlib import Path

import scatterfit
from scatterfit.cli_pulse import fit_files, write_result
from scatterfit.files import write_json, write_trace
from scatterfit.report.comparison import comparison_text

BENCH = """\
# An invented bench: water vapour in nitrogen and argon, a green laser, light collected near the
# beam and at right angles to it, the transmitted beam and a pressure gauge.

[beam]
wavelength_nm = 532.0
polarization = "perpendicular"

[[detector]]
column = "forward_V"
angle_deg = 25.0
angle_deg_sigma = 0.05
half_angle_deg = 1.5
gain_V_m = 2.0e4
gain_V_m_sigma = 600.0
time_constant_ms = 0.02
full_scale_V = 10.0

[[detector]]
column = "side_V"
angle_deg = 90.0
angle_deg_sigma = 0.1
half_angle_deg = 2.0
time_constant_ms = 0.02
full_scale_V = 10.0

[transmission]
column = "transmitted_V"
path_mm = 150.0
half_angle_deg = 0.3

[pressure]
column = "pressure_kPa"
offset_kPa_sigma = 0.05

[vapour]
substance = "water"
mole_fraction = 0.013
mole_fraction_sigma = 0.0001

[gas]
carrier = {nitrogen = 0.6, argon = 0.4}

[chamber]
temperature_K = 297.65
temperature_K_sigma = 0.1
pressure_kPa = 95.0
pressure_kPa_sigma = 0.05
path_mm = 150.0
"""
"""Chamber file of the invented bench."""

PULSES = (("few", 600.0, 11), ("some", 5000.0, 12), ("many", 25000.0, 13), ("blank", 0.0, 14))
"""Name, droplets per cm3 and seed of the random numbers of each pulse."""


_SIDE_GAIN = 3.4e5
"""Of the detector whose gain the chamber file does not state, the same for all pulses [V m]."""


def run_demo(folder):
    """Simulate the demo's pulses, fit them and write everything into a folder.

    Parameters
    ----------
    folder : path-like
        Where to write; made if it is not there.

    Yields
    ------
    text : str
        What to show, as it becomes known.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    chamber = folder / "bench.toml"
    chamber.write_text(BENCH, encoding="utf-8")
    bench = scatterfit.read_chamber(chamber)
    yield f"Bench: {chamber} (invented). Simulating and fitting {len(PULSES)} pulses.\n"
    truth = {}
    for name, per_cm3, seed in PULSES:
        truth[f"{name}.csv"] = _simulate(bench, folder / f"{name}.csv", 1e6 * per_cm3, seed)
        pulse = fit_files(chamber, folder / f"{name}.csv")
        write_result(folder, name, pulse)
        known = truth[f"{name}.csv"]
        yield comparison_text(f"{name}.csv, seed {seed}", pulse.to_dict(), known) + "\n"
    write_json(folder / "truth.json", truth)
    yield _next(folder, chamber)


def _simulate(bench, path, number, seed):
    """Write one pulse and return what is in it."""
    forward, side = bench.detectors
    real = replace(bench, detectors=(forward, replace(side, gain=_SIDE_GAIN)))
    (pulse,) = scatterfit.simulate(
        real, count=1, number=number, duration=0.08, rate=5e4, noise=0.01, seed=seed
    )
    write_trace(path, pulse.time, pulse.columns)
    return dict(pulse.truth)


def _next(folder, chamber):
    """Return what a newcomer may want to do now."""
    trace = folder / "some.csv"
    return "\n".join([
        f"Written to {folder}: traces (.csv), results (.json), figures (.png), truth.json.",
        f"Look at {folder / 'some.png'}. Then:",
        "",
        f"  scatterfit fit {chamber} {trace}",
        "      one pulse: all that its fit says",
        f"  scatterfit check {chamber} {trace}",
        "      what the bench implies, how the trace was understood",
        f"  scatterfit calibrate {chamber} {folder}",
        "      what its pulses say together about gains, angles, temperature",
        "  scatterfit new bench.toml",
        "      a chamber file for your own bench",
        "",
        "Lasers, vessels under pressure and flammable vapours harm people: local codes and",
        "people licensed for such work decide what is safe on a real bench.",
    ])
