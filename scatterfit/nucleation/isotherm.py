"""One isotherm: ln J against ln S, and what its slope and its height say."""

from dataclasses import dataclass, field

import numpy as np

from scatterfit.matter import Gas, Substance
from scatterfit.nucleation.censored import Limits, with_limits
from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.line import Line, Points, fit_line, outliers, robust_line
from scatterfit.nucleation.losses import Background
from scatterfit.nucleation.select import Pulses
from scatterfit.nucleation.theory import (
    critical_molecules,
    liquid_of,
    log_rate_slope,
    reference_theory,
    theories,
)

_LN10 = float(np.log(10.0))
_MEDIAN_TO_MEAN = 1.2533  # standard error of a median over that of a mean, normal errors


@dataclass(frozen=True)
class RateSettings:
    """What an analysis of rates is told."""

    substance: Substance
    """The nucleating vapour."""
    tolerance: float | None = None
    """Largest distance from the middle of an isotherm [K]; ``None``: found from the data."""
    to_isotherm: bool = False
    """Whether every rate is brought to its isotherm's temperature before the fit."""
    rates: tuple[float, ...] = (1e13,)
    """Rates to quote a saturation ratio at [1/(m^3 s)]."""
    convention: int = 1
    """The number in slope = n* + 1 or n* + 2."""
    background: Background | None = None
    """Particles that take droplets away, at the chamber's density; ``None``: those of the table's
    columns."""
    put_back: bool = True
    """Whether rates are corrected for what such particles took."""
    pressure: float | None = None
    """During the hold [Pa]; ``None``: that of the table's column."""
    gas: Gas | None = None
    """The carrier; it matters to losses alone."""


@dataclass(frozen=True)
class Ratio:
    """How measured rates compare with a theory."""

    estimate: Estimate
    """Median of log10(J measured / J computed) [-]."""
    scatter: float
    """Standard deviation of it over the pulses [-]."""
    in_range: bool
    """Whether the theory claims to hold at these temperatures."""


@dataclass(frozen=True)
class Isotherm:
    """Pulses of one temperature and what they say; ``None`` where they do not."""

    by: str | None
    """Value of the column that the pulses were divided by."""
    temperature: float
    """Mean of the measured pulses [K]."""
    pulses: Pulses
    line: Line | None
    """ln(J / (1/(m^3 s))) against ln S."""
    slope: Estimate | None = None
    robust: Estimate | None = None
    cluster: Estimate | None = None
    """Molecules in the critical cluster [-]."""
    cluster_theory: float | None = None
    """Of classical theory at the middle of the points [-]."""
    ratio_at: tuple[tuple[float, Estimate | None], ...] = ()
    """Rate [1/(m^3 s)] and the saturation ratio that it needs [-]."""
    theory: dict[str, Ratio | None] = field(default_factory=dict)
    outliers: tuple[str, ...] = ()
    correction: np.ndarray | None = None
    """What bringing each measured pulse to the temperature adds to ln J, shape (m,) [-]."""
    slope_corrected: float | None = None
    """Slope with that correction [-]."""
    shared_level: float = 0.0
    """Standard uncertainty of ln J at the middle that all pulses share [-]."""

    @property
    def measured(self):
        """The pulses that have a rate."""
        return self.pulses.take(np.flatnonzero(self.pulses.measured))

    @property
    def censored(self):
        """The pulses of which only an upper limit is known."""
        return self.pulses.take(np.flatnonzero(~self.pulses.measured))


def analyse_isotherm(pulses, settings, by=None):
    """Fit one isotherm.

    Parameters
    ----------
    pulses : Pulses
        Pulses of about one temperature.
    settings : RateSettings
        How.
    by : str, optional
        Value of the column that the pulses were divided by.

    Returns
    -------
    isotherm : Isotherm
        What they say.
    """
    seen = pulses.take(np.flatnonzero(pulses.measured))
    every = seen if seen.names else pulses
    temperature = _mean(every.temperature)
    if not seen.names:
        nothing = tuple((rate, None) for rate in settings.rates)
        return Isotherm(by, temperature, pulses, None, ratio_at=nothing)
    reference = reference_theory(settings.substance)
    correction = (reference.log_rate(temperature, seen.ratio)
                  - reference.log_rate(seen.temperature, seen.ratio))
    plain, brought = (_points(seen, correction, by_kelvin) for by_kelvin in
                      (None, log_rate_slope(reference, temperature, seen.ratio)[1]))
    points = brought if settings.to_isotherm else plain
    limits = _limits(pulses)
    line = _fitted(points, limits)
    shared = _shared(seen, settings, line, points, reference, temperature)
    result = {
        "theory": _against_theory(seen, settings, shared["hidden"]),
        "cluster_theory": _classical_cluster(seen, settings, temperature),
        "correction": correction,
        "ratio_at": tuple((rate, None) for rate in settings.rates),
    }
    if line is not None:
        other = _fitted(plain if settings.to_isotherm else brought, limits)
        corrected = line.slope if settings.to_isotherm else other.slope
        result |= {"slope_corrected": corrected, **_from_line(line, points, shared, settings, seen)}
    return Isotherm(by, temperature, pulses, line, **result)


def _mean(values):
    """Return the mean, exactly the common value where all are equal."""
    return float(values[0] + np.mean(values - values[0]))


def _points(seen, correction, by_kelvin):
    """Return ln J against ln S, brought to the isotherm where d ln J/dT is given."""
    none = np.zeros(seen.ratio.size)
    x, y = np.log(seen.ratio), np.log(seen.rate)
    variance_x, variance_y, covariance = none, none, none
    if seen.errors:
        variance_x = (seen.errors["ratio"].random / seen.ratio) ** 2
        variance_y = (seen.errors["rate"].random / seen.rate) ** 2
    if by_kelvin is None:
        return Points(x, y, variance_x, variance_y, covariance)
    if seen.errors:
        kelvin = seen.errors["temperature"].random
        variance_y = variance_y + (by_kelvin * kelvin) ** 2
        covariance = -by_kelvin * _random_covariance(seen)
    return Points(x, y + correction, variance_x, variance_y, covariance)


