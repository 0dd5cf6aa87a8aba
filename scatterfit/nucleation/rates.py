"""From a table of pulses to nucleation rates against supersaturation, isotherm by isotherm."""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from scatterfit.nucleation.background import Losses, background_losses, put_back
from scatterfit.nucleation.comparison import Comparison
from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.grouping import isotherms
from scatterfit.nucleation.hold_series import HoldSeries, hold_series
from scatterfit.nucleation.isotherm import Isotherm, RateSettings, analyse_isotherm
from scatterfit.nucleation.line import Points, fit_line
from scatterfit.nucleation.select import rate_pulses
from scatterfit.nucleation.table import group_rows
from scatterfit.nucleation.theory import theories

_FEWEST_FOR_TREND = 3


@dataclass(frozen=True)
class TheoryTrend:
    """ln(J measured / J computed) = constant + per_inverse_kelvin / T over the isotherms."""

    constant: Estimate
    """[-]."""
    per_inverse_kelvin: Estimate
    """[K]."""


@dataclass(frozen=True)
class Rates:
    """What a table of pulses says about nucleation."""

    source: str
    """The table."""
    settings: RateSettings
    by: str | None
    """Column that the pulses were divided by."""
    isotherms: tuple[Isotherm, ...]
    left_out: Mapping[str, int]
    """Cause to number of pulses."""
    trends: Mapping[str, TheoryTrend | None] = field(default_factory=dict)
    losses: tuple[Losses | None, ...] = ()
    """One entry an isotherm."""
    background: bool = False
    """Whether the table or the settings name particles that cause losses."""
    series: tuple[HoldSeries, ...] = ()
    comparison: tuple[Comparison, ...] = ()


def analyse_rates(table, settings, *, by=None, ambiguous=False, series=False):
    """Take nucleation rates of many pulses apart by temperature and fit each isotherm.

    Parameters
    ----------
    table : Table
        Pulses with temperature, saturation ratio and rate.
    settings : RateSettings
        How.
    by : str, optional
        Column by which to divide the pulses before all else.
    ambiguous : bool
        Whether ambiguous pulses are taken.
    series : bool
        Whether to look for series in which only the duration of the hold differs.

    Returns
    -------
    rates : Rates
        Isotherms, the warmest first, for each value of the column.

    Raises
    ------
    InvalidInputError
        If a column is missing.

    Examples
    --------
    >>> from scatterfit.matter import substance
    >>> from scatterfit.nucleation.table import table_from_columns
    >>> table = table_from_columns({
    ...     "nucleation_temperature_K": [240.0] * 4,
    ...     "nucleation_saturation_ratio": [11.0, 11.5, 12.0, 12.5],
    ...     "nucleation_rate_per_cm3_s": [1e7, 4e7, 1.3e8, 4.4e8]})
    >>> rates = analyse_rates(table, RateSettings(substance("water")))
    >>> round(rates.isotherms[0].slope.value, 1), len(rates.isotherms)
    (29.4, 1)
    """
    pulses, left_out = rate_pulses(table, ambiguous=ambiguous)
    lost, given = background_losses(table, pulses, settings)
    if lost is not None and settings.put_back:
        pulses = put_back(pulses, lost)
    found, held = [], []
    for value, rows in group_rows(table, by).items():
        part = pulses.take(np.flatnonzero(np.isin(pulses.row, rows)))
        groups = isotherms(part.temperature, settings.tolerance)
        found += [analyse_isotherm(part.take(group), settings, value) for group in groups]
        if series:
            held += hold_series(table, part, groups, settings, value)
    each = tuple(None if lost is None else lost.of(isotherm.pulses.row) for isotherm in found)
    names = [theory.name for theory in theories(settings.substance)]
    trends = {name: _trend(found, name) for name in names}
    return Rates(table.source, settings, by, tuple(found), left_out, trends, each, given,
                 tuple(held))


def _trend(found, name):
    """Return how the ratio to a theory changes with temperature."""
    ratios = [(isotherm.temperature, isotherm.theory[name]) for isotherm in found
              if name in isotherm.theory]
    ratios = [(kelvin, ratio.estimate) for kelvin, ratio in ratios
              if np.isfinite(ratio.estimate.value) and np.isfinite(ratio.estimate.statistical)]
    if len(ratios) < _FEWEST_FOR_TREND:
        return None
    unit = np.log(10.0)
    x = np.array([1.0 / kelvin for kelvin, _ in ratios])
    y = unit * np.array([estimate.value for _, estimate in ratios])
    variance = (unit * np.array([estimate.statistical for _, estimate in ratios])) ** 2
    none = np.zeros_like(x)
    line = fit_line(Points(1e3 * x, y, none, variance, none))
    if line is None:
        return None
    factor = line.interval_factor
    shared = unit * float(np.mean([estimate.systematic for _, estimate in ratios]))
    return TheoryTrend(Estimate(float(line.at(0.0)), float(line.sigma_at(0.0)), shared, factor),
                       Estimate(1e3 * line.slope, 1e3 * line.slope_sigma, 0.0, factor))
