"""When droplets are born: along the nucleation rate, or when seeds pass their threshold."""

from dataclasses import dataclass

import numpy as np

_NEGLIGIBLE = 1e-6
_POINTS = 600
FINER = ((24, 0.012), (12, 0.004))
"""Numbers of finer classes, and the spread of ln r from which each is needed."""


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
    spread: float
    """Standard deviation of the time of birth [s]."""
    finer: tuple["FinerClasses", ...] = ()
    """More classes, for light that varies faster than growth; the finest first."""
    lengthening: float = 0.0
    """ln of the effective duration over that of the classes: a hold goes on past its last sample,
    nobody knows how far [-]."""

    @property
    def last(self):
        """Return when births end [s]."""
        return float(self.finer[0].times[-1] if self.finer else self.times[-1])


@dataclass(frozen=True)
class FinerClasses:
    """The same births in more classes."""

    times: np.ndarray
    """Shape (f,) [s]."""
    weights: np.ndarray
    """Share of the droplets in each, shape (f,) [-]."""
    carry: np.ndarray
    """From values smooth in the time of birth at the solved classes to these, shape (f, c)."""
    spread: float
    """Standard deviation of ln r from which they are needed [-]."""


def births_from_rate(time, log_rate, classes=6, finer=FINER):
    """Return the classes that stand for births along a nucleation rate.

    The classes are the nodes and weights of the Gauss rule whose weight function is the rate,
    so that what is smooth in the time of birth is summed over exactly to degree 2 c - 1. Growth is
    that smooth; the light of young droplets is not, and has a finer rule of its own.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Increasing [s].
    log_rate : ndarray, shape (n,)
        ln of the nucleation rate at those times [-]; straight in between for when droplets are
        born, so that none is born where the gas path knows no supersaturation. For the effective
        duration the rate itself is straight, so that its integral holds on average where few
        samples fall into the hold.
    classes : int
        Number of classes.
    finer : sequence of tuple
        Numbers of finer classes, and the spread of ln r from which each is needed [-].

    Returns
    -------
    births : Births
        Classes in order of birth; one, at the last time, where the rate is zero throughout.

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
    top = np.max(log_rate)
    if not np.isfinite(top):
        return births_at_once(time[-1])
    kept = np.flatnonzero(log_rate > top + np.log(_NEGLIGIBLE))
    first, last = max(kept[0] - 1, 0), min(kept[-1] + 1, time.size - 1)
    dense = np.linspace(time[first], time[last], _POINTS)
    low = np.maximum(log_rate, top - 60.0)
    rate = np.exp(np.interp(dense, time, low) - top)
    share = rate.copy()
    share[[0, -1]] *= 0.5
    whole, step = float(share.sum()), dense[1] - dense[0]
    share = share / whole
    part = slice(first, last + 1)
    total = float(np.trapezoid(np.exp(low[part] - top), time[part]))
    nodes, weights = _gauss_rule(dense, share, classes)
    more = []
    for count, spread in finer:
        points, shares = _gauss_rule(dense, share, count)
        more.append(FinerClasses(points, shares, polynomial_matrix(nodes, points), spread))
    cumulative = np.cumsum(share) - 0.5 * share
    centre = float(share @ dense)
    return Births(
        times=nodes, weights=weights, median=float(np.interp(0.5, cumulative, dense)),
        effective=total, peak=float(dense[np.argmax(rate)]),
        spread=float(np.sqrt(share @ (dense - centre) ** 2)),
        finer=tuple(more), lengthening=float(np.log(total / (step * whole))),
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
    at = np.array([float(time)])
    return Births(at, np.ones(1), float(time), 0.0, float(time), 0.0)


def polynomial_matrix(nodes, points):
    """Return the matrix that carries a polynomial's values from a few nodes to points.

    Parameters
    ----------
    nodes : ndarray, shape (n,)
        Where the polynomial of degree n - 1 is known, all different [any unit].
    points : ndarray, shape (m,)
        Where it is wanted [the same unit].

    Returns
    -------
    matrix : ndarray, shape (m, n)
        Lagrange's basis [-].

    Examples
    --------
    >>> polynomial_matrix(np.array([0.0, 1.0, 2.0]), np.array([3.0])) @ np.array([0.0, 1.0, 4.0])
    array([9.])
    """
    matrix = np.ones((points.size, nodes.size))
    for j in range(nodes.size):
        for k in range(nodes.size):
            if k != j:
                matrix[:, j] *= (points - nodes[k]) / (nodes[j] - nodes[k])
    return matrix


def _gauss_rule(points, shares, count):
    """Return nodes and weights of the Gauss rule of a discrete measure, by Lanczos' recursion."""
    centre = float(np.dot(shares, points))
    scale = float(np.sqrt(np.dot(shares, (points - centre) ** 2)))
    if not scale > 0.0 or points.size <= count:
        return np.array([centre]), np.ones(1)
    x = (points - centre) / scale
    diagonal, off = np.zeros(count), np.zeros(max(count - 1, 0))
    basis = np.empty((count, x.size))
    current = np.sqrt(shares)
    for i in range(count):
        basis[i] = current
        image = x * current
        diagonal[i] = np.dot(image, current)
        if i + 1 == count:
            break
        for _ in range(2):
            image -= basis[: i + 1].T @ (basis[: i + 1] @ image)
        off[i] = np.sqrt(np.dot(image, image))
        current = image / off[i]
    values, vectors = np.linalg.eigh(np.diag(diagonal) + np.diag(off, 1) + np.diag(off, -1))
    return centre + scale * values, vectors[0] ** 2
