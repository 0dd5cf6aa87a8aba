"""Numbers with uncertainties from the best cloud and its posterior."""

from dataclasses import dataclass

import numpy as np

from scatterfit.droplet_growth.single_droplet import growth_rate
from scatterfit.measured_pulse.record import Curve, Quantity

_BIRTH_CLOCK = 5e-5
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
        Variance from the noise [any].
    parts : dict of str to float
        Variance by input [any].
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
        Variance from the noise [any].
    parts : dict of str to float
        Variance by input [any].
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
    floor = (growth.start_radius + length) ** 2
    square = np.maximum((weights @ growth.square[0])[late], floor)
    median = np.sqrt(square) - length
    if not late.any() or median.max() < radius or median[0] > radius:
        return {}
    time = growth.time[late]
    speed = (weights @ growth.square_rate[0])[late] / (2.0 * np.sqrt(square))
    rate = _at(radius, median, speed)
    bend = _at(radius, median, np.gradient(speed, time)) / rate
    gradient = {}
    for name, rows in linear.log_radius_by.items():
        change = median * (weights @ rows)[late]
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

    step = 0.02
    sticking = np.exp(np.array([0.0, cloud.accommodation, cloud.accommodation + step]))
    (base, here, beside), *_ = growth_rate(
        setup.properties, np.full(3, radius),
        (path.reference_temperature, path.reference_pressure, setup.vapour_fraction),
        (vapour.mass_accommodation * sticking, vapour.thermal_accommodation),
        np.full(3, setup.droplet_temperature), steps=6,
    )
    slope = (beside - here) / step
    bend = np.log(radius / 1e-6)
    log = np.log(max(here / base, 1e-9)) + cloud.scale + cloud.bend * bend
    return Derived(float(log), {
        "scale": 1.0, "bend": float(bend), "accommodation": float(slope / here),
    })


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
