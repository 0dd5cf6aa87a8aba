"""From a table to the seeded pulses that say which part of the seeds activated."""

from dataclasses import dataclass

import numpy as np

from scatterfit.nucleation.activation_fit import Fractions
from scatterfit.nucleation.select import errors_of, to_chamber_density
from scatterfit.nucleation.table import (
    CONCENTRATION,
    SATURATION_RATIO,
    SEED_DIAMETER,
    SEEDS,
    TEMPERATURE,
    UPPER_LIMIT,
    VIEWED_VOLUME,
    check_columns,
)
from scatterfit.units import to_si

REASONS_LEFT_OUT = {
    "failed": "the trace could not be used",
    "ambiguous": "another solution cannot be excluded (--ambiguous takes them)",
    "rejected": "rejected without an upper limit of the number",
    "no-conditions": "no temperature, saturation ratio or number of seeds",
    "no-number": "neither a number nor an upper limit of it",
}
"""Why a row takes no part in a fit."""

_LIMIT_TO_SIGMA = 1.645


@dataclass(frozen=True)
class Seeded:
    """Seeded pulses, one entry a pulse."""

    names: tuple[str, ...]
    row: np.ndarray
    temperature: np.ndarray
    """Shape (n,) [K]."""
    diameter: np.ndarray
    """Of the seeds, shape (n,) [m]."""
    ratio_shared: float
    """Standard uncertainty of ln S that all pulses share [-]."""
    data: Fractions

    def take(self, rows):
        """Return some of the pulses by index, shape (m,)."""
        data = self.data
        sigma = None if data.sigma is None else data.sigma[rows]
        part = Fractions(data.x[rows], data.fraction[rows], data.seeds[rows], data.counted, sigma,
                         data.variance_x[rows], data.plateau_sigma)
        return Seeded(tuple(self.names[row] for row in rows), self.row[rows],
                      self.temperature[rows], self.diameter[rows], self.ratio_shared, part)


def seeded_pulses(table, gas=None, *, ambiguous=False):
    """Return the pulses of a table that say which part of the seeds activated.

    Parameters
    ----------
    table : Table
        The table.
    gas : Gas, optional
        The carrier, which tells the density of the gas from its temperature.
    ambiguous : bool
        Whether ambiguous pulses are taken.

    Returns
    -------
    seeded : Seeded
        A pulse without a cloud counts as a fraction of zero.
    left_out : dict of str to int
        Cause as in ``REASONS_LEFT_OUT`` to the number of pulses.
    density : str
        How numbers and seeds were brought to the same gas density.

    Raises
    ------
    InvalidInputError
        If a column is missing.
    """
    check_columns(table, (TEMPERATURE, SATURATION_RATIO, CONCENTRATION, SEEDS))
    verdict, number = table.verdicts(), table.number(CONCENTRATION)
    limit, seeds = table.number(UPPER_LIMIT), table.number(SEEDS)
    rejected = verdict == "rejected"
    known = [table.number(name) for name in (TEMPERATURE, SATURATION_RATIO, SEEDS)]
    rules = {
        "failed": verdict == "failed",
        "ambiguous": (verdict == "ambiguous") & (not ambiguous),
        "rejected": rejected & ~np.isfinite(limit),
        "no-conditions": ~np.isfinite(known).all(axis=0),
        "no-number": ~rejected & ~np.isfinite(number) & ~np.isfinite(limit),
    }
    cause = np.select(list(rules.values()), list(rules.keys()), default="")
    rows = np.flatnonzero(cause == "")
    none = (rejected | ~np.isfinite(number))[rows]
    factor, density = _density_factor(table, gas)
    per_seed = factor[rows] / seeds[rows]
    fraction = np.where(none, 0.0, number[rows]) * per_seed
    data, shared = _fractions(table, rows, fraction, np.where(none, limit[rows], np.nan) * per_seed)
    seeded = Seeded(tuple(table.names[row] for row in rows), rows, table.number(TEMPERATURE)[rows],
                    to_si(table.number(SEED_DIAMETER)[rows], "nm"), shared, data)
    return seeded, {name: int(np.sum(cause == name)) for name in REASONS_LEFT_OUT}, density


def _density_factor(table, gas):
    """Return what takes a number during growth to the chamber's state, where seeds are counted."""
    factor, how = to_chamber_density(table, gas, "growth")
    if how is None:
        return factor, "number and seeds as given, at the same gas density"
    return factor, f"number taken from the gas density of growth to that of the chamber, {how}"


def _fractions(table, rows, fraction, limit):
    """Return fractions with their errors, and the shared standard uncertainty of ln S."""
    ratio = table.number(SATURATION_RATIO)[rows]
    of_ratio = errors_of(table, SATURATION_RATIO, rows)
    of_number = errors_of(table, CONCENTRATION, rows)
    of_seeds = errors_of(table, SEEDS, rows)
    seeds = table.number(SEEDS)[rows]
    volume = table.number(VIEWED_VOLUME)[rows]
    counted = bool(np.isfinite(volume).all()) and rows.size > 0
    in_view = seeds * (volume * 1e-3 if counted else 1.0)
    sigma, shared = None, 0.0
    if of_number is not None:
        per_seed = fraction / np.where(fraction > 0, table.number(CONCENTRATION)[rows], 1.0)
        own = np.where(fraction > 0, of_number.random * per_seed, 0.0)
        sigma = np.where(np.isfinite(limit), limit / _LIMIT_TO_SIGMA, own)
        shared = float(np.median(_relative(of_number.shared, table.number(CONCENTRATION)[rows])))
    if of_seeds is not None:
        shared = float(np.hypot(shared, np.median(of_seeds.shared / seeds)))
        if sigma is not None:
            sigma = np.hypot(sigma, fraction * of_seeds.random / seeds)
    if sigma is not None:
        sigma = np.maximum(sigma, _least_sigma(sigma, in_view, counted))
    variance_x = np.zeros(rows.size) if of_ratio is None else (of_ratio.random / ratio) ** 2
    of_all = 0.0 if of_ratio is None or not rows.size else float(np.mean(of_ratio.shared / ratio))
    return Fractions(np.log(ratio), fraction, in_view, counted, sigma, variance_x, shared), of_all


def _relative(sigma, value):
    positive = np.isfinite(value) & (value > 0)
    return (sigma[positive] / value[positive]) if positive.any() else np.zeros(1)


def _least_sigma(sigma, in_view, counted):
    """Return what a fraction is uncertain by even where none was counted: half a count."""
    if counted:
        return 0.5 / in_view
    positive = sigma[sigma > 0]
    return float(positive.min()) if positive.size else 1e-6
