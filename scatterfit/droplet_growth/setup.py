"""From the bench and a pressure trace to all that growth needs: gas, births, properties."""

from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit import matter
from scatterfit.apparatus.records import Apparatus
from scatterfit.constants import GAS_CONSTANT, STANDARD_PRESSURE
from scatterfit.droplet_growth.births import Births, births_at_once, births_from_rate
from scatterfit.droplet_growth.cautions import (
    freezing_warnings,
    pressure_warnings,
    range_warnings,
)
from scatterfit.droplet_growth.classical_rate import classical_log_rate
from scatterfit.droplet_growth.cloud import SOLVED
from scatterfit.droplet_growth.gas_path import GasPath, adiabatic_temperature, choose_nodes
from scatterfit.droplet_growth.hold import STATED_DURATION, duration_sigma, settle_hold
from scatterfit.droplet_growth.pressure import smooth, undo_lag
from scatterfit.droplet_growth.properties import GrowthProperties, growth_properties

_FEW = 3
_FEW_FINE = ((9, 0.008),)
_BIRTH_RADIUS = 3e-9
# How long the gas takes from a stated hold to the growth stage, in holds (common practice).
_RECOMPRESSION = 0.2
_RAMP_NODES = 9
_SEED_RADIUS = 0.2e-6
_STEP = 1e-4


@dataclass(frozen=True)
class Hold:
    """The state in which droplets are born, at the peak of the nucleation rate."""

    temperature: float
    """[K]."""
    pressure: float
    """[Pa]."""
    saturation_ratio: float
    """Over the liquid [-]."""
    effective: float | None
    """Integral of the rate over its peak [s]."""
    log_rate: float
    """ln of the classical rate there, per m3 and s [-]."""
    effective_sigma: float = STATED_DURATION
    """Relative standard uncertainty of ``effective`` [-]."""
    samples: float = np.inf
    """Samples of the gauge within ``effective`` [-]."""


@dataclass(frozen=True)
class GrowthSetup:
    """One pulse, ready to be grown."""

    apparatus: Apparatus
    substance: matter.Substance
    gas: matter.Gas
    properties: GrowthProperties
    path: GasPath
    births: Births
    few_births: Births
    """The same births in three classes, for first looks."""
    hold: Hold | None
    vapour_fraction: float
    """Mole fraction of vapour before the expansion [-]."""
    start_pressure: float
    """Before the expansion [Pa]."""
    growth_saturation_ratio: float
    """Over the liquid, undisturbed, at the reference pressure of growth [-]."""
    start_radius: float
    """Of droplets at birth [m]."""
    droplet_temperature: float
    """What a droplet has in the growth stage, by the linear law [K]."""
    clock_known: bool
    """Whether births are timed by a pressure trace."""
    vapour_by_temperature: float = 0.0
    """d ln(vapour fraction) / d ln(chamber temperature), where the vapour is stated relative to
    saturation [-]."""
    threshold: float | None = None
    """Saturation ratio at which seeds become droplets [-]; ``None`` without seeds."""
    ramp: tuple[np.ndarray, np.ndarray] | None = None
    """Time [s] and undisturbed saturation ratio [-] of seeded pulses."""
    warnings: tuple[tuple[str, str], ...] = field(default=())
    """Codes and texts worth telling the user."""
    tolerance: float = SOLVED
    """Change of (r + l)^2 in a round at which growth counts as solved [-]."""


def vapour_mole_fraction(apparatus, substance, pressure):
    """Return the mole fraction of vapour before the expansion.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    substance : matter.Substance
        Its vapour.
    pressure : float
        Pressure before the expansion [Pa].

    Returns
    -------
    fraction : float
        Mole fraction of vapour in the moist gas [-].
    """
    vapour, chamber = apparatus.vapour, apparatus.chamber
    if vapour.mole_fraction is not None:
        return float(vapour.mole_fraction)
    if vapour.partial_pressure is not None:
        return float(vapour.partial_pressure) / pressure
    if vapour.saturation_ratio is not None:
        saturated = float(substance.saturation_pressure(chamber.temperature))
        return float(vapour.saturation_ratio) * saturated / pressure
    return float(substance.saturation_pressure(vapour.dew_point)) / pressure


