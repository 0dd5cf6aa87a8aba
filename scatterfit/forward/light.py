"""The kernel of one droplet widened to the spread of a cloud, ready for lookups."""

from dataclasses import dataclass

import numpy as np

_PADDING = 120
_TAPER = 24
_SMALL_VARIANCE = 4e-6


@dataclass(frozen=True)
class CloudLight:
    """Cross sections against ln r as a spectrum, so that any wider spread costs one transform."""

    spectrum: np.ndarray
    """Fourier transform of the padded rows, shape (rows, f) [m^2]."""
    wavenumber: np.ndarray
    """Of ln r, shape (f,) [-]."""
    start: float
    """ln of the first radius in metres [-]."""
    step: float
    """Of ln r [-]."""
    count: int
    """Radii in the table."""
    size: int
    """Length of the transform."""


@dataclass(frozen=True)
class SpreadTable:
    """Rows of cross section at one spread, with what interpolation and derivatives need."""

    cells: np.ndarray
    """All rows' values, then slopes (d/d ln r times the step), then derivatives by the variance,
    shape (3 rows, n) [m^2]."""
    start: float
    step: float
    variance: float
    """Beyond that of the base table [-]."""

    @property
    def rows(self):
        """Return how many cross sections there are."""
        return self.cells.shape[0] // 3

    @property
    def values(self):
        """Return the cross sections, shape (rows, n) [m^2]."""
        return self.cells[: self.rows]

    @property
    def log_radius(self):
        """Return ln of the radii in metres, shape (n,) [-]."""
        return self.start + self.step * np.arange(self.cells.shape[1])


def cloud_light(rows, start, step):
    """Return rows of a kernel table, ready to be widened.

    Parameters
    ----------
    rows : ndarray, shape (rows, n)
        Cross sections on an even grid of ln r, already averaged over the base spread [m^2].
    start : float
        ln of the first radius in metres [-].
    step : float
        Of ln r [-].

    Returns
    -------
    light : CloudLight
        The rows' spectrum.
    """
    rows = np.atleast_2d(rows)
    count = rows.shape[1]
    size = 1 << int(np.ceil(np.log2(count + 2 * _PADDING)))
    padded = np.zeros((rows.shape[0], size))
    padded[:, :count] = rows
    # Cross sections grow as r^2: the end is carried on and then let down to where it starts again.
    tail = size - count
    ramp = np.minimum(np.arange(1, tail + 1), _PADDING) * step
    carried = rows[:, -1:] * np.exp(2.0 * ramp)
    fade = 0.5 * (1.0 + np.cos(np.pi * np.clip(
        (np.arange(1, tail + 1) - _PADDING) / max(tail - _PADDING - _TAPER, 1), 0.0, 1.0)))
    padded[:, count:] = carried * fade + rows[:, :1] * (1.0 - fade)
    wavenumber = 2.0 * np.pi * np.fft.rfftfreq(size, d=step)
    return CloudLight(np.fft.rfft(padded, axis=1), wavenumber, start, step, count, size)


def spread_table(light, variance, near=None):
    """Return the rows averaged over a wider spread.

    Parameters
    ----------
    light : CloudLight
        Of the pulse.
    variance : float
        Variance of ln r beyond that of the base table, >= 0 [-].
    near : SpreadTable, optional
        A table of nearly the same variance, corrected to first order if that serves.

    Returns
    -------
    table : SpreadTable
        Values, slopes and derivatives by the variance.

    Notes
    -----
    A Gaussian average obeys the heat equation: its derivative by the variance is half its second
    derivative by ln r.
    """
    if near is not None and abs(variance - near.variance) < _SMALL_VARIANCE:
        return near
    damped = light.spectrum * np.exp(-0.5 * variance * light.wavenumber**2)
    slope = damped * (1j * light.wavenumber * light.step)
    curvature = damped * (-0.5 * light.wavenumber**2)
    both = np.fft.irfft(np.concatenate([damped, slope, curvature]), light.size, axis=1)
    return SpreadTable(
        np.ascontiguousarray(both[:, : light.count]), light.start, light.step, variance
    )


def look_up(table, log_radius, variance):
    """Return cross sections at given radii, with derivatives.

    Parameters
    ----------
    table : SpreadTable
        Of the pulse.
    log_radius : ndarray, shape (...)
        ln of the radius in metres [-]; beyond the ends the end values hold.
    variance : float
        Variance wanted; to first order from that of the table [-].

    Returns
    -------
    values : ndarray, shape (rows, ...)
        Cross sections [m^2].
    slopes : ndarray, shape (rows, ...)
        Their derivatives by ln r [m^2].
    curvatures : ndarray, shape (rows, ...)
        Their derivatives by the variance of ln r [m^2].
    """
    place = (log_radius - table.start) * (1.0 / table.step)
    last = table.cells.shape[1] - 2
    place = np.clip(place, 0.0, last + 0.999999)
    index = place.astype(np.intp)
    t = place - index
    low = table.cells.take(index, axis=1)
    high = table.cells.take(index + 1, axis=1)
    rows = table.rows
    low_slope, high_slope = low[rows:2 * rows], high[rows:2 * rows]
    rise = high[:rows] - low[:rows]
    # Cubic Hermite: low + t (s0 + t (b + t c)).
    c = low_slope + high_slope - 2.0 * rise
    b = rise - low_slope - c
    values = low[:rows] + t * (low_slope + t * (b + t * c))
    slopes = (low_slope + t * (2.0 * b + 3.0 * t * c)) * (1.0 / table.step)
    bend = low[2 * rows:] + t * (high[2 * rows:] - low[2 * rows:])
    if variance != table.variance:
        values = values + (variance - table.variance) * bend
    return values, slopes, bend
