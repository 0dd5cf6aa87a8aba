"""Random benches and pulses for ``fresh_draws.py``: what is drawn and how it is recorded."""

from dataclasses import replace

import independent_pulse as ip
import numpy as np
from scipy.interpolate import CubicHermiteSpline

from scatterfit import matter
from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.errors import InvalidInputError
from scatterfit.files_kernel import default_store
from scatterfit.forward.growth_model import Cloud, grow
from scatterfit.forward.model import channel_signals
from scatterfit.forward.simulate import Scenario, hold_pressure, pressure_profile
from scatterfit.measured_pulse.prepare import pulse_kernel, pulse_model

R = 8.314462618
SAME_BENCH = 5
TOP = 4.0
LASER = 5.0
FINE_CLASSES = 128


def log_uniform(rng, low, high):
    """Return a number even in its logarithm."""
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def draw_bench(number):
    """Return what pulses of one bench share, as a dict."""
    rng = np.random.default_rng([2, number])
    vapour = str(rng.choice(["water", "water", "1-propanol", "ethanol"]))
    mixtures = ["argon", "nitrogen", "air", {"argon": 0.6, "helium": 0.4},
                {"nitrogen": 0.5, "argon": 0.5}, {"helium": 0.25, "nitrogen": 0.75}]
    carrier = mixtures[int(rng.integers(len(mixtures)))]
    polarization = [
        "perpendicular", "perpendicular", "parallel", "unpolarized", float(rng.uniform(0, 90)),
    ][int(rng.integers(5))]
    wavelength = float(rng.choice([405.0, 450.0, 488.0, 515.0, 532.0, 594.1, 632.8, 660.0]))
    detectors = [
        (round(float(rng.uniform(12, 150)), 2), round(float(rng.uniform(0.5, 4.0)), 2))
        for _ in range(1 + (rng.random() < 0.3))
    ]
    given = bool(rng.random() < 0.6)
    liquid = matter.substance(vapour)
    index = round(float(np.real(liquid.refractive_index(wavelength * 1e-9, 278.0))), 4)
    return {
        "vapour": vapour, "carrier": carrier, "polarization": polarization,
        "wavelength": wavelength, "detectors": detectors, "index": index if given else None,
        "gain": bool(rng.random() < 0.6), "pressure": bool(rng.random() < 0.75),
        "transmission": bool(rng.random() < 0.6),
        "beam_path": round(float(rng.uniform(50, 200)), 1),
        "receiver": round(float(rng.choice([0.0, 0.2, 1.0])), 2),
        "chamber_path": round(float(rng.choice([0.0, rng.uniform(40, 200)])), 1),
        "constant": round(float(rng.choice([0.0, log_uniform(rng, 0.005, 0.3)])), 4),
        "independent": number % 6 == 0,
        "angle_sigma": round(float(rng.uniform(0.08, 0.3)), 3) if rng.random() < 0.25 else 0.0,
        "max_radius": float(rng.choice([6.0, 8.0, 10.0])),
    }


