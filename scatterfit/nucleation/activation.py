"""From a table of seeded pulses to onset and width of activation, run by run."""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.matter import Gas, Substance
from scatterfit.nucleation.activation_fit import Curve, Fractions, fit_curve, wilson_interval
from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.grouping import isotherms
from scatterfit.nucleation.line import outliers
from scatterfit.nucleation.quantiles import student_quantile
from scatterfit.nucleation.select import errors_of
from scatterfit.nucleation.table import (
    CONCENTRATION,
    DURATION,
    SATURATION_RATIO,
    SEED_DIAMETER,
    SEEDS,
    TEMPERATURE,
    UPPER_LIMIT,
    VIEWED_VOLUME,
    check_columns,
    group_rows,
)
from scatterfit.nucleation.theory import liquid_of
from scatterfit.nucleation.threshold import (
    contact_angle,
    equivalent_diameter,
    kappa_for,
    kelvin_length,
    koehler_maximum,
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
_SHORTEST = 1e-3  # s, where the duration is not given
_OVERLAP = 0.5
_LEAST_STEPS = 4


@dataclass(frozen=True)
class ActivationSettings:
    """What an analysis of activation is told."""

    substance: Substance
    tolerance: float | None = None
    """Largest distance from the middle of a run's temperature [K]; ``None``: found."""
    kappa: float | None = None
    """Hygroscopicity of soluble seeds to compare with [-]."""
    free_plateau: bool | None = None
    """Whether the curve may level off elsewhere than at one; ``None``: where data demand it."""
    gas: Gas | None = None
    """The carrier, for the gas density of seeds and droplets."""


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


@dataclass(frozen=True)
class Run:
    """Seeds of one kind at one temperature."""

    by: str | None
    temperature: float
    """[K]."""
    diameter: float | None
    """Of the seeds [m]."""
    pulses: Seeded
    curve: Curve | None
    onset: Estimate | None = None
    """Saturation ratio at which half of the seeds activate [-]."""
    width: Estimate | None = None
    """Standard deviation of ln S at activation [-]."""
    plateau: Estimate | None = None
    """Fraction far beyond the onset [-]."""
    equivalent: Estimate | None = None
    """Kelvin-equivalent diameter of the onset [m]."""
    kelvin: float | None = None
    """Saturation ratio at which a wettable seed activates [-]."""
    koehler: float | None = None
    """That at which a soluble seed of the stated hygroscopicity activates [-]."""
    kappa: Estimate | None = None
    """Hygroscopicity that would explain the onset [-]."""
    angle: Estimate | None = None
    """Contact angle that would [rad]."""
    fletcher: float | None = None
    """Part of the homogeneous barrier that is left with it [-]."""

    @property
    def outliers(self):
        """Names of the pulses too far from the curve to be chance; they are kept in the fit."""
        if self.curve is None or self.curve.score is None:
            return ()
        score = self.curve.score
        usual = max(1.0, 1.4826 * float(np.median(np.abs(score))))
        return tuple(self.pulses.names[place] for place in np.flatnonzero(outliers(score / usual)))

    def intervals(self):
        """Return the 68 percent interval of each fraction, shape (n,) each [-]."""
        data = self.pulses.data
        part = np.clip(data.fraction, 0.0, 1.0)
        if data.sigma is not None:
            return data.fraction - data.sigma, data.fraction + data.sigma
        counting = self.curve.noise.counting if self.curve else 1.0
        spread = self.curve.noise.proportional if self.curve else 0.0
        low, high = wilson_interval(part, data.seeds / max(counting, 1e-9))
        wider = spread * data.fraction
        return (data.fraction - np.hypot(np.maximum(part - low, 0.0), wider),
                data.fraction + np.hypot(np.maximum(high - part, 0.0), wider))


@dataclass(frozen=True)
class Activation:
    """What a table of seeded pulses says."""

    source: str
    settings: ActivationSettings
    by: str | None
    density: str
    """How numbers and seeds were brought to the same gas density."""
    runs: tuple[Run, ...]
    left_out: Mapping[str, int]
    comparison: tuple = ()


def analyse_activation(table, settings, *, by=None, ambiguous=False):
    """Take seeded pulses apart by kind of seed and temperature and fit each run.

    Parameters
    ----------
    table : Table
        Pulses with temperature, saturation ratio, number and seeds.
    settings : ActivationSettings
        How.
    by : str, optional
        Column by which to divide the pulses before all else.
    ambiguous : bool
        Whether ambiguous pulses are taken.

    Returns
    -------
    activation : Activation
        Its runs.

    Raises
    ------
    InvalidInputError
        If a column is missing.
    """
    seeded, left_out, density = seeded_pulses(table, settings.gas, ambiguous=ambiguous)
    runs = []
    for value, rows in group_rows(table, by).items():
        part = seeded.take(np.flatnonzero(np.isin(seeded.row, rows)))
        for group in _runs(part, settings.tolerance):
            runs.append(_run(table, part.take(group), settings, value))
    return Activation(table.source, settings, by, density, tuple(runs), left_out)


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
    """Return what takes a number during growth to the chamber's state, where seeds are counted.

    By the two pressures where they are given, else along an adiabat of the carrier,
    n / n0 = (T / T0)^(cp / R - 1).
    """
    pressures = ("chamber.pressure_kPa", "growth_pressure_kPa")
    temperatures = ("growth_temperature_K", "chamber.temperature_K")
    as_given = np.ones(len(table.names)), "number and seeds as given, at the same gas density"
    if not all(map(table.has, temperatures)):
        return as_given
    cold, warm = map(table.number, temperatures)
    if all(map(table.has, pressures)):
        before, during = map(table.number, pressures)
        factor, how = before * cold / (during * warm), "by temperature and pressure"
    elif gas is not None:
        power = gas.heat_capacity(0.5 * (cold + warm)) / GAS_CONSTANT - 1.0
        factor, how = (warm / cold) ** power, "along an adiabat of the carrier"
    else:
        return as_given
    return (np.where(np.isfinite(factor), factor, 1.0),
            f"number taken from the gas density of growth to that of the chamber, {how}")


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


def _runs(seeded, tolerance):
    """Return indices of each run: seeds of one size, and one temperature."""
    sizes = np.where(np.isfinite(seeded.diameter), seeded.diameter, 0.0)
    groups = []
    for size in np.unique(sizes):
        rows = np.flatnonzero(sizes == size)
        parts = isotherms(seeded.temperature[rows], tolerance)
        if tolerance is None:
            parts = _joined(parts, seeded.data.x[rows])
        groups += [rows[np.sort(part)] for part in parts]
    return groups


def _joined(parts, x):
    """Return temperature groups joined where they are steps of one run.

    Deeper expansions are colder and more supersaturated: pulses whose temperatures fall apart
    while their supersaturations do not overlap are one run, not several isotherms.
    """
    joined = []
    for part in parts:
        if joined and not _overlap(x[joined[-1]], x[part]):
            joined[-1] = np.concatenate([joined[-1], part])
        else:
            joined.append(part)
    return joined


def _overlap(first, second):
    if min(np.unique(first).size, np.unique(second).size) < _LEAST_STEPS:
        return False
    shared = min(first.max(), second.max()) - max(first.min(), second.min())
    return shared > _OVERLAP * min(np.ptp(first), np.ptp(second))


def _run(table, pulses, settings, by):
    temperature = float(np.mean(pulses.temperature))
    size = float(pulses.diameter[0]) if np.isfinite(pulses.diameter[0]) else None
    curve = fit_curve(pulses.data, free_plateau=settings.free_plateau)
    liquid = liquid_of(settings.substance, temperature)
    length = float(kelvin_length(temperature, liquid))
    kelvin = koehler = None
    if size is not None:
        kelvin = float(np.exp(length / size))
        if settings.kappa is not None:
            koehler = koehler_maximum(size, settings.kappa, length)[0]
    run = Run(by, temperature, size, pulses, curve, kelvin=kelvin, koehler=koehler)
    if curve is None:
        return run
    run = replace(run, **_from_curve(curve, pulses, temperature, liquid))
    if size is None:
        return run
    return replace(run, **_explained(table, pulses, curve, size, temperature, liquid))


def _from_curve(curve, pulses, temperature, liquid):
    factor = student_quantile(0.975, curve.freedom)
    centre, log_width, top = np.sqrt(np.diag(curve.covariance))
    ratio, shared = float(np.exp(curve.centre)), pulses.ratio_shared
    onset = Estimate(ratio, ratio * centre, ratio * shared, factor, positive=True)
    width = None
    if curve.resolved:
        width = Estimate(curve.width, curve.width * log_width, 0.0, factor, positive=True)
    free = curve.plateau_free
    plateau = Estimate(curve.plateau, top, pulses.data.plateau_sigma * free, factor)
    equivalent = None
    if curve.centre > 0:
        size = float(equivalent_diameter(ratio, temperature, liquid))
        equivalent = Estimate(size, size * centre / curve.centre, size * shared / curve.centre,
                              factor, positive=True)
    return {"onset": onset, "width": width, "plateau": plateau, "equivalent": equivalent}


def _explained(table, pulses, curve, size, temperature, liquid):
    """Return the hygroscopicity or the contact angle that would give the onset."""
    length = float(kelvin_length(temperature, liquid))
    time = to_si(table.number(DURATION)[pulses.row], "ms")
    duration = float(np.median(time[time > 0])) if np.any(time > 0) else _SHORTEST
    step = 1e-4 * max(abs(curve.centre), 1e-6)
    sigma = float(np.sqrt(curve.covariance[0, 0]))

    def estimate(law):
        middle, up, down = (law(np.exp(curve.centre + turn * step)) for turn in (0, 1, -1))
        if middle is None:
            return None
        slopes = [abs(other - middle) / step for other in (up, down) if other is not None]
        steep = max(slopes) if slopes else np.nan
        return Estimate(middle, steep * sigma, steep * pulses.ratio_shared)

    def kappa(ratio):
        return kappa_for(size, ratio, length)

    def angle(ratio):
        return contact_angle(ratio, size, duration, temperature, liquid)[0]

    return {"kappa": estimate(kappa), "angle": estimate(angle),
            "fletcher": contact_angle(np.exp(curve.centre), size, duration, temperature,
                                      liquid)[1]}
