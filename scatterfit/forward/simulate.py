"""Synthetic pulses with their truth."""

import math
from dataclasses import dataclass, field

import numpy as np

from scatterfit import matter
from scatterfit.droplet_growth.classical_rate import classical_log_rate
from scatterfit.droplet_growth.gas_path import adiabatic_temperature
from scatterfit.droplet_growth.setup import growth_setup, vapour_mole_fraction
from scatterfit.errors import InvalidInputError
from scatterfit.forward.growth_model import Cloud
from scatterfit.forward.light import spread_table
from scatterfit.forward.model import channel_signals

_FINE = 1e-5
_CLASSES = 16
_FLOOR = 0.0013
_SPREAD_VARIANCE = 7e-6
_PRESSURE_NOISE = 2e-4
_TOP = 4.0
_RANGE = 10.0
_LASER = 5.0
_TRANSMISSION_NOISE = 0.002


@dataclass(frozen=True)
class Expected:
    """What a column shows without noise, and the noise it has."""

    value: np.ndarray
    """Volts or pascal, not cut at full scale, shape (n,)."""
    sigma: np.ndarray
    """Standard deviation of each sample before it is digitized, shape (n,) [V, Pa]."""
    step: float = 0.0
    """Resolution of the digitizer [V]."""
    full_scale: float | None = None
    """Where the digitizer cuts [V]."""


@dataclass(frozen=True)
class SimulatedPulse:
    """One synthetic pulse."""

    time: np.ndarray
    """Samples, shape (n,) [s]."""
    columns: dict
    """Column name to samples, volts and pascal, each shape (n,)."""
    truth: dict
    """What went in, in the units its keys name."""
    expected: dict = field(default_factory=dict)
    """Column name to what it would show without noise (Expected)."""
    cloud: Cloud | None = None
    """The true cloud."""


@dataclass(frozen=True)
class Scenario:
    """What a pulse does, apart from the bench."""

    number: float
    """Droplets per volume at the growth state [1/m^3]."""
    duration: float = 0.1
    """Length of the record after time zero [s]."""
    rate: float = 50e3
    """Samples a second [Hz]."""
    noise: float = 0.01
    """Relative noise of the scattered light [-]."""
    hold: float = 1e-3
    """Nucleation hold [s]."""
    floor: float = _FLOOR
    """Noise without light, over the largest light [-]."""
    transmission_noise: float = _TRANSMISSION_NOISE
    """Noise of the transmitted light, over the light before the pulse [-]."""
    growth_pressure_ratio: float = 0.78
    """Pressure of the growth stage over that before the expansion [-]."""
    cloud: dict = field(default_factory=dict)
    """Further parameters of the cloud (:class:`Cloud`): what nature does otherwise."""


def pressure_profile(time, levels, hold, start=5e-3, fall=3e-3, rise=2e-4):
    """Return the pressure of an expansion, a hold and a slight recompression.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples [s].
    levels : tuple of float
        Before, during the hold and after it [Pa].
    hold : float
        Length of the hold [s].
    start, fall, rise : float
        When the expansion starts, how long it takes, and the recompression [s].

    Returns
    -------
    pressure : ndarray, shape (n,)
        Without corners [Pa].

    Examples
    --------
    >>> pressure_profile(np.array([0.0, 8.5e-3, 0.05]), (9e4, 5e4, 7e4), 1e-3)
    array([90000., 50000., 70000.])
    """
    before, low, after = levels
    down = np.clip((time - start) / fall, 0.0, 1.0)
    up = np.clip((time - start - fall - hold) / rise, 0.0, 1.0)
    smooth_down = 0.5 * (1.0 - np.cos(np.pi * down))
    smooth_up = 0.5 * (1.0 - np.cos(np.pi * up))
    return before + (low - before) * smooth_down + (after - low) * smooth_up


def hold_pressure(apparatus, scenario):
    """Return the pressure of the hold at which the classical rate gives the number wanted.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    scenario : Scenario
        With number and hold.

    Returns
    -------
    pressure : float
        [Pa].

    Raises
    ------
    InvalidInputError
        If no pressure between a fifth of the start and the growth stage does.
    """
    substance = matter.substance(apparatus.vapour.substance)
    substance = substance.with_overrides(apparatus.vapour.overrides)
    gas = matter.carrier(apparatus.carrier)
    start = apparatus.chamber.pressure
    fraction = vapour_mole_fraction(apparatus, substance, start)
    levels = np.linspace(0.2, scenario.growth_pressure_ratio, 4000) * start
    cp = float(matter.moist_heat_capacity(gas, substance, fraction, apparatus.chamber.temperature))
    warmth = adiabatic_temperature(levels, apparatus.chamber.temperature, start, cp)
    ratio = fraction * levels / substance.saturation_pressure(warmth)
    liquid = (substance.surface_tension(warmth), substance.density(warmth), substance.molar_mass)
    rate = classical_log_rate(warmth, fraction * levels, ratio, liquid)
    wanted = np.log(max(scenario.number, 1e3) / scenario.hold)
    enough = rate > wanted
    if not enough.any() or enough.all():
        message = (
            f"no hold pressure gives {scenario.number * 1e-6:g} droplets per cm3 in "
            f"{scenario.hold * 1e3:g} ms with this vapour: change [vapour] or --number"
        )
        raise InvalidInputError(message)
    return float(levels[np.flatnonzero(enough)[-1]])


