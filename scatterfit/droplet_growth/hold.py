"""The nucleation hold: a pressure smooth enough for a rate that is steep in it."""

import numpy as np

_DEPTH = 0.3
_SIGNIFICANT = 3.5
_FEWEST = 4
_RIMS = (0.07, 0.15, 0.3)
"""Lengths over which the ends of a hold settle, in halves of the hold [-]."""


def settle_hold(time, recorded, smoothed, log_rate, noise):
    """Return the pressure with a plain curve through the samples where most droplets are born.

    The classical rate changes by several percent for one part in a thousand of pressure, so its
    peak picks the lowest of the noisy samples of a hold. Where the rate is within a factor
    exp(-0.3) of its peak the recorded pressure is replaced by the plainest curve that the samples
    do not contradict: level, straight, a parabola, or level or straight with rims that decay.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples [s].
    recorded : ndarray, shape (n,)
        Pressure as recorded; may hold gaps [Pa].
    smoothed : ndarray, shape (n,)
        Pressure smoothed [Pa].
    log_rate : ndarray, shape (n,)
        ln of the classical rate at the smoothed pressure [-].
    noise : float
        Standard deviation of the recorded pressure [Pa].

    Returns
    -------
    pressure : ndarray, shape (n,)
        Smoothed, and settled over the hold [Pa].

    Examples
    --------
    >>> time = np.arange(9.0)
    >>> p = np.array([9.0, 7.0, 5.01, 4.99, 5.0, 5.01, 4.99, 7.0, 9.0])
    >>> settle_hold(time, p, p, -p, 0.01)[2:7]
    array([5., 5., 5., 5., 5.])
    """
    peak = int(np.argmax(log_rate))
    near = log_rate > log_rate[peak] - _DEPTH
    first, last = _run(near, peak)
    part = slice(first, last + 1)
    good = np.isfinite(recorded[part])
    if good.sum() < _FEWEST or not noise > 0.0:
        return smoothed
    x = time[part] - time[part].mean()
    x = x / max(np.abs(x).max(), 1e-300)
    settled = smoothed.copy()
    settled[part] = _plainest(x, recorded[part], good, noise)
    return settled


def _plainest(place, values, good, noise):
    """Return the plainest curve through the good samples: each column must be worth its while.

    A hold is level or drifts evenly; at its rims the gas still settles or already begins to be
    recompressed, faster than a parabola bends.
    """
    level = np.ones_like(place)
    rims = [np.exp(-(1.0 + sign * place) / length) for sign in (1.0, -1.0) for length in _RIMS]
    both = [(first, last) for first in rims[:len(_RIMS)] for last in rims[len(_RIMS):]]
    families = [(), (place,), (place, place**2), *((rim,) for rim in rims), *both,
                *((place, rim) for rim in rims)]
    best, least = None, np.inf
    for columns in families:
        if good.sum() < len(columns) + _FEWEST:
            continue
        matrix = np.stack([level, *columns], axis=1)
        inner = matrix[good]
        curve = matrix @ np.linalg.lstsq(inner, values[good], rcond=None)[0]
        cost = np.sum((values[good] - curve[good]) ** 2) + (
            len(columns) * (_SIGNIFICANT * noise) ** 2)
        if cost < least:
            best, least = curve, cost
    return best


def _run(near, peak):
    """Return the first and last index of the run of true values about one of them."""
    away = np.flatnonzero(~near)
    before, after = away[away < peak], away[away > peak]
    first = int(before[-1]) + 1 if before.size else 0
    last = int(after[0]) - 1 if after.size else near.size - 1
    return first, last
