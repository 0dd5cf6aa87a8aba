"""Numbers with uncertainties from the best cloud and its posterior."""

from dataclasses import dataclass

import numpy as np

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.properties import saturation_pressure
from scatterfit.droplet_growth.single_droplet import growth_rate
from scatterfit.measured_pulse.bench_inputs import (
    temperature_relative_sigma,
    vapour_relative_sigma,
)
from scatterfit.measured_pulse.record import Curve, NucleationConditions, Quantity

_BIRTH_CLOCK = 5e-5
_EFFECTIVE = 0.03
_PRESSURE = 2e-4
_POINTS = 200


@dataclass(frozen=True)
class Derived:
    """A quantity as value and gradient by parameter."""

    value: float
    gradient: dict


def quantity(derived, posterior, floor=0.0):
    """Return a quantity, shifted and with its sigma, and its variance by origin.

    Parameters
    ----------
    derived : Derived
        Value and gradient.
    posterior : Posterior
        Of the fit.
    floor : float
        A standard uncertainty that the posterior does not know, same unit [any].

    Returns
    -------
    result : Quantity
        Value and standard uncertainty.
    noise : float
        Variance from the noise.
    parts : dict of str to float
        Variance by input.
    """
    shift, noise, parts = posterior.propagate(derived.gradient)
    variance = noise + sum(parts.values()) + floor**2
    return Quantity(derived.value + shift, float(np.sqrt(variance))), noise, parts


def exponential(derived, posterior):
    """Return a quantity known by its logarithm; as :func:`quantity` otherwise.

    Parameters
    ----------
    derived : Derived
        ln of the quantity and its gradient.
    posterior : Posterior
        Of the fit.

    Returns
    -------
    result : Quantity
        Value and standard uncertainty.
    noise : float
        Variance from the noise.
    parts : dict of str to float
        Variance by input.
    """
    log, noise, parts = quantity(derived, posterior)
    value = float(np.exp(np.clip(log.value, -60.0, 60.0)))
    scaled = {name: part * value**2 for name, part in parts.items()}
    return Quantity(value, value * log.sigma), noise * value**2, scaled


def median_weights(births):
    """Return how to weigh the classes so that the sum is the droplet of median age.

    Cubic interpolation in the time of birth between the classes nearest the median.

    Parameters
    ----------
    births : Births
        Classes.

    Returns
    -------
    weights : ndarray, shape (c,)
        Sum to one [-].
    """
    times = births.times
    weights = np.zeros(times.size)
    near = np.sort(np.argsort(np.abs(times - births.median))[: min(4, times.size)])
    for i in near:
        others = near[near != i]
        weights[i] = np.prod((births.median - times[others]) / (times[i] - times[others]))
    return weights


def median_log_radius(setup, state, names):
    """Return ln r of the median-age droplet at the samples, with its derivatives.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    state : CloudState
        The cloud at the samples.
    names : sequence of str
        Parameters.

    Returns
    -------
    log_radius : ndarray, shape (n,)
        ln of the radius in metres; minus infinity before birth [-].
    by : dict of str to ndarray
        Derivatives, each shape (n,).
    """
    weights = median_weights(setup.births)
    length = state.growth.length[0]
    born = np.all(state.radius > 0.0, axis=0)
    square = weights @ (state.radius + length) ** 2
    radius = np.where(born, np.maximum(np.sqrt(np.maximum(square, 0.0)) - length, 1e-9), 0.0)
    with np.errstate(divide="ignore"):
        log_radius = np.log(radius)
    by = {}
    safe = np.where(born, radius, 1.0)
    for name in names:
        change = state.log_radius_by.get(name)
        if change is not None:
            inner = weights @ (2.0 * (state.radius + length) * state.radius * change)
            by[name] = np.where(born, inner / (2.0 * (safe + length) * safe), 0.0)
    if "depletion" in names and "number" in by:
        by["depletion"] = by["number"]
    return log_radius, by


def radius_curve(setup, problem, state, posterior):
    """Return radius against time with its band, and the final radius.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    problem : Problem
        With the bins' times.
    state : CloudState
        At the bins, with derivatives.
    posterior : Posterior
        Of the fit.

    Returns
    -------
    curve : Curve
        At most 200 points.
    final : tuple
        Quantity, noise variance and variance by input of the last radius.
    """
    log_radius, by = median_log_radius(setup, state, posterior.names)
    time = problem.bins.time
    born = np.flatnonzero(np.isfinite(log_radius))
    chosen = born[np.unique(np.linspace(0, born.size - 1, min(_POINTS, born.size)).astype(int))]
    gradient = np.array([
        by[name][chosen] if name in by else np.zeros(chosen.size) for name in posterior.names
    ])
    relative = np.sqrt(np.einsum("pn,pq,qn->n", gradient, posterior.covariance, gradient))
    radius = np.exp(log_radius[chosen] + gradient.T @ posterior.step)
    last = born[-1]
    final = Derived(float(log_radius[last]), {name: float(row[last]) for name, row in by.items()})
    return Curve(time[chosen], radius, radius * relative), exponential(final, posterior)