def draw_pulse(seed):
    """Return one pulse's conditions as a dict, its bench among them."""
    bench = draw_bench(seed // SAME_BENCH)
    rng = np.random.default_rng([3, seed])
    liquid, gas = matter.substance(bench["vapour"]), matter.carrier(bench["carrier"])
    for _ in range(200):
        start, pressure = rng.uniform(289, 302), rng.uniform(60e3, 120e3)
        ratio = rng.uniform(0.68, 0.88)
        saturation = rng.uniform(1.25, 3.0 if bench["vapour"] == "water" else 2.2)
        fraction = 0.01
        for _ in range(6):
            cp = float(matter.moist_heat_capacity(gas, liquid, fraction, 0.93 * start))
            growth = start * ratio ** (R / cp)
            fraction = saturation * float(liquid.saturation_pressure(growth)) / (ratio * pressure)
        wet = fraction * pressure / float(liquid.saturation_pressure(start))
        pulse = {
            **bench, "seed": seed, "T0": round(float(start), 3), "p0": round(float(pressure), 1),
            "ratio": float(ratio), "fraction": float(fraction),
            "number": log_uniform(rng, 1e7, 1e11), "duration": log_uniform(rng, 0.02, 0.3),
            "rate": log_uniform(rng, 3e3, 2e5), "hold": log_uniform(rng, 3e-4, 5e-3),
            "noise": log_uniform(rng, 0.003, 0.05), "blank": bool(rng.random() < 0.06),
            "spread": log_uniform(rng, 0.002, 0.03), "scale": float(np.exp(rng.normal(0, 0.03))),
            "sticking": 1.0 if rng.random() < 0.5 else float(rng.uniform(0.2, 1.0)),
            "bend": float(rng.normal(0, rng.choice([0.0, 0.005, 0.01]))),
            "hum": rng.random() < 0.25, "drift": rng.random() < 0.25, "spikes": rng.random() < 0.3,
            "holes": rng.random() < 0.15, "clip": rng.random() < 0.15,
            "kelvin": round(float(rng.uniform(0.1, 0.3)), 3) if rng.random() < 0.35 else 0.0,
            "coarse": bool(rng.random() < 0.2),
        }
        pulse["rate"] = min(pulse["rate"], 20000 / pulse["duration"])
        if not wet < 0.97 or growth < 225.0:
            continue
        if _fits(pulse):
            return pulse
    raise RuntimeError(f"no conditions found for seed {seed}")


def _fits(pulse):
    """Shorten the pulse so that its radius stays in the table; return whether it can be made."""
    apparatus = apparatus_from_mapping(chamber(pulse, {"pressure": True}))
    grid = np.arange(-5e-3, pulse["duration"], 2e-5)
    scenario = _scenario(pulse)
    try:
        low = hold_pressure(apparatus, scenario)
    except InvalidInputError:
        return False
    levels = (pulse["p0"], low, pulse["ratio"] * pulse["p0"])
    setup = growth_setup(apparatus, grid, pressure_profile(grid, levels, pulse["hold"]))
    radius = grow(setup, Cloud(number=np.log(1e5), scale=np.log(pulse["scale"])))
    mean = radius.radius[0].mean(axis=0)
    far = mean > 0.85e-6 * pulse["max_radius"]
    if far.any():
        pulse["duration"] = float(radius.time[np.argmax(far)])
    pulse["stated"] = {
        "growth": (setup.path.reference_temperature, setup.path.reference_pressure),
        "hold": (setup.hold.effective, setup.hold.temperature, setup.hold.pressure),
    }
    return pulse["duration"] > max(0.02, 12e-3 + pulse["hold"]) and mean.max() > 0.35e-6


def _scenario(pulse):
    return Scenario(
        0.0 if pulse["blank"] else pulse["number"], pulse["duration"], pulse["rate"],
        pulse["noise"], pulse["hold"], pulse["ratio"],
        cloud={"scale": np.log(pulse["scale"]), "accommodation": np.log(pulse["sticking"]),
               "bend": pulse["bend"], "variance": max(pulse["spread"]**2 - 9e-6, 0.0)},
    )


def chamber(pulse, more=None, error=None):
    """Return the chamber file of a pulse as tables; ``error`` is what it says wrongly."""
    error = error or {}
    tables = {
        "beam": {"wavelength_nm": pulse["wavelength"], "polarization": pulse["polarization"]},
        "detector": [], "vapour": {
            "substance": pulse["vapour"], "mole_fraction": pulse["fraction"]},
        "gas": {"carrier": pulse["carrier"]},
        "chamber": {"temperature_K": pulse["T0"] + error.get("kelvin", 0.0),
                    "pressure_kPa": pulse["p0"] * 1e-3},
        "analysis": {"max_radius_um": pulse["max_radius"]},
    }
    if pulse["chamber_path"]:
        tables["chamber"]["path_mm"] = pulse["chamber_path"]
    tables["detector"] = _detector_tables(pulse, more or {}, error)
    if pulse["index"] is not None:
        tables["vapour"]["refractive_index"] = pulse["index"]
    if pulse["transmission"]:
        tables["transmission"] = {"column": "beam_V", "path_mm": pulse["beam_path"],
                                  "half_angle_deg": pulse["receiver"]}
    _state_gas(tables, pulse, more or {}, error)
    return tables


def _detector_tables(pulse, more, error):
    """Return the detectors as the chamber file says."""
    found = []
    for i, (angle, half) in enumerate(pulse["detectors"]):
        one = {"column": f"scatter{i + 1}_V", "half_angle_deg": half,
               "angle_deg": angle + error.get("degrees", (0.0, 0.0))[i],
               "time_constant_ms": pulse["constant"]}
        if more.get("gains"):
            one["gain_V_m"] = more["gains"][i]
        if more.get("full"):
            one["full_scale_V"] = more["full"][i]
        if pulse["angle_sigma"] and error:
            one["angle_deg_sigma"] = pulse["angle_sigma"]
        found.append(one)
    return found


def _state_gas(tables, pulse, more, error):
    """Add the gauge, or the stated states where there is none."""
    off = error.get("kelvin", 0.0)
    if more.get("pressure", pulse["pressure"]):
        tables["pressure"] = {"column": "gauge_kPa"}
        if pulse["kelvin"] and error:
            tables["chamber"]["temperature_K_sigma"] = pulse["kelvin"]
        return
    stated = more.get("stated", pulse.get("stated"))
    warmth, pressure = stated["growth"]
    tables["growth"] = {"temperature_K": warmth + off, "pressure_kPa": pressure * 1e-3}
    effective, cold, held = stated["hold"]
    tables["pulse"] = {"hold_ms": effective * 1e3, "temperature_K": cold + off,
                       "pressure_kPa": held * 1e-3}
    if pulse["kelvin"] and error:
        tables["growth"]["temperature_K_sigma"] = pulse["kelvin"]


def simulate_shared(pulse, rng):
    """Return noiseless shapes by scatterfit's own forward model, on a fine grid of pressure."""
    apparatus = apparatus_from_mapping(chamber(pulse))
    scenario = _scenario(pulse)
    count = round((pulse["duration"] + 5e-3) * pulse["rate"]) + 1
    time = np.round(-5e-3 + np.arange(count) / pulse["rate"], 12)
    fine, pressure, delay = None, None, 8.5e-3 + 0.1 * rng.random() * pulse["duration"]
    if pulse["pressure"]:
        fine = np.unique(np.concatenate([
            np.arange(-5e-3, 10e-3 + pulse["hold"], 5e-6), np.linspace(-5e-3, time[-1], 2000)]))
        low = hold_pressure(apparatus, scenario)
        levels = (pulse["p0"], low, pulse["ratio"] * pulse["p0"])
        pressure = pressure_profile(time, levels, pulse["hold"])
        fine_pressure, delay = pressure_profile(fine, levels, pulse["hold"]), 0.0
        setup = growth_setup(apparatus, fine, fine_pressure, classes=FINE_CLASSES)
        pressure = pressure + 2e-4 * pulse["p0"] * rng.standard_normal(count)
    else:
        setup = growth_setup(apparatus, duration=pulse["duration"], classes=FINE_CLASSES)
    # All classes carry light: none of the coarser stand-ins that the fit uses.
    setup = replace(setup, births=replace(setup.births, finer=()))
    kernel, relative, _ = pulse_kernel(setup, default_store())
    straight = (0.0,) * len(apparatus.detectors)
    model = pulse_model(setup, kernel, relative, straight)
    cloud = Cloud(**{"number": float(np.log(pulse["number"])), "delay": delay,
                     "angles": straight, **scenario.cloud})
    parts = [channel_signals(model, cloud, piece) for piece in np.array_split(
        time, max(1, time.size // 8000))] if not pulse["constant"] else [
        channel_signals(model, cloud, time)]
    signals = [np.concatenate([p[0][i].shape for p in parts]) for i in range(len(model.channels))]
    chosen = np.linspace(setup.births.median + delay, time[-1], 6)[1:]
    growth = grow(setup, cloud)
    clock_at = np.append(chosen, time[-1]) - delay
    square = CubicHermiteSpline(growth.time, growth.square[0], growth.square_rate[0], axis=1)
    length = float(np.ravel(growth.length)[0])
    middle = [float(np.sqrt(np.interp(setup.births.median, np.ravel(growth.birth_times), row))
                    - length) * 1e6 for row in square(clock_at).T]
    hold, path = setup.hold, setup.path
    back = hold.pressure / hold.temperature * path.reference_temperature / path.reference_pressure
    truth = {
        "N_per_cm3": pulse["number"] * 1e-6, "S_growth": setup.growth_saturation_ratio,
        "radius_um": middle[:-1], "final_radius_um": middle[-1], "time_ms": list(chosen * 1e3),
        "birth_ms": (setup.births.median + delay) * 1e3,
        "J_per_cm3_s": pulse["number"] * 1e-6 * back / hold.effective,
        "optical_depth_end": -float(np.log(signals[-1][-1])) if pulse["transmission"] else 0.0,
    }
    shapes = signals[:len(pulse["detectors"])]
    beam = signals[-1] if pulse["transmission"] else None
    if pulse["blank"]:
        shapes, beam = [0 * s for s in shapes], None if beam is None else np.ones_like(beam)
        truth["N_per_cm3"] = 0.0
    return time, shapes, beam, pressure, truth, None


def simulate_independent(pulse, rng):
    """Return noiseless shapes by the independent simulator."""
    liquid, gas = matter.substance(pulse["vapour"]), matter.carrier(pulse["carrier"])
    nature = ip.Nature(
        scale=1.0, accommodation=pulse["sticking"], bend=pulse["bend"], spread=pulse["spread"],
        diffusivity=float(np.exp(rng.normal(0, 0.02))), rate=10.0 ** rng.uniform(-2, 2),
        conductivity=float(np.exp(rng.normal(0, 0.01))), barrier=float(rng.uniform(0.92, 1.08)),
        saturation=float(np.exp(rng.normal(0, 0.003))), creep=float(rng.normal(0, 0.002)),
        index_shift=0.0 if pulse["index"] else float(rng.normal(0, 2e-4)),
    )
    props = ip.Properties(liquid, gas, pulse["fraction"], nature)
    count = round((pulse["duration"] + 5e-3) * pulse["rate"]) + 1
    time = np.round(-5e-3 + np.arange(count) / pulse["rate"], 12)
    grown = ip.grow(props, time, (
        pulse["T0"], (pulse["p0"], pulse["ratio"] * pulse["p0"]), pulse["hold"],
        pulse["fraction"]), pulse["number"], nature)
    if grown is None:
        raise InvalidInputError("no hold pressure gives this number")
    cloud, pressure = grown
    truth = cloud.truth
    gas_index = float(gas.refractive_index(
        pulse["wavelength"] * 1e-9, truth["T_growth"], truth["p_growth_kPa"] * 1e3))
    state = (truth["T_growth"], truth["p_growth_kPa"] * 1e3, pulse["fraction"])
    warmth = ip.droplet_flux(props, np.array([1e-6]), np.array([state[0]]), state, nature)[1]
    index = pulse["index"] or nature.index_shift + float(np.real(
        liquid.refractive_index(pulse["wavelength"] * 1e-9, float(warmth[0]))))
    word = {"perpendicular": np.pi / 2, "parallel": 0.0, "unpolarized": None}
    turn = word[pulse["polarization"]] if isinstance(pulse["polarization"], str) else np.radians(
        pulse["polarization"])
    optics = (pulse["wavelength"] * 1e-9, turn,
              [tuple(np.radians(d)) for d in pulse["detectors"]], np.radians(pulse["receiver"]))
    tables = ip.light_tables(optics, index / gas_index, gas_index,
                             1.15 * float(cloud.radius.max()) + 1e-7)
    shapes, beam, depth = ip.channel_shapes(
        cloud, tables, pulse["spread"], (pulse["chamber_path"] * 1e-3, pulse["beam_path"] * 1e-3),
        1.0 / pulse["rate"], [pulse["constant"] * 1e-3] * len(pulse["detectors"]))
    chosen = np.linspace(truth["birth_ms"] * 1e-3, time[-1], 6)[1:]
    truth = {**truth, "time_ms": list(chosen * 1e3),
             "radius_um": [float(np.interp(t, time, cloud.median)) * 1e6 for t in chosen],
             "final_radius_um": float(cloud.median[-1]) * 1e6, "optical_depth_end": depth}
    if pulse["blank"]:
        shapes, beam = [0 * s for s in shapes], np.ones_like(beam)
        truth["N_per_cm3"] = 0.0
    stated = {"growth": (truth["T_growth"], truth["p_growth_kPa"] * 1e3),
              "hold": (truth["effective_ms"] * 1e-3, truth["T_nuc"], truth["p_nuc_kPa"] * 1e3)}
    measured = None
    if pulse["pressure"]:
        measured = pressure + 2e-4 * pulse["p0"] * rng.standard_normal(count)
    return time, shapes, beam if pulse["transmission"] else None, measured, truth, stated


def _disturbed(pulse, light, clock_and_mains, rng):
    """Return light with offset, noise, hum, drift and spikes [V]."""
    time, span, mains = clock_and_mains
    v = 0.05 + light + np.hypot(0.0013 * TOP, pulse["noise"] * light) * rng.standard_normal(
        time.size)
    if pulse["hum"]:
        size = rng.uniform(0.003, 0.02) * TOP
        v += size * np.sin(2 * np.pi * mains * time + rng.uniform(0, 6))
        if rng.random() < 0.5:
            v += 0.4 * size * np.sin(2 * np.pi * 3 * mains * time + rng.uniform(0, 6))
    if pulse["drift"]:
        v += TOP * rng.normal(0, 0.012) * span
        if rng.random() < 0.6:
            v += TOP * rng.normal(0, 0.012) * span**2
    if pulse["spikes"]:
        where = rng.integers(0, time.size, int(rng.integers(1, 9)))
        v[where] += rng.uniform(-1, 1, where.size) * TOP
    return v


def record(pulse, made, rng):
    """Return the columns as recorded, the believed chamber, and what was done to them."""
    time, shapes, beam, pressure, _, stated = made
    columns, full, gains, tags = {}, [], [], []
    span = (time - time[0]) / (time[-1] - time[0])
    mains = float(rng.choice([50.0, 60.0]))
    for i, shape in enumerate(shapes):
        top = float(shape.max())
        gain = TOP / top if top > 0 else 1e6 * TOP
        if pulse["blank"]:
            gain = 1e5
        gains.append(gain)
        v = _disturbed(pulse, shape * gain, (time, span, mains), rng)
        limit = 10.0
        if pulse["clip"] and top > 0:
            limit = round(float(rng.uniform(0.5, 0.9)) * TOP, 2)
        full.append(limit)
        step = limit / (2**10 if pulse["coarse"] else 2**15)
        v = np.round(np.clip(v, -limit, limit) / step) * step
        if pulse["holes"]:
            v[rng.integers(0, time.size, int(rng.integers(1, max(3, time.size // 50))))] = np.nan
        columns[f"scatter{i + 1}_V"] = v
    if beam is not None:
        columns["beam_V"] = np.round(LASER * (beam + 0.002 * rng.standard_normal(time.size)), 5)
    if pressure is not None:
        columns["gauge_kPa"] = pressure
    more = {"full": full, "gains": gains if pulse["gain"] else None}
    if stated:
        more["stated"] = stated
    error = {"kelvin": pulse["kelvin"] * rng.standard_normal(),
             "degrees": pulse["angle_sigma"] * rng.standard_normal(2)}
    tags += [t for t in ("hum", "drift", "spikes", "holes", "clip", "coarse") if pulse[t]]
    return columns, chamber(pulse, more, error), tags, full
