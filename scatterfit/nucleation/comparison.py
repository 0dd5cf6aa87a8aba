"""Two nights side by side, isotherm by isotherm."""

from dataclasses import dataclass

import numpy as np

from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.theory import reference_theory

NEAREST = 1.0
"""Largest distance of two isotherms that are compared [K]."""


@dataclass(frozen=True)
class Comparison:
    """One isotherm of a night against the same of another."""

    by: str | None
    temperature: float
    """Of the first, where both are compared [K]."""
    other_temperature: float
    """Of the second [K]."""
    ratio: float
    """Saturation ratio where the rates are compared, between the middles of both [-]."""
    log10_rate: Estimate
    """log10(J of the second over J of the first) [-]."""
    slope: Estimate
    """Slope of the second less that of the first [-]."""


def compare(first, second, settings):
    """Compare the isotherms of two nights.

    Parameters
    ----------
    first, second : sequence of Isotherm
        Of either night.
    settings : RateSettings
        The substance.

    Returns
    -------
    comparisons : tuple of Comparison
        One for each isotherm of the first with a line and one of the second within 1 K.

    Notes
    -----
    The second is brought to the temperature of the first by theory. Shared errors of both count
    as independent: two nights of one bench agree better than that where its gain is their cause.
    """
    fitted = [isotherm for isotherm in second if isotherm.line is not None]
    found = []
    for one in first:
        near = [other for other in fitted if other.by == one.by
                and abs(other.temperature - one.temperature) <= NEAREST]
        if one.line is not None and near:
            other = min(near, key=lambda other: abs(other.temperature - one.temperature))
            found.append(_compared(one, other, settings))
    return tuple(found)


def _compared(one, other, settings):
    place = 0.5 * (one.line.centre + other.line.centre)
    ratio = float(np.exp(place))
    theory = reference_theory(settings.substance)
    brought = float(theory.log_rate(one.temperature, ratio)
                    - theory.log_rate(other.temperature, ratio))
    statistical = float(np.hypot(one.line.sigma_at(place), other.line.sigma_at(place)))
    shared = float(np.hypot(one.shared_level, other.shared_level))
    factor = max(one.line.interval_factor, other.line.interval_factor)
    log10 = np.log(10.0)
    rate = Estimate(float(other.line.at(place) - one.line.at(place) + brought) / log10,
                    statistical / log10, shared / log10, factor)
    slope = Estimate(other.slope.value - one.slope.value,
                     float(np.hypot(one.slope.statistical, other.slope.statistical)),
                     float(np.hypot(one.slope.systematic, other.slope.systematic)), factor)
    return Comparison(one.by, one.temperature, other.temperature, ratio, rate, slope)