def growth_setup(apparatus, time=None, pressure=None, duration=0.1, classes=6):
    """Return what growth needs, from the pressure trace or from the stated states.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,), optional
        Sample times [s].
    pressure : ndarray, shape (n,), optional
        Absolute pressure as recorded [Pa].
    duration : float
        How long growth is followed where there is no pressure trace [s].
    classes : int
        Classes of droplets by birth.

    Returns
    -------
    setup : GrowthSetup
        Gas path, births and properties.
    """
    substance = matter.substance(apparatus.vapour.substance)
    substance = substance.with_overrides(apparatus.vapour.overrides)
    gas = matter.carrier(apparatus.carrier)
    if pressure is None:
        return _stated(apparatus, substance, gas, duration, classes)
    return _measured(apparatus, substance, gas, (time, pressure), classes)


def _measured(apparatus, substance, gas, record, classes):
    """Return the setup of a pulse with a pressure trace."""
    time, recorded = record
    gauge = apparatus.pressure
    recorded = np.asarray(recorded, dtype=float) + gauge.offset
    smoothed, noise = smooth(recorded)
    smoothed = undo_lag(time, smoothed, gauge.time_constant)
    plateau = _plateau(smoothed, noise)
    start = apparatus.chamber.pressure or plateau
    warnings = pressure_warnings(apparatus, start, plateau, noise)
    fraction = vapour_mole_fraction(apparatus, substance, start)
    settled = float(np.median(smoothed[time > 0.5 * (time[0] + time[-1])]))
    lowest = min(float(smoothed.min()), settled)
    low = _expanded(gas, substance, fraction, apparatus.chamber.temperature, (start, lowest))[0]
    reference, heat_capacity = _expanded(
        gas, substance, fraction, apparatus.chamber.temperature, (start, settled)
    )
    bench = (apparatus, substance, gas)
    before = (fraction, start, heat_capacity)
    temperature, saturation, log_rate = _states(bench, before, smoothed)
    if apparatus.seed is None and not gauge.time_constant and np.isfinite(log_rate).any():
        smoothed = settle_hold(time, recorded, smoothed, log_rate, noise)
        temperature, saturation, log_rate = _states(bench, before, smoothed)
    more = {"clock_known": True, "warnings": warnings}
    if apparatus.seed is not None:
        more["threshold"] = _threshold(apparatus, substance, reference)
        more["ramp"] = (time, saturation)
        births = few = births_at_threshold(time, saturation, more["threshold"])
        peak = int(np.argmax(saturation))
    else:
        births = births_from_rate(time, log_rate, classes)
        few = births_from_rate(time, log_rate, _FEW, _FEW_FINE)
        peak = int(np.argmax(log_rate))
    beside = smoothed[peak] * np.exp([-_STEP, _STEP])
    lower, higher = np.maximum(_states(bench, before, beside)[2], -700.0)
    steep = (higher - lower) / (2.0 * _STEP)
    samples = births.effective / float(np.median(np.diff(time)))
    hold = Hold(
        float(temperature[peak]), float(smoothed[peak]), float(saturation[peak]),
        births.effective or None, float(log_rate[peak]),
        duration_sigma(time, log_rate, abs(steep) * noise / smoothed[peak], samples), samples,
    )
    first, last = births.times[0], births.times[-1]
    nodes = choose_nodes(time, smoothed, (first, max(last, first + 1e-5)))
    at_nodes = np.interp(nodes, time, smoothed)
    path = GasPath(nodes, at_nodes, _states(bench, before, at_nodes)[0], settled, reference)
    return _finish(bench, path, (births, few, hold), (fraction, start, low), **more)