def simulate_pulse(apparatus, scenario, make_model, generator):
    """Return one synthetic pulse.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    scenario : Scenario
        What happens.
    make_model : callable
        From a growth setup to a forward model (PulseModel).
    generator : numpy.random.Generator
        Of the noise.

    Returns
    -------
    pulse : SimulatedPulse
        Columns and truth.
    """
    count = round((scenario.duration + 5e-3) * scenario.rate) + 1
    time = np.round(-5e-3 + np.arange(count) / scenario.rate, 12)
    expected, pressure, real = {}, None, None
    # Nature does not wait for samples: what is true follows from a finer record.
    steps = math.ceil(1.0 / (scenario.rate * _FINE))
    fine = np.linspace(time[0], time[-1], (count - 1) * steps + 1)
    if apparatus.pressure is not None:
        pressure = _pressure(apparatus, scenario, time)
        real = _pressure(apparatus, scenario, fine) - apparatus.pressure.offset
    setup = growth_setup(apparatus, fine, real, duration=scenario.duration, classes=_CLASSES)
    model = make_model(setup)
    delay = 0.0 if setup.clock_known else 8.5e-3
    cloud = Cloud(**{
        "number": float(np.log(max(scenario.number, 1e-3))), "delay": delay,
        "variance": _SPREAD_VARIANCE, "angles": (0.0,) * len(apparatus.detectors),
        **scenario.cloud,
    })
    signals, state = channel_signals(model, cloud, time)
    for channel, signal in zip(model.channels, signals, strict=True):
        expected[channel.column] = _light(apparatus, channel, signal.shape, scenario)
    if pressure is not None:
        noise = np.full(count, _PRESSURE_NOISE * pressure[0])
        expected[apparatus.pressure.column] = Expected(pressure - apparatus.pressure.offset, noise)
    columns = {name: _recorded(one, generator) for name, one in expected.items()}
    if apparatus.reference is not None:
        columns[apparatus.reference.column] = apparatus.reference.dark + np.full(count, 2.0)
    truth = _truth(setup, model, scenario, state, (time, cloud))
    return SimulatedPulse(time, columns, truth, expected, cloud)


def _pressure(apparatus, scenario, time):
    """Return the true pressure of a pulse [Pa]."""
    start = apparatus.chamber.pressure
    if start is None:
        message = "chamber.pressure_kPa is missing: a simulation has no trace to take it from"
        raise InvalidInputError(message)
    after = scenario.growth_pressure_ratio * start
    low = after if apparatus.seed is not None else hold_pressure(apparatus, scenario)
    return pressure_profile(time, (start, low, after), scenario.hold)


def _light(apparatus, channel, shape, scenario):
    """Return what an optical channel shows without noise (Expected)."""
    count = shape.size
    if channel.kind == "transmission":
        noise = np.full(count, _LASER * scenario.transmission_noise)
        return Expected(_LASER * shape + apparatus.transmission.dark, noise, 1e-5)
    detector = next(d for d in apparatus.detectors if d.column == channel.column)
    top = float(shape.max())
    light = shape if channel.gain else shape * (_TOP / top if top > 0.0 else 0.0)
    if scenario.number <= 0.0:
        light = np.zeros(count)
    scale = float(light.max()) or 1.0
    noise = np.hypot(scenario.floor * scale, scenario.noise * light)
    full = detector.full_scale or _RANGE
    return Expected((detector.dark or 0.0) + 0.05 + light, noise, full / 2**15, full)


def _recorded(expected, generator):
    """Return a column's samples with noise, clipping and steps [V, Pa]."""
    samples = expected.value + expected.sigma * generator.standard_normal(expected.value.size)
    if expected.full_scale is not None:
        samples = np.clip(samples, -expected.full_scale, expected.full_scale)
    return np.round(samples / expected.step) * expected.step if expected.step else samples


def _truth(setup, model, scenario, state, where):
    """Return what went into a pulse."""
    time, cloud = where
    median = setup.births.median + cloud.delay
    chosen = np.linspace(median, time[-1], 6)[1:]
    # The droplet of median age: between the classes born before and after it.
    radius = np.array([
        np.interp(setup.births.median, setup.births.times,
                  [np.interp(t, time, r) for r in state.radius]) for t in chosen
    ])
    hold = setup.hold
    path = setup.path
    number = max(scenario.number, 0.0)
    row = model.light
    denser, rate = None, None
    if hold is not None and hold.effective:
        denser = (hold.pressure / hold.temperature) / (
            path.reference_pressure / path.reference_temperature
        )
        rate = number * denser / hold.effective * 1e-6
    depth = _depth(model, state, cloud, row)
    return {
        "N_per_cm3": number * 1e-6, "S_growth": setup.growth_saturation_ratio,
        "T_growth": path.reference_temperature, "p_growth_kPa": path.reference_pressure * 1e-3,
        "T_nuc": hold.temperature if hold else None,
        "p_nuc_kPa": hold.pressure * 1e-3 if hold else None,
        "S_nuc": hold.saturation_ratio if hold else None,
        "J_per_cm3_s": rate, "birth_ms": median * 1e3, "hold_ms": scenario.hold * 1e3,
        "effective_ms": hold.effective * 1e3 if hold and hold.effective else None,
        "time_ms": [float(t) * 1e3 for t in chosen],
        "radius_um": [float(r) * 1e6 for r in radius],
        "final_radius_um": float(radius[-1]) * 1e6,
        "optical_depth_end": depth if number else 0.0,
    }


def _depth(model, state, cloud, light):
    """Return the optical depth at the last sample over the transmission's or chamber's path."""
    apparatus = model.setup.apparatus
    path = apparatus.transmission.path if apparatus.transmission else apparatus.chamber.path
    table = spread_table(light, cloud.variance)
    place = (np.log(np.maximum(state.radius[:, -1], 1e-9)) - table.start) / table.step
    row = table.values[model.extinction_row]
    mean = float(state.growth.weights @ np.interp(place, np.arange(row.size), row))
    return float(state.number_density[-1] * mean * path)


