"""From a table to the pulses a rate can be taken from, in SI, and why the others were left out."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.nucleation.table import (
    CONCENTRATION,
    COVARIANCE,
    DURATION,
    RATE,
    RATE_LIMIT,
    SATURATION_RATIO,
    TEMPERATURE,
    UPPER_LIMIT,
    check_columns,
)
from scatterfit.units import to_si

REASONS_LEFT_OUT = {
    "failed": "the trace could not be used",
    "ambiguous": "another solution cannot be excluded (--ambiguous takes them)",
    "rejected": "rejected without an upper limit of the number",
    "blank": "blank pulses, taken without a hold",
    "no-conditions": "no nucleation temperature or saturation ratio",
    "not-supersaturated": "saturation ratio at or below one",
    "no-rate": "neither a rate nor an upper limit of it",
}
"""Why a row takes no part in a fit."""

_NUMBER_SHARED = CONCENTRATION + "_sigma_systematic"


@dataclass(frozen=True)
class Errors:
    """Standard uncertainties of one column."""

    random: np.ndarray
    """Of each pulse for itself, shape (n,)."""
    shared: np.ndarray
    """That all pulses have together, shape (n,)."""

    def take(self, rows):
        """Return those of some pulses."""
        return Errors(self.random[rows], self.shared[rows])


@dataclass(frozen=True)
class Pulses:
    """Measured rates and upper limits, one entry a pulse."""

    names: tuple[str, ...]
    row: np.ndarray
    """Index in the table, shape (n,) [-]."""
    temperature: np.ndarray
    """Shape (n,) [K]."""
    ratio: np.ndarray
    """Saturation ratio over the liquid, shape (n,) [-]."""
    rate: np.ndarray
    """Not a number for a pulse without a cloud, shape (n,) [1/(m^3 s)]."""
    limit: np.ndarray
    """Upper limit (95 percent) for a pulse without a cloud, shape (n,) [1/(m^3 s)]."""
    errors: Mapping[str, Errors]
    """Of ``temperature`` [K], ``ratio`` [-] and ``rate`` [1/(m^3 s)]; empty: none were stated."""
    covariance: np.ndarray
    """Of temperature and saturation ratio in all, shape (n,) [K]; not a number: not stated."""

    @property
    def measured(self):
        """Whether each pulse has a rate, shape (n,) [bool]."""
        return np.isfinite(self.rate)

    def take(self, rows):
        """Return some of the pulses by index, shape (m,)."""
        return Pulses(
            tuple(self.names[row] for row in rows), self.row[rows], self.temperature[rows],
            self.ratio[rows], self.rate[rows], self.limit[rows],
            {name: errors.take(rows) for name, errors in self.errors.items()},
            self.covariance[rows],
        )


def rate_pulses(table, *, ambiguous=False):
    """Return the pulses of a table that say something about the nucleation rate.

    Parameters
    ----------
    table : Table
        The table.
    ambiguous : bool
        Whether ambiguous pulses are taken.

    Returns
    -------
    pulses : Pulses
        Those with a rate, and those without a cloud whose upper limit is known.
    left_out : dict of str to int
        Cause as in ``REASONS_LEFT_OUT`` to the number of pulses.

    Raises
    ------
    InvalidInputError
        If a column is missing.
    """
    check_columns(table, (TEMPERATURE, SATURATION_RATIO, RATE))
    rate, limit = to_si(table.number(RATE), "per_cm3"), _rate_limit(table)
    cause = _cause(table, rate, limit, ambiguous)
    rows = np.flatnonzero(cause == "")
    measured = (table.verdicts() != "rejected") & (rate > 0)
    chosen = Pulses(
        table.names, np.arange(len(table.names)), table.number(TEMPERATURE),
        table.number(SATURATION_RATIO), np.where(measured, rate, np.nan),
        np.where(measured, np.nan, limit), {}, table.number(COVARIANCE),
    ).take(rows)
    errors = {"temperature": errors_of(table, TEMPERATURE, rows),
              "ratio": errors_of(table, SATURATION_RATIO, rows),
              "rate": _rate_errors(table, rows)}
    if all(entry is None for entry in errors.values()):
        errors = {}
    zero = Errors(np.zeros(rows.size), np.zeros(rows.size))
    left = {name: int(np.sum(cause == name)) for name in REASONS_LEFT_OUT}
    stated = {name: entry or zero for name, entry in errors.items()}
    return Pulses(**{**vars(chosen), "errors": stated}), left


def _rate_errors(table, rows):
    """Return the uncertainties of rates [1/(m^3 s)], divided as those of the numbers are.

    A rate is a number over a duration: where its own uncertainty is not divided, the part that
    the number's scale shares is taken to be the same part of both.
    """
    errors = errors_of(table, RATE, rows, 1e6)
    if errors is None or errors.shared.any() or not table.has(_NUMBER_SHARED):
        return errors
    number = table.number(CONCENTRATION)[rows]
    rate = to_si(table.number(RATE)[rows], "per_cm3")
    with np.errstate(divide="ignore", invalid="ignore"):
        part = np.nan_to_num(table.number(_NUMBER_SHARED)[rows] / number, posinf=0.0)
    shared = np.minimum(np.nan_to_num(part * rate), errors.random)
    return Errors(np.sqrt(errors.random**2 - shared**2), shared)


def _cause(table, rate, limit, ambiguous):
    """Return why each row is left out, empty where it is not."""
    verdict, ratio = table.verdicts(), table.number(SATURATION_RATIO)
    rejected = verdict == "rejected"
    unknown = ~np.isfinite(table.number(TEMPERATURE)) | ~np.isfinite(ratio)
    limited = np.isfinite(limit) & (limit > 0)
    rules = {
        "failed": verdict == "failed",
        "blank": table.blanks() | (table.number(DURATION) == 0),
        "ambiguous": (verdict == "ambiguous") & (not ambiguous),
        "rejected": rejected & ~limited,
        "no-conditions": unknown,
        "not-supersaturated": ratio <= 1,
        "no-rate": ~rejected & ~(rate > 0) & ~limited,
    }
    return np.select(list(rules.values()), list(rules.keys()), default="")


def _rate_limit(table):
    """Return the upper limit of J for pulses without a cloud [1/(m^3 s)]."""
    stated = table.number(RATE_LIMIT)
    duration = table.number(DURATION) if table.has(DURATION) else np.ones(len(table.names))
    with np.errstate(divide="ignore", invalid="ignore"):
        derived = table.number(UPPER_LIMIT) * hold_density_factor(table) / duration
    return to_si(np.where(np.isfinite(stated), stated, derived), "per_cm3")


def hold_density_factor(table):
    """Return what takes a number during growth to the gas density of the hold.

    Numbers and limits of numbers are those of droplets per volume during growth. The factor is
    read off the pulses that have both a number and a rate, as the median of rate times effective
    duration (in ms; of the rate alone without that column) over number.

    Parameters
    ----------
    table : Table
        The table.

    Returns
    -------
    factor : float
        For a duration in ms and rates per second [-]; not a number where no pulse has both.

    Examples
    --------
    >>> from scatterfit.nucleation.table import table_from_columns
    >>> table = table_from_columns({"concentration_per_cm3": [1000.0], "nucleation_effective_ms":
    ...     [2.0], "nucleation_rate_per_cm3_s": [4e5]})
    >>> hold_density_factor(table)
    800.0
    """
    number, rate = table.number(CONCENTRATION), table.number(RATE)
    duration = table.number(DURATION) if table.has(DURATION) else np.ones(len(table.names))
    both = (number > 0) & (rate > 0) & (duration > 0)
    return float(np.median((rate * duration)[both] / number[both])) if both.any() else np.nan


def errors_of(table, name, rows, unit=1.0):
    """Return the standard uncertainties of a column, random and shared apart.

    Parameters
    ----------
    table : Table
        The table.
    name : str
        The column; ``_sigma`` is all of its uncertainty, ``_sigma_statistical`` and
        ``_sigma_systematic`` its parts, either of which makes the other known.
    rows : ndarray, shape (m,)
        The pulses [-].
    unit : float
        Factor from the column's unit to SI [-].

    Returns
    -------
    errors : Errors or None
        For the pulses asked for, an empty cell filled with the median of the others; ``None``
        where no uncertainty is stated.

    Notes
    -----
    An uncertainty that is not divided counts as random: whether it shows as scatter is then
    asked of the data.
    """
    whole, random, shared = (
        _filled(table.number(name + suffix)[rows])
        for suffix in ("_sigma", "_sigma_statistical", "_sigma_systematic")
    )
    if whole is None and random is None and shared is None:
        return None
    none = np.zeros(len(rows))
    if random is None:
        random = _difference(whole, none if shared is None else shared)
    if shared is None:
        shared = none if whole is None else _difference(whole, random)
    return Errors(random * unit, shared * unit)


def _filled(values):
    """Return a column with its gaps filled by the median, ``None`` where it is empty."""
    there = np.isfinite(values)
    return np.where(there, values, np.median(values[there])) if there.any() else None


def _difference(whole, part):
    """Return the other part of an uncertainty."""
    return np.zeros_like(part) if whole is None else np.sqrt(np.maximum(whole**2 - part**2, 0.0))


def to_chamber_density(table, gas, state):
    """Return what takes a number per volume at another state to the chamber's before expansion.

    By the two pressures where they are given, else along an adiabat of the carrier,
    n / n0 = (T / T0)^(cp / R - 1).

    Parameters
    ----------
    table : Table
        The table.
    gas : Gas or None
        The carrier, which tells the density of the gas from its temperature.
    state : str
        ``growth`` or ``nucleation``, which the columns of the other state begin with.

    Returns
    -------
    factor : ndarray, shape (n,)
        One where it is not known [-].
    how : str or None
        In words; ``None`` where the table does not tell.
    """
    temperatures = (f"{state}_temperature_K", "chamber.temperature_K")
    pressures = ("chamber.pressure_kPa", f"{state}_pressure_kPa")
    one = np.ones(len(table.names))
    if not all(map(table.has, temperatures)):
        return one, None
    cold, warm = map(table.number, temperatures)
    if all(map(table.has, pressures)):
        before, during = map(table.number, pressures)
        factor, how = before * cold / (during * warm), "by temperature and pressure"
    elif gas is not None:
        power = gas.heat_capacity(0.5 * (cold + warm)) / GAS_CONSTANT - 1.0
        factor, how = (warm / cold) ** power, "along an adiabat of the carrier"
    else:
        return one, None
    return np.where(np.isfinite(factor), factor, 1.0), how