def _random_covariance(seen):
    """Return the covariance of T and ln S in one pulse's own errors [K]."""
    kelvin, ratio = seen.errors["temperature"], seen.errors["ratio"]
    together = kelvin.shared * ratio.shared  # T and S share an error with opposite signs
    own = np.nan_to_num(seen.covariance + together) / seen.ratio
    largest = kelvin.random * ratio.random / seen.ratio
    return np.clip(own, -largest, largest)


def _limits(pulses):
    hidden = pulses.take(np.flatnonzero(~pulses.measured))
    variance = np.zeros(hidden.ratio.size)
    if hidden.errors:
        variance = (hidden.errors["ratio"].random / hidden.ratio) ** 2
    return Limits(np.log(hidden.ratio), np.log(hidden.limit), variance)


def _fitted(points, limits):
    line = fit_line(points)
    if line is None or not limits.x.size or not np.isfinite(line.covariance).all():
        return line
    return with_limits(points, line, limits)


def _shared(seen, settings, line, points, reference, temperature):
    """Return what a shared error of one sigma moves every ln J by, against the line, by source.

    An error of the start temperature moves T and S in opposite directions, so the two act as one.
    """
    none = np.zeros(seen.ratio.size)
    moved = {"rate": none, "state": none, "hidden": 0.0}
    if seen.errors and line is not None:
        by_kelvin = log_rate_slope(reference, temperature, seen.ratio)[1] * settings.to_isotherm
        moved["rate"] = seen.errors["rate"].shared / seen.rate
        moved["state"] = (line.slope * seen.errors["ratio"].shared / seen.ratio
                          - by_kelvin * seen.errors["temperature"].shared)
        if line.overstated:
            own = points.reduced(line.own_x, line.own).variance(line.slope) + line.scatter**2
            stated = points.variance(line.slope)
            moved["hidden"] = float(np.sqrt(max(0.0, float(np.mean(stated - own)))))
    return moved


def _from_line(line, points, shared, settings, seen):
    weights = 1.0 / np.maximum(points.variance(line.slope) + line.scatter**2, 1e-26)
    step = points.x - line.centre
    lever = weights * step / max(float(weights @ step**2), 1e-300)

    def systematic(at):
        share = weights / weights.sum() + (at - line.centre) * lever
        moves = (share @ shared["rate"], share @ shared["state"], shared["hidden"])
        return float(np.linalg.norm(moves))

    bend = float(np.hypot(lever @ shared["rate"], lever @ shared["state"]))
    slope = Estimate(line.slope, line.slope_sigma, bend, line.interval_factor)
    robust, score = robust_line(points, line)
    far = outliers(score)
    return {
        "slope": slope,
        "robust": None if robust is None else
        Estimate(robust.slope, robust.slope_sigma, bend, robust.interval_factor),
        "cluster": slope.shifted(-settings.convention),
        "ratio_at": tuple((rate, _ratio_at(line, rate, systematic)) for rate in settings.rates),
        "outliers": tuple(seen.names[place] for place in np.flatnonzero(far)),
        "shared_level": systematic(line.centre),
    }


def _ratio_at(line, rate, systematic):
    """Return the saturation ratio at which the line reaches a rate."""
    if not line.slope > 2.0 * line.slope_sigma:
        return None
    place, sigma = line.solve(np.log(rate))
    if not abs(place) < 50:
        return None
    ratio = float(np.exp(place))
    return Estimate(ratio, ratio * sigma, ratio * systematic(place) / line.slope,
                    line.interval_factor, positive=True)


def _against_theory(seen, settings, hidden):
    found = {}
    for theory in theories(settings.substance):
        logs = (np.log(seen.rate) - theory.log_rate(seen.temperature, seen.ratio)) / _LN10
        scatter = float(np.std(logs, ddof=1)) if logs.size > 1 else np.nan
        sigma = _MEDIAN_TO_MEAN * scatter / np.sqrt(logs.size)
        single, shared = _theory_errors(seen, theory) if seen.errors else (np.nan, 0.0)
        if logs.size < 2:
            sigma = single
        estimate = Estimate(float(np.median(logs)), sigma, float(np.hypot(shared, hidden / _LN10)))
        found[theory.name] = Ratio(estimate, scatter, not theory.outside(seen.temperature))
    return found


def _theory_errors(seen, theory):
    """Return sigma of log10(J / J computed) for one pulse, and what all pulses share."""
    by_ratio, by_kelvin = log_rate_slope(theory, seen.temperature, seen.ratio)
    kelvin, ratio, rate = (seen.errors[name] for name in ("temperature", "ratio", "rate"))
    own = ((rate.random / seen.rate) ** 2 + (by_ratio * ratio.random / seen.ratio) ** 2
           + (by_kelvin * kelvin.random) ** 2
           + 2 * by_ratio * by_kelvin * _random_covariance(seen))
    state = by_ratio * ratio.shared / seen.ratio - by_kelvin * kelvin.shared
    shared = np.hypot(np.mean(rate.shared / seen.rate), np.mean(state))
    return float(np.sqrt(np.mean(np.maximum(own, 0.0)))) / _LN10, float(shared) / _LN10


def _classical_cluster(seen, settings, temperature):
    middle = float(np.exp(np.mean(np.log(seen.ratio))))
    liquid = liquid_of(settings.substance, temperature)
    return float(critical_molecules(temperature, middle, liquid))