def at_reference(setup, posterior, radius):
    """Return what is quoted at the reference radius, or nothing where it is not reached.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    posterior : Posterior
        Of the fit, with the solved cloud.
    radius : float
        Reference radius [m].

    Returns
    -------
    results : dict
        ``"rate"`` [m/s], ``"warmth"``, the droplet's temperature [K], and ``"spread"``, the
        births' part of the relative spread of radius [-]; empty where not reached.
    """
    linear = posterior.state.linear
    growth = linear.growth
    weights = median_weights(setup.births)
    length = growth.length[0]
    late = growth.time >= growth.birth_times[0].max()
    square = (weights @ growth.square[0])[late]
    median = np.sqrt(square) - length
    if not late.any() or median.max() < radius or median[0] > radius:
        return {}
    time = growth.time[late]
    speed = (weights @ growth.square_rate[0])[late] / (2.0 * np.sqrt(square))
    rate = _at(radius, median, speed)
    bend = _at(radius, median, np.gradient(speed, time)) / rate
    gradient = {}
    for name, rows in linear.log_radius_by.items():
        change = median * (weights @ linear.carry @ rows)[late]
        # At fixed radius: what the curve gains in speed, less what it would have anyway there.
        gradient[name] = (_at(radius, median, np.gradient(change, time))
                          - bend * _at(radius, median, change))
    if "number" in gradient:
        gradient["depletion"] = gradient["number"]
    warmth = _at(radius, median, (weights @ growth.droplet_temperature[0])[late])
    logs = np.log(growth.radius[0][:, late])
    moment = np.array([_at(radius, median, row) for row in logs])
    spread = float(np.sqrt(growth.weights @ (moment - growth.weights @ moment) ** 2))
    return {"rate": Derived(rate, gradient), "warmth": Derived(warmth, {"temperature": warmth}),
            "spread": spread}


def _at(radius, grown, values):
    """Return a value where a growing radius passes a given one."""
    return float(np.interp(radius, np.maximum.accumulate(grown), values))


def growth_scale(setup, cloud, radius):
    """Return the growth rate of the fit over the computed one, at the undisturbed state.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    cloud : Cloud
        The solution.
    radius : float
        Reference radius [m].

    Returns
    -------
    derived : Derived
        ln of the ratio and its gradient [-].
    """
    vapour, path = setup.apparatus.vapour, setup.path

    def rate(accommodation):
        value, *_ = growth_rate(
            setup.properties, np.array([radius]),
            (np.array([path.reference_temperature]), path.reference_pressure,
             np.array([setup.vapour_fraction])),
            (vapour.mass_accommodation * np.exp(accommodation), vapour.thermal_accommodation),
            np.array([setup.droplet_temperature]), steps=6,
        )
        return float(value[0])

    base, step = rate(0.0), 0.02
    here = rate(cloud.accommodation)
    slope = (rate(cloud.accommodation + step) - here) / step
    bend = np.log(radius / 1e-6)
    log = np.log(max(here / base, 1e-9)) + cloud.scale + cloud.bend * bend
    return Derived(float(log), {
        "scale": 1.0, "bend": float(bend), "accommodation": float(slope / here),
    })


def state_derivatives(setup, temperature, pressure):
    """Return the relative derivatives of the saturation ratio at a state of the undisturbed gas.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    temperature : float
        [K].
    pressure : float
        [Pa].

    Returns
    -------
    ratio : float
        Saturation ratio over the liquid [-].
    by : dict of str to float
        d ln S by ``"temperature"`` (relative) and ``"vapour"`` (relative) [-].
    """
    saturated = float(saturation_pressure(setup.properties, np.asarray(temperature)))
    latent = float(setup.substance.latent_heat(temperature))
    steepness = latent / (GAS_CONSTANT * temperature)
    return setup.vapour_fraction * pressure / saturated, {
        "temperature": setup.vapour_by_temperature - steepness, "vapour": 1.0,
    }


def relative_sigmas(setup):
    """Return the stated relative uncertainties of start temperature, vapour and vapour pressure.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    sigmas : dict of str to float
        Relative standard uncertainties [-].
    """
    apparatus = setup.apparatus
    saturation = setup.substance.saturation_pressure
    return {
        "temperature": temperature_relative_sigma(apparatus),
        "vapour": vapour_relative_sigma(apparatus),
        "saturation": float(saturation.relative_uncertainty),
    }


def gas_quantities(setup):
    """Return temperature [K] and saturation ratio of the growth stage, with their sigmas.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    temperature, saturation : Quantity
        Undisturbed, at the reference pressure.
    """
    path, sigmas = setup.path, relative_sigmas(setup)
    ratio, by = state_derivatives(setup, path.reference_temperature, path.reference_pressure)
    spread = np.sqrt((by["temperature"] * sigmas["temperature"]) ** 2 + sigmas["vapour"] ** 2
                     + sigmas["saturation"] ** 2)
    return (
        Quantity(path.reference_temperature, path.reference_temperature * sigmas["temperature"]),
        Quantity(ratio, ratio * float(spread)),
    )


