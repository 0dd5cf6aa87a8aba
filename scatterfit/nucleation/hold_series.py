"""Number against duration of the hold: the slope is J, the intercept a background."""

from dataclasses import dataclass

import numpy as np

from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.grouping import LOG_RATIO_RESOLUTION, natural_groups
from scatterfit.nucleation.line import Points, fit_line
from scatterfit.nucleation.select import hold_density_factor
from scatterfit.nucleation.table import CONCENTRATION, DURATION
from scatterfit.nucleation.theory import log_rate_slope, reference_theory
from scatterfit.units import to_si

_FEWEST = 3
_LEAST_STRETCH = 1.2  # longest over shortest hold that makes a series
_LIMIT_TO_SIGMA = 1.645


@dataclass(frozen=True)
class HoldSeries:
    """Pulses of one temperature and supersaturation, held for different times."""

    by: str | None
    temperature: float
    """[K]."""
    ratio: float
    """Saturation ratio that the pulses are brought to [-]."""
    duration: np.ndarray
    """As if all pulses had been at that state, blanks at zero, shape (n,) [s]."""
    number: np.ndarray
    """Droplets at the gas density of the hold, shape (n,) [1/m^3]."""
    blanks: int
    """How many of them are blank pulses."""
    rate: Estimate | None
    """J [1/(m^3 s)]."""
    background: Estimate | None
    """Droplets that need no hold, at its gas density [1/m^3]."""


def hold_series(table, pulses, isotherms, settings, by=None):
    """Return the series in which only the duration of the hold differs.

    Parameters
    ----------
    table : Table
        Where the durations are.
    pulses : Pulses
        Its pulses.
    isotherms : list of ndarray
        Indices into the pulses of each isotherm [-].
    settings : RateSettings
        The substance.
    by : str, optional
        Value of the column that the pulses were divided by.

    Returns
    -------
    series : list of HoldSeries
        Those of at least three pulses whose holds differ by a fifth or more.

    Notes
    -----
    Small differences of S and T within a series are taken into the duration: a pulse of duration
    t at a state where theory has twice the rate counts as one of 2 t. Only the ratio of two
    computed rates enters.
    """
    if not table.has(DURATION):
        return []
    blank = _blank_numbers(table)
    found = []
    for rows in isotherms:
        for group in natural_groups(np.log(pulses.ratio[rows]), LOG_RATIO_RESOLUTION):
            chosen = pulses.take(rows[group])
            time = to_si(table.number(DURATION)[chosen.row], "ms")
            known = np.isfinite(time)
            chosen, time = chosen.take(np.flatnonzero(known)), time[known]
            if time.size >= _FEWEST and time.max() > _LEAST_STRETCH * time.min():
                found.append(_fitted(chosen, time, blank, settings, by))
    return found


def _blank_numbers(table):
    """Return droplets of the blank pulses at the gas density of the hold [1/m^3]."""
    blank = table.blanks() | (table.number(DURATION) == 0)
    factor = to_si(hold_density_factor(table), "ms")
    number = to_si(np.nan_to_num(table.number(CONCENTRATION)), "per_cm3")[blank] * factor
    usable = np.isin(table.verdicts()[blank], ("accepted", "rejected"))
    return number[usable & np.isfinite(number)]


def _fitted(pulses, time, blank, settings, by):
    theory = reference_theory(settings.substance)
    temperature = float(pulses.temperature.mean())
    ratio = float(np.exp(np.log(pulses.ratio).mean()))
    faster = np.exp(theory.log_rate(pulses.temperature, pulses.ratio)
                    - theory.log_rate(temperature, ratio))
    seen = pulses.measured
    number = np.where(seen, pulses.rate, 0.0) * time
    variance_x, variance_y = np.zeros(time.size), np.zeros(time.size)
    if pulses.errors:
        by_ratio = log_rate_slope(theory, temperature, ratio)[0]
        lever = by_ratio * pulses.errors["ratio"].random / pulses.ratio
        variance_x = (time * faster * lever) ** 2
        sigma = np.where(seen, pulses.errors["rate"].random, pulses.limit / _LIMIT_TO_SIGMA)
        variance_y = (sigma * time) ** 2
    none = np.zeros(blank.size)
    spread = np.full(blank.size, np.var(blank, ddof=1) if blank.size > 1 else 0.0)
    points = Points(
        np.r_[time * faster, none], np.r_[number, blank], np.r_[variance_x, none],
        np.r_[variance_y, spread if pulses.errors else none], np.zeros(time.size + blank.size),
    )
    line = fit_line(points)
    shared = 0.0
    if pulses.errors and seen.any():
        shared = float(np.mean((pulses.errors["rate"].shared / pulses.rate)[seen]))
    rate = background = None
    if line is not None:
        rate = Estimate(line.slope, line.slope_sigma, abs(line.slope) * shared,
                        line.interval_factor)
        at_zero = float(line.at(0.0))
        background = Estimate(at_zero, float(line.sigma_at(0.0)), abs(at_zero) * shared,
                              line.interval_factor)
    return HoldSeries(by, temperature, ratio, points.x, points.y, blank.size, rate, background)
