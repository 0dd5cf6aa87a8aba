"""The kernel of one droplet widened to the spread of a cloud, ready for lookups."""

from dataclasses import dataclass, replace
from functools import cached_property

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

    values: np.ndarray
    """Shape (rows, n) [m^2]."""
    slopes: np.ndarray
    """Their change over one step at the rate there, shape (rows, n) [m^2]."""
    bends: np.ndarray
    """Their derivatives by the variance of ln r, shape (rows, n) [m^2]."""
    start: float
    """ln of the first radius in metres [-]."""
    step: float
    """Of ln r [-]."""
    variance: float
    """Beyond that of the base table [-]."""

    @property
    def log_radius(self):
        """Return ln of the radii in metres, shape (n,) [-]."""
        return self.start + self.step * np.arange(self.values.shape[1])

    @cached_property
    def interleaved(self):
        """Return all that is known at one radius side by side, as compiled loops read it.

        Shape (n, rows, 3) [m^2].
        """
        table = np.empty((self.values.shape[1], self.values.shape[0], 3))
        for k, part in enumerate((self.values, self.slopes, self.bends)):
            table[:, :, k] = part.T
        return table

    @cached_property
    def cells(self):
        """Return what each cell between two radii needs, shape (6 rows, n - 1) [m^2].

        The four coefficients of the cubic in the place within it, lowest first, then the
        derivative by the variance and its rise.
        """
        rise, first, last = np.diff(self.values), self.slopes[:, :-1], self.slopes[:, 1:]
        # Cubic Hermite: low + t (first + t (b + t c)).
        c = first + last - 2.0 * rise
        return np.concatenate([
            self.values[:, :-1], first, rise - first - c, c, self.bends[:, :-1],
            np.diff(self.bends),
        ])


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


def moved_rows(light, rows, shift):
    """Return the light with some rows as a longer wavelength would have them.

    At one refractive index a cross section over the wavelength squared depends on the radius over
    the wavelength alone.

    Parameters
    ----------
    light : CloudLight
        Of the pulse.
    rows : sequence of int
        Rows to move.
    shift : float
        ln of the longer wavelength over the shorter [-].

    Returns
    -------
    moved : CloudLight
        The other light.
    """
    spectrum = light.spectrum.copy()
    spectrum[rows] *= np.exp(2.0 * shift - 1j * light.wavenumber * shift)
    return replace(light, spectrum=spectrum)


def widened(light, variance):
    """Return the rows averaged over a wider spread, without what derivatives need.

    Parameters
    ----------
    light : CloudLight
        Of the pulse.
    variance : float
        Variance of ln r beyond that of the base table, >= 0 [-].

    Returns
    -------
    values : ndarray, shape (rows, n)
        Cross sections [m^2].
    """
    damped = light.spectrum * np.exp(-0.5 * variance * light.wavenumber**2)
    return np.fft.irfft(damped, light.size, axis=1)[:, : light.count]


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
    square = -0.5 * light.wavenumber**2
    parts = np.empty((3, *light.spectrum.shape), dtype=complex)
    np.multiply(light.spectrum, np.exp(variance * square), out=parts[0])
    np.multiply(parts[0], 1j * light.step * light.wavenumber, out=parts[1])
    np.multiply(parts[0], square, out=parts[2])
    values, slopes, bends = np.fft.irfft(parts, light.size)[..., : light.count]
    return SpreadTable(values, slopes, bends, light.start, light.step, variance)


def look_up(table, log_radius, variance, derivatives=True):
    """Return cross sections at given radii, with derivatives.

    Parameters
    ----------
    table : SpreadTable
        Of the pulse.
    log_radius : ndarray, shape (...)
        ln of the radius in metres [-]; beyond the ends the end values hold.
    variance : float
        Variance wanted; to first order from that of the table [-].
    derivatives : bool
        Whether slopes and curvatures are wanted; ``None`` stands for them where they are not.

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
    np.minimum(np.maximum(place, 0.0, out=place), table.values.shape[1] - 1 - 1e-9, out=place)
    index = place.astype(np.intp)
    t = place
    t -= index
    rows = table.values.shape[0]
    corrected = variance != table.variance
    wanted = table.cells if derivatives or corrected else table.cells[: 4 * rows]
    found = wanted.take(index, axis=1)
    low, first, b, c = (found[k * rows:(k + 1) * rows] for k in range(4))
    bend = None
    if derivatives or corrected:
        bend = found[5 * rows:]
        bend *= t
        bend += found[4 * rows:5 * rows]
    values = c * t
    values += b
    slopes = None
    if derivatives:
        # With the cubic's inner sum s = b + t c: value low + t (first + t s), slope
        # first + t (2 s + t c).
        slopes = 2.0 * values
        slopes += c * t
        slopes *= t
        slopes += first
        slopes *= 1.0 / table.step
    values *= t
    values += first
    values *= t
    values += low
    if corrected:
        values += (variance - table.variance) * bend
    return values, slopes, bend