def nucleation_conditions(setup, concentration):
    """Return the conditions of the hold and the nucleation rate.

    The number is taken back from the reference state to the density of the hold's gas; the rate
    is that number over the effective duration.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    concentration : Quantity or None
        Droplets per volume at the reference state [1/m^3].

    Returns
    -------
    conditions : NucleationConditions
        With ``None`` where nothing is known.
    """
    hold = setup.hold
    if hold is None:
        return NucleationConditions()
    sigmas = _hold_sigmas(setup)
    _, by = state_derivatives(setup, hold.temperature, hold.pressure)
    coupling = by["temperature"] if setup.clock_known else by["temperature"] - (
        setup.vapour_by_temperature)
    # One pressure enters temperature and saturation ratio: adiabatic where there is a gauge.
    cooling = GAS_CONSTANT / setup.properties.heat_capacity if setup.clock_known else 0.0
    warm = np.array([sigmas["temperature"], -cooling * sigmas["start"], cooling * sigmas["pressure"]])
    wet = np.array([coupling * sigmas["temperature"], -cooling * by["temperature"] * sigmas["start"],
                    (1.0 + cooling * by["temperature"]) * sigmas["pressure"],
                    sigmas["vapour"], sigmas["saturation"]])
    sigma_t = hold.temperature * float(np.hypot.reduce(warm))
    saturation = Quantity(hold.saturation_ratio, hold.saturation_ratio * float(np.hypot.reduce(wet)))
    covariance = float(hold.temperature * hold.saturation_ratio * (warm @ wet[:3]))
    effective, rate = None, None
    if hold.effective and setup.threshold is None:
        spread = sigmas["effective"]
        effective = Quantity(hold.effective, hold.effective * spread)
        if concentration is not None:
            path = setup.path
            denser = (hold.pressure / hold.temperature) / (
                path.reference_pressure / path.reference_temperature
            )
            value = concentration.value * denser / hold.effective
            relative = np.hypot(concentration.sigma / concentration.value, spread)
            rate = Quantity(value, value * float(relative))
    return NucleationConditions(
        Quantity(hold.temperature, sigma_t),
        Quantity(hold.pressure, sigmas["pressure"] * hold.pressure),
        saturation, effective, rate, covariance,
    )


def _hold_sigmas(setup):
    """Return relative standard uncertainties of what the hold's state rests on [-]."""
    apparatus = setup.apparatus
    known, hold = apparatus.sigmas, setup.hold
    sigmas = relative_sigmas(setup)
    if setup.clock_known:
        offset = known.get("pressure.offset_kPa", 0.0)
        start = np.hypot(known.get("chamber.pressure_kPa", 0.0), offset) / setup.start_pressure
        return {**sigmas, "start": float(start), "effective": _EFFECTIVE,
                "pressure": float(np.hypot(_PRESSURE, offset / hold.pressure))}
    effective = known.get("pulse.hold_ms", 0.0) / hold.effective if hold.effective else 0.0
    return {
        **sigmas, "temperature": known.get("pulse.temperature_K", 0.0) / hold.temperature,
        "start": 0.0, "effective": float(np.hypot(_EFFECTIVE, effective)),
        "pressure": float(np.hypot(_PRESSURE, known.get("pulse.pressure_kPa", 0.0) / hold.pressure)),
    }


def birth_time(setup, cloud, posterior):
    """Return the median birth with its sigma [s].

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    cloud : Cloud
        The solution.
    posterior : Posterior
        Of the fit.

    Returns
    -------
    birth : Quantity
        Median time of birth [s]. 0.05 ms are added for the first steps of growth; without a
        pressure trace, three tenths of the hold, whose beginning and end are not seen.
    """
    derived = Derived(setup.births.median + cloud.delay, {"delay": 1.0})
    held = setup.births.effective
    return quantity(derived, posterior, _BIRTH_CLOCK if setup.clock_known else 0.3 * held)[0]


def property_sources(setup, index_given):
    """Return where each property came from.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    index_given : bool
        Whether the chamber file gives the refractive index.

    Returns
    -------
    sources : dict of str to str
        Property name to source.
    """
    s = setup.substance
    sources = {
        name: getattr(s, name).source
        for name in ("saturation_pressure", "density", "surface_tension", "latent_heat",
                     "vapour_heat_capacity")
    }
    sources["refractive_index"] = "chamber file" if index_given else s.refractive_index.source
    sources["diffusivity"] = matter.diffusivity(s, setup.gas).source
    sources["conductivity"] = setup.gas.conductivity.source
    sources["heat_capacity"] = setup.gas.heat_capacity.source
    return sources
