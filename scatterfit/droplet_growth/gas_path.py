"""The gas while droplets grow: pressure, and the temperature it would have without them."""

from dataclasses import dataclass

import numpy as np

from scatterfit.constants import GAS_CONSTANT

_BEYOND = 1e-3


@dataclass(frozen=True)
class GasPath:
    """The undisturbed gas at the nodes where growth is solved."""

    time: np.ndarray
    """Increasing, shape (m,) [s]."""
    pressure: np.ndarray
    """Shape (m,) [Pa]."""
    temperature: np.ndarray
    """What the gas would have without droplets, shape (m,) [K]."""
    reference_pressure: float
    """Of the growth stage [Pa]."""
    reference_temperature: float
    """Undisturbed, at the reference pressure [K]."""


def adiabatic_temperature(pressure, start_temperature, start_pressure, heat_capacity):
    r"""Return the temperature after a reversible adiabatic change.

    .. math:: T = T_0 (p / p_0)^{R / c_p}

    Parameters
    ----------
    pressure : array_like, shape (...)
        Pressure after the change [Pa].
    start_temperature, start_pressure : float
        Before the change [K], [Pa].
    heat_capacity : float
        Of the gas, vapour included, at constant pressure [J/(mol K)].

    Returns
    -------
    temperature : ndarray, shape (...)
        Temperature [K].

    Examples
    --------
    Air from 1000 to 500 hPa, 293 K to 240.36 K:

    >>> round(float(adiabatic_temperature(500.0, 293.0, 1000.0, 3.5 * GAS_CONSTANT)), 2)
    240.36
    """
    ratio = np.asarray(pressure, dtype=float) / start_pressure
    return start_temperature * ratio ** (GAS_CONSTANT / heat_capacity)


def choose_nodes(time, pressure, births, count=150):
    """Return times at which to solve growth: dense at births and where the pressure moves.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples, increasing [s].
    pressure : ndarray, shape (n,)
        Smooth pressure [Pa].
    births : tuple of float
        First and last birth [s].
    count : int
        Number of nodes.

    Returns
    -------
    nodes : ndarray, shape (m,)
        From just before the first birth to a millisecond after the last sample [s].

    Examples
    --------
    >>> time = np.linspace(0.0, 0.1, 501)
    >>> nodes = choose_nodes(time, np.full(501, 7e4), (0.01, 0.011), count=50)
    >>> bool(nodes[0] < 0.01), float(nodes[-1])
    (True, 0.101)
    """
    first, last = births
    end = float(time[-1]) + _BEYOND
    start = max(float(time[0]), first - 0.02 * (last - first) - 1e-6)
    fine = np.unique(np.concatenate([
        np.linspace(start, end, 4 * count),
        start + np.geomspace(1e-5, 1.0, 4 * count) * (end - start),
        np.linspace(start, min(last + 2.0 * (last - first), end), 4 * count),
        time[(time > start) & (time < end)][:: max(time.size // (8 * count), 1)],
    ]))
    middle = 0.5 * (fine[1:] + fine[:-1])
    moving = np.abs(np.diff(np.interp(fine, time, pressure))) / np.diff(fine) / np.mean(pressure)
    age = np.maximum(middle - first, 0.02 * (last - first) + 1e-5)
    moving = np.minimum(15.0 * moving, 3.0 / max(last - first, 1e-4))
    density = 1.0 / (end - start) + 0.35 / age + moving
    density = density + np.where(middle < last, 0.5 / max(last - first, 1e-6), 0.0)
    cumulative = np.concatenate([[0.0], np.cumsum(density * np.diff(fine))])
    return np.interp(np.linspace(0.0, cumulative[-1], count), cumulative, fine)
