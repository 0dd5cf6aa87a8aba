"""From a table of seeded pulses to onset and width of activation, run by run."""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from scatterfit.matter import Gas, Substance
from scatterfit.nucleation.activation_fit import Curve, fit_curve, wilson_interval
from scatterfit.nucleation.estimate import Estimate
from scatterfit.nucleation.grouping import isotherms
from scatterfit.nucleation.line import outliers
from scatterfit.nucleation.quantiles import student_quantile
from scatterfit.nucleation.seeded import Seeded, seeded_pulses
from scatterfit.nucleation.table import DURATION, group_rows
from scatterfit.nucleation.theory import liquid_of
from scatterfit.nucleation.threshold import (
    contact_angle,
    equivalent_diameter,
    kappa_for,
    kelvin_length,
    koehler_maximum,
)
from scatterfit.units import to_si

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