def _states(bench, before, pressure):
    """Return temperature [K], saturation ratio and ln of the classical rate at each pressure."""
    apparatus, substance, _ = bench
    fraction, start, heat_capacity = before
    temperature = adiabatic_temperature(
        pressure, apparatus.chamber.temperature, start, heat_capacity
    )
    ratio = fraction * pressure / substance.saturation_pressure(temperature)
    rate = classical_log_rate(
        temperature, fraction * pressure, ratio, _liquid(substance)(temperature)
    )
    return temperature, ratio, rate


def _stated(apparatus, substance, gas, duration, classes):
    """Return the setup of a pulse whose growth and hold are stated; births are centred on 0."""
    growth, pulse, start = apparatus.growth, apparatus.pulse, apparatus.chamber.pressure
    fraction = vapour_mole_fraction(apparatus, substance, start)
    length = pulse.hold if pulse and pulse.hold else 0.0
    held = pulse is not None and pulse.temperature is not None and pulse.pressure is not None
    if length:
        grid = np.linspace(-0.5 * length, 0.5 * length, 201)
        births = births_from_rate(grid, np.zeros(grid.size), classes)
        few = births_from_rate(grid, np.zeros(grid.size), _FEW, _FEW_FINE)
    else:
        births = few = births_at_once(0.0)
    ends = (births.times[0], max(births.times[-1], births.times[0] + 1e-5))
    nodes = choose_nodes(
        np.linspace(-0.5 * length, duration, 2001), np.full(2001, growth.pressure), ends
    )
    path = GasPath(*_held(nodes, length, (pulse if held else growth), growth),
                   growth.pressure, growth.temperature)
    hold = None
    if held:
        saturation = fraction * pulse.pressure / float(
            substance.saturation_pressure(pulse.temperature)
        )
        log_rate = classical_log_rate(
            pulse.temperature, fraction * pulse.pressure, saturation,
            _liquid(substance)(pulse.temperature),
        )
        hold = Hold(pulse.temperature, pulse.pressure, saturation, pulse.hold, float(log_rate))
    low = min(growth.temperature, pulse.temperature if held else growth.temperature)
    return _finish(
        (apparatus, substance, gas), path, (births, few, hold), (fraction, start, low),
        clock_known=False,
    )


def _held(nodes, length, hold, growth):
    """Return nodes, pressure and temperature of a hold that goes over into growth.

    Births that last longer than stated begin before the nodes. A step would leave droplets born
    last too small for the growth stage: the gas takes a fifth of the hold.
    """
    end = 0.5 * length
    if length:
        ramp = end + _RECOMPRESSION * length * np.linspace(0.0, 1.0, _RAMP_NODES)
        nodes = np.unique(np.concatenate([[nodes[0] - end], nodes, ramp]))
    share = np.clip((nodes - end) / max(_RECOMPRESSION * length, 1e-12), 0.0, 1.0)
    return (nodes, hold.pressure + share * (growth.pressure - hold.pressure),
            hold.temperature + share * (growth.temperature - hold.temperature))


def _finish(bench, path, births, before, **more):
    """Return the setup, with properties over the range that the pulse can reach."""
    apparatus, substance, gas = bench
    hold, (fraction, start, low) = births[2], before
    reference = path.reference_temperature
    high = max(apparatus.chamber.temperature, reference) + 15.0
    saturated = float(substance.saturation_pressure(reference))
    growth_ratio = fraction * path.reference_pressure / saturated
    droplet = reference + 0.6 * _warming(substance, gas, fraction, path)
    properties = growth_properties(substance, gas, fraction, low - 10.0, high, droplet)
    radius = _BIRTH_RADIUS
    if apparatus.seed is not None:
        radius = 0.5 * apparatus.seed.diameter if apparatus.seed.diameter else _SEED_RADIUS
    warnings = more.pop("warnings", ())
    warnings += freezing_warnings(substance, hold.temperature if hold is not None else reference)
    if apparatus.vapour.saturation_ratio is not None:
        start_temperature = apparatus.chamber.temperature
        latent = float(substance.latent_heat(start_temperature))
        more["vapour_by_temperature"] = latent / (GAS_CONSTANT * start_temperature)
    warnings += range_warnings(substance, gas, (reference, droplet))
    return GrowthSetup(
        apparatus, substance, gas, properties, path, *births, fraction, start,
        growth_ratio, radius, droplet, warnings=warnings, **more,
    )


