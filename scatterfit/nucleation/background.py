"""How much of J a background took: pulse by pulse from the table, and put back."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.matter import moist_heat_capacity
from scatterfit.nucleation.losses import (
    Background,
    Surroundings,
    condensation_sink,
    critical_diameter,
    growth_rate,
    loss_exponent,
    vapour_taken,
)
from scatterfit.nucleation.select import Errors, errors_of, to_chamber_density
from scatterfit.nucleation.table import (
    BACKGROUND,
    BACKGROUND_DIAMETER,
    BACKGROUND_UNTIL,
    DURATION,
    PRESSURE,
)
from scatterfit.nucleation.theory import reference_theory
from scatterfit.units import to_si

MODEL_SIGMA = 0.3
"""Relative standard uncertainty of the losses of droplets [-]: what they change by when birth is
put at 1.02 or at 1.2 critical sizes (measured in the tests)."""
VAPOUR_SIGMA = 0.5
"""The same of what the vapour's loss takes from J [-]: how long the gas was supersaturated before
the hold is not known (common practice, no source)."""

_LARGEST_PART = 0.5
_STEP = 0.01


@dataclass(frozen=True)
class Lost:
    """What a background took from pulses, one entry a pulse, shape (n,) each."""

    row: np.ndarray
    """Index in the table, ascending [-]."""
    droplets: np.ndarray
    """ln of J over what is left of it by droplets that were swept up [-]."""
    vapour: np.ndarray
    """The same by vapour that was taken, and the warmth that came of it [-]."""
    sigma: np.ndarray
    """Standard uncertainty of both together, which the pulses share [-]."""
    sink: np.ndarray
    """Condensation sink when the hold begins [1/s]."""
    growth: np.ndarray
    """dd/dt of a droplet of twice the critical size [m/s]."""
    taken: np.ndarray
    """Part of the vapour taken at the middle of the hold; not a number: duration unknown [-]."""
    until: np.ndarray
    """Diameter of detection [m]."""
    density: str | None
    """How the particles were brought to the density of the hold; ``None``: as given."""

    def of(self, rows):
        """Return what was taken from some rows of the table on average."""
        place = np.searchsorted(self.row, rows)
        taken = self.taken[place]
        droplets, vapour = (float(np.mean(part[place])) for part in (self.droplets, self.vapour))
        return Losses(
            droplets, vapour, float(np.mean(self.sigma[place])),
            *(float(np.median(part[place])) for part in (self.sink, self.growth, self.until)),
            float(np.median(taken)) if np.isfinite(taken).all() else None, self.density)


@dataclass(frozen=True)
class Losses:
    """What a background took from one isotherm, the mean over its pulses."""

    droplets: float
    """ln of J over what is left of it by droplets that were swept up [-]."""
    vapour: float
    """The same by vapour that was taken [-]."""
    sigma: float
    """Standard uncertainty of both together [-]."""
    sink: float
    """Condensation sink when the hold begins [1/s]."""
    growth: float
    """dd/dt of a droplet of twice the critical size [m/s]."""
    detected: float
    """Diameter at which a droplet counts as detected [m]."""
    taken: float | None
    """Part of the vapour taken at the middle of the hold [-]; ``None``: duration unknown."""
    density: str | None
    """How the particles were brought to the density of the hold; ``None``: as given."""


def background_losses(table, pulses, settings):
    """Return what a background took from each pulse.

    Parameters
    ----------
    table : Table
        The table, whose columns tell of the background where the settings do not.
    pulses : Pulses
        Those that take part, of this table.
    settings : RateSettings
        Background, pressure of the hold, vapour and carrier.

    Returns
    -------
    lost : Lost or None
        ``None`` where there is no background, or nothing tells the hold's pressure.
    given : bool
        Whether there is a background at all.
    """
    rows = pulses.row
    number, size, until, stated = _particles(table, rows, settings)
    given = bool(np.any(number * size > 0))
    pressure = to_si(table.number(PRESSURE)[rows], "kPa")
    if settings.pressure is not None:
        pressure = np.full(rows.size, settings.pressure)
    if not given or settings.gas is None or not np.isfinite(pressure).any():
        return None, given
    to_chamber, density = to_chamber_density(table, settings.gas, "nucleation")
    pressure = np.where(np.isfinite(pressure), pressure, np.nanmedian(pressure))
    around = Surroundings(pulses.temperature, pressure, pulses.ratio, settings.substance,
                          settings.gas)
    particles = Background(number / to_chamber[rows], size, until)
    droplets = loss_exponent(around, particles)
    duration = to_si(table.number(DURATION)[rows], "ms")
    part = vapour_taken(around, particles, np.nan_to_num(duration))
    vapour = _lower_rate(around, part)
    by_size = np.zeros(rows.size)
    if np.any(stated[1]):
        larger = replace(particles, diameter=(1.0 + _STEP) * size)
        grown = vapour_taken(around, larger, np.nan_to_num(duration))
        more = loss_exponent(around, larger) + _lower_rate(around, grown)
        by_size = (more - droplets - vapour) / _STEP
    spread = ((droplets + vapour) * stated[0], by_size * stated[1],
              MODEL_SIGMA * droplets, VAPOUR_SIGMA * vapour)
    taken = np.where(np.isfinite(duration), part[:, part.shape[1] // 2], np.nan)
    return Lost(
        rows, droplets, vapour, np.sqrt(sum(share**2 for share in spread)),
        condensation_sink(around, particles), growth_rate(around, 2.0 * critical_diameter(around)),
        taken, until, density), given


def _particles(table, rows, settings):
    """Return concentration, diameter and size of detection of each pulse's background, in SI.

    Beside them the relative standard uncertainties of the first two.
    """
    if settings.background is not None:
        known = settings.background
        until = known.diameter if known.until is None else known.until
        return (*(np.full(rows.size, value)
                  for value in (known.concentration, known.diameter, until)), (0.0, 0.0))
    number = np.nan_to_num(to_si(table.number(BACKGROUND)[rows], "per_cm3"))
    size = to_si(table.number(BACKGROUND_DIAMETER)[rows], "nm")
    there = np.isfinite(size)
    number = np.where(there, number, 0.0)
    size = np.where(there, size, 100e-9)  # of none
    until = to_si(table.number(BACKGROUND_UNTIL)[rows], "nm")
    until = np.where(np.isfinite(until), until, size)
    relative = []
    for name, value in ((BACKGROUND, number * 1e-6), (BACKGROUND_DIAMETER, size * 1e9)):
        errors = errors_of(table, name, rows)
        whole = 0.0 if errors is None else np.hypot(errors.random, errors.shared)
        relative.append(np.where(value > 0, whole / np.where(value > 0, value, 1.0), 0.0))
    return number, size, until, relative


def _lower_rate(around, taken):
    """Return ln of J over its mean during a hold in which vapour is taken, shape (n,) [-].

    The heat that condensing vapour sets free warms the gas.
    """
    substance = around.substance
    part = np.minimum(taken, _LARGEST_PART)
    cold, ratio = around.temperature[:, None], around.saturation_ratio[:, None]
    saturated = substance.saturation_pressure(cold)
    fraction = ratio * saturated / around.pressure[:, None]
    heat = moist_heat_capacity(around.gas, substance, fraction, cold)
    warm = cold + part * fraction * substance.latent_heat(cold) / heat
    left = np.maximum(ratio * (1.0 - part) * saturated / substance.saturation_pressure(warm), 1.01)
    theory = reference_theory(substance)
    change = theory.log_rate(warm, left) - theory.log_rate(cold, ratio)
    return -np.log(np.mean(np.exp(np.minimum(change, 0.0)), axis=1))


def put_back(pulses, lost):
    """Return pulses with the rates that there would be without the background.

    Parameters
    ----------
    pulses : Pulses
        Measured rates and upper limits.
    lost : Lost
        What was taken from each of them.

    Returns
    -------
    pulses : Pulses
        With rates, limits and errors multiplied; the uncertainty of the losses is one that all
        pulses share.
    """
    factor = np.exp(lost.droplets + lost.vapour)
    rate = pulses.rate * factor
    zero = Errors(np.zeros(factor.size), np.zeros(factor.size))
    errors = {name: pulses.errors.get(name, zero) for name in ("temperature", "ratio", "rate")}
    known = errors["rate"]
    errors["rate"] = Errors(
        known.random * factor,
        np.hypot(known.shared * factor, np.nan_to_num(rate) * lost.sigma))
    return replace(pulses, rate=rate, limit=pulses.limit * factor, errors=errors)
