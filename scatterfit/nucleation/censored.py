"""Pulses without a cloud in the fit of a line: all that is known of J is an upper limit."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.nucleation.line import extra_variance

LIMIT_PROBABILITY = 0.05
"""Chance of seeing no cloud where the rate is at its upper limit (a limit of 95 percent)."""

_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(15)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()
_SMALL_STEP = 1e-4
_ROUNDS = 60


@dataclass(frozen=True)
class Limits:
    """Points of which y is only known to lie below a limit."""

    x: np.ndarray
    """Shape (m,) [-]."""
    limit: np.ndarray
    """Natural logarithm of the upper limit, shape (m,) [-]."""
    variance_x: np.ndarray
    """Shape (m,) [-]."""


def log_chance_of_nothing(expected, limit, sigma):
    r"""Return the logarithm of the chance to see no cloud.

    The count that a limit of 95 percent belongs to is 3.0, so the chance of a count of zero is
    :math:`0.05^{J / J_{lim}}`, averaged over the scatter of ln J.

    Parameters
    ----------
    expected : array_like, shape (m,)
        ln J on the line [-].
    limit : array_like, shape (m,)
        ln of the upper limit [-].
    sigma : array_like, shape (m,)
        Standard deviation of ln J around the line [-].

    Returns
    -------
    log_chance : ndarray, shape (m,)
        At most zero [-].

    Examples
    --------
    At the limit itself, without scatter, it is one in twenty:

    >>> float(np.exp(log_chance_of_nothing([16.0], [16.0], [0.0])[0]))
    0.05
    """
    above = np.asarray(expected, dtype=float) - np.asarray(limit, dtype=float)
    spread = above[:, None] + np.asarray(sigma, dtype=float)[:, None] * _NODES
    exponents = np.log(LIMIT_PROBABILITY) * np.exp(np.minimum(spread, 50.0))
    top = exponents.max(axis=1)
    return top + np.log(np.exp(exponents - top[:, None]) @ _WEIGHTS)


def with_limits(points, line, limits):
    """Fit a line again with the points of which only an upper limit is known.

    The line of largest likelihood: measured points contribute their squared distance, points
    without a cloud the chance of seeing none. Limits far above the line change nothing.

    Parameters
    ----------
    points : Points
        What was measured.
    line : Line
        The line through them.
    limits : Limits
        Points below a limit.

    Returns
    -------
    line : Line
        The line through both.

    Examples
    --------
    >>> from scatterfit.nucleation.line import Points, fit_line
    >>> x, none = np.array([0.0, 1.0, 2.0, 3.0]), np.zeros(4)
    >>> points = Points(x, np.array([0.1, 0.9, 2.1, 2.9]), none, none, none)
    >>> line = fit_line(points)
    >>> far = Limits(np.array([0.0]), np.array([9.0]), np.zeros(1))
    >>> near = Limits(np.array([0.0]), np.array([-1.0]), np.zeros(1))
    >>> [round(with_limits(points, line, limits).slope, 2) for limits in (far, near)]
    [0.96, 1.00]
    """
    points = points.reduced(line.own_x, line.own)
    limits = replace(limits, variance_x=line.own * line.own_x * limits.variance_x)
    both, scatter2 = np.array([line.level, line.slope]), line.scatter**2
    for _ in range(_ROUNDS):
        old = both
        both = _minimum(both, points, limits, line.centre, scatter2)
        scatter2 = extra_variance(points, both[1])
        if np.all(np.abs(both - old) <= 1e-9 * (1.0 + np.abs(both))):
            break
    curvature = _curvature(both, points, limits, line.centre, scatter2)
    covariance = np.linalg.inv(_convex(curvature))
    return replace(line, level=float(both[0]), slope=float(both[1]), covariance=covariance,
                   scatter=float(np.sqrt(scatter2)))


def _misfit(both, points, limits, centre, scatter2):
    """Return minus the logarithm of the likelihood, without its constant."""
    level, slope = both
    distance = points.y - level - slope * (points.x - centre)
    variance = points.variance(slope) + scatter2 + 1e-26
    sigma = np.sqrt(slope**2 * limits.variance_x + scatter2)
    expected = level + slope * (limits.x - centre)
    chance = log_chance_of_nothing(expected, limits.limit, sigma)
    return 0.5 * float(np.sum(distance**2 / variance)) - float(chance.sum())


def _steps(both):
    return _SMALL_STEP * np.maximum(np.array([1.0, abs(both[1])]), 1e-2)


def _gradient(both, *rest):
    steps = np.diag(_steps(both))
    return np.array([(_misfit(both + step, *rest) - _misfit(both - step, *rest)) / (2 * step.sum())
                     for step in steps])


def _curvature(both, *rest):
    steps = np.diag(_steps(both))
    rows = [(_gradient(both + step, *rest) - _gradient(both - step, *rest)) / (2 * step.sum())
            for step in steps]
    return 0.5 * (np.array(rows) + np.array(rows).T)


def _minimum(both, *rest):
    """Return the minimum of the misfit by damped Newton steps."""
    value = _misfit(both, *rest)
    for _ in range(_ROUNDS):
        gradient = _gradient(both, *rest)
        step = -np.linalg.solve(_convex(_curvature(both, *rest)), gradient)
        trial = _misfit(both + step, *rest)
        while not trial <= value and np.abs(step).max() > 1e-12:
            step = step / 2
            trial = _misfit(both + step, *rest)
        if not trial <= value:
            break
        both, gain, value = both + step, value - trial, trial
        if gain <= 1e-10 * (1.0 + abs(value)):
            break
    return both


def _convex(curvature):
    """Return the curvature with every negative direction turned up."""
    values, vectors = np.linalg.eigh(curvature)
    values = np.maximum(np.abs(values), max(1e-9 * np.abs(values).max(), 1e-12))
    return (vectors * values) @ vectors.T
