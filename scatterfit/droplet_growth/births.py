"""When droplets are born: along the nucleation rate, or when seeds pass their threshold."""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Births:
    """A few classes of droplets that stand for all of them."""

    times: np.ndarray
    """When each class is born, shape (c,) [s]."""
    weights: np.ndarray
    """Share of the droplets in each class, sums to one, shape (c,) [-]."""
    median: float
    """When half of all droplets have been born [s]."""
    effective: float
    """Integral of the birth rate over its peak [s]; zero for births at one instant."""
    peak: float
    """When the birth rate is highest [s]."""


def births_from_rate(time, log_rate, classes=8):
    """Return the classes that stand for births along a nucleation rate.

    The classes are the nodes and weights of the Gauss rule whose weight function is the rate,
    so that what is smooth in the time of birth is summed over exactly to degree 2 c - 1.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Increasing [s].
    log_rate : ndarray, shape (n,)
        ln of the nucleation rate at those times [-].
    classes : int
        Number of classes.

    Returns
    -------
    births : Births
        Classes in order of birth.

    References
    ----------
    .. [1] G. H. Golub, J. H. Welsch, "Calculation of Gauss quadrature rules",
       Math. Comp. 23 (1969) 221-230.

    Examples
    --------
    A constant rate over 1 ms has the Gauss-Legendre nodes:

    >>> time = np.linspace(0.0, 1e-3, 1001)
    >>> found = births_from_rate(time, np.zeros(1001), classes=2)
    >>> found.times * 1e3
    array([0.211, 0.789])
    >>> found.effective * 1e3
    1.0
    """
    rate = np.exp(log_rate - np.max(log_rate))
    share = np.zeros_like(rate)
    step = np.diff(time)
    share[:-1] += 0.5 * step * rate[:-1]
    share[1:] += 0.5 * step * rate[1:]
    total = share.sum()
    kept = share > 1e-9 * share.max()
    nodes, weights = _gauss_rule(time[kept], share[kept] / share[kept].sum(), classes)
    cumulative = np.concatenate([[0.0], np.cumsum(0.5 * step * (rate[1:] + rate[:-1]))])
    return Births(
        times=nodes,
        weights=weights,
        median=float(np.interp(0.5 * cumulative[-1], cumulative, time)),
        effective=float(total),
        peak=float(time[np.argmax(rate)]),
    )


def births_at_once(time):
    """Return one class of droplets that are all born at the same time.

    Parameters
    ----------
    time : float
        Time of birth [s].

    Returns
    -------
    births : Births
        One class.

    Examples
    --------
    >>> births_at_once(0.01).weights
    array([1.])
    """
    return Births(np.array([float(time)]), np.ones(1), float(time), 0.0, float(time))


def _gauss_rule(points, shares, count):
    """Return nodes and weights of the Gauss rule of a discrete measure, by Lanczos' recursion."""
    centre = float(np.dot(shares, points))
    scale = float(np.sqrt(np.dot(shares, (points - centre) ** 2)))
    if not scale > 0.0 or points.size <= count:
        return np.array([centre]), np.ones(1)
    x = (points - centre) / scale
    diagonal, off = np.zeros(count), np.zeros(max(count - 1, 0))
    previous, current = np.zeros_like(x), np.sqrt(shares)
    for i in range(count):
        image = x * current
        diagonal[i] = np.dot(image, current)
        if i + 1 == count:
            break
        image -= diagonal[i] * current + (off[i - 1] * previous if i else 0.0)
        off[i] = np.sqrt(np.dot(image, image))
        previous, current = current, image / off[i]
    values, vectors = np.linalg.eigh(np.diag(diagonal) + np.diag(off, 1) + np.diag(off, -1))
    return centre + scale * values, vectors[0] ** 2