def _warming(substance, gas, fraction, path):
    """Return roughly how much warmer than the gas a droplet is [K], by the linear law."""
    temperature = path.reference_temperature
    saturated = float(substance.saturation_pressure(temperature)) / path.reference_pressure
    latent = float(substance.latent_heat(temperature))
    diffusivity = float(matter.diffusivity(substance, gas)(temperature))
    flow = diffusivity * STANDARD_PRESSURE / (GAS_CONSTANT * temperature)
    conductivity = float(gas.conductivity(temperature))
    steepness = latent / (GAS_CONSTANT * temperature**2)
    excess = max(fraction - saturated, 0.0)
    return latent * flow * excess / (conductivity + latent * flow * saturated * steepness)


def _expanded(gas, substance, fraction, start_temperature, pressures):
    """Return the temperature after an expansion [K] and the heat capacity that leads there."""
    start, end = pressures
    temperature = start_temperature
    for _ in range(4):
        middle = 0.5 * (start_temperature + temperature)
        heat_capacity = float(matter.moist_heat_capacity(gas, substance, fraction, middle))
        temperature = float(adiabatic_temperature(end, start_temperature, start, heat_capacity))
    return temperature, heat_capacity


def _plateau(smoothed, noise):
    """Return the pressure before the expansion [Pa]."""
    first = float(np.median(smoothed[: max(smoothed.size // 200, 5)]))
    near = np.abs(smoothed - first) < max(4.0 * noise, 1e-3 * first)
    end = int(np.argmin(near)) if not near.all() else smoothed.size
    return float(np.mean(smoothed[: max(end, 5)]))


def _liquid(substance):
    """Return a function of temperature that gives what nucleation asks of the liquid."""
    def at(temperature):
        return (
            substance.surface_tension(temperature), substance.density(temperature),
            substance.molar_mass,
        )
    return at


def _threshold(apparatus, substance, temperature):
    """Return the saturation ratio at which the seeds become droplets, by Kelvin's equation."""
    if apparatus.seed.diameter is None:
        return 1.0
    tension = float(substance.surface_tension(temperature))
    volume = substance.molar_mass / float(substance.density(temperature))
    radius = 0.5 * apparatus.seed.diameter
    return float(np.exp(2.0 * tension * volume / (GAS_CONSTANT * temperature * radius)))


def births_at_threshold(time, saturation, threshold):
    """Return births at the moment when the saturation ratio first passes a threshold.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Increasing [s].
    saturation : ndarray, shape (n,)
        Saturation ratio [-].
    threshold : float
        Where seeds become droplets [-].

    Returns
    -------
    births : Births
        One class; at the peak of the saturation ratio where the threshold is never passed.

    Examples
    --------
    >>> time = np.linspace(0.0, 1.0, 11)
    >>> births_at_threshold(time, 1.0 + time, 1.25).median
    0.25
    """
    above = saturation >= threshold
    if not above.any():
        return births_at_once(time[np.argmax(saturation)])
    i = int(np.argmax(above))
    if i == 0:
        return births_at_once(time[0])
    part = (threshold - saturation[i - 1]) / (saturation[i] - saturation[i - 1])
    return births_at_once(time[i - 1] + part * (time[i] - time[i - 1]))


def with_threshold(setup, threshold, wetter=0.0):
    """Return the setup of a seeded pulse with another threshold.

    Parameters
    ----------
    setup : GrowthSetup
        Of a seeded pulse.
    threshold : float
        Saturation ratio at which seeds become droplets [-].
    wetter : float
        ln of the saturation ratio over that of the setup [-].

    Returns
    -------
    setup : GrowthSetup
        With births moved.
    """
    time, saturation = setup.ramp
    births = births_at_threshold(time, saturation * np.exp(wetter), threshold)
    return replace(setup, births=births, threshold=float(threshold))
