"""The nucleation hold: a pressure smooth enough for a rate that is steep in it."""

import numpy as np

_DEPTH = 0.3
_SIGNIFICANT = 2.5
_FEWEST = 4


def settle_hold(time, recorded, smoothed, log_rate, noise):
    """Return the pressure with a plain curve through the samples where most droplets are born.

    The classical rate changes by several percent for one part in a thousand of pressure, so its
    peak picks the lowest of the noisy samples of a hold. Where the rate is within a factor
    exp(-0.3) of its peak the recorded pressure is replaced by the lowest polynomial, at most
    quadratic, that the samples do not contradict.

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
    y = recorded[part]
    settled = smoothed.copy()
    best = np.full(x.size, y[good].mean())
    for degree in (1, 2):
        if good.sum() < degree + _FEWEST:
            break
        fit = np.polyfit(x[good], y[good], degree)
        curve = np.polyval(fit, x)
        if _gain(y[good], np.polyval(fit, x[good]), best[good], noise):
            best = curve
    settled[part] = best
    return settled


def _gain(values, fit, simpler, noise):
    """Return whether a fit is better than a simpler one by more than chance."""
    drop = np.sum((values - simpler) ** 2) - np.sum((values - fit) ** 2)
    return drop > (_SIGNIFICANT * noise) ** 2


def _run(near, peak):
    """Return the first and last index of the run of true values about one of them."""
    away = np.flatnonzero(~near)
    before, after = away[away < peak], away[away > peak]
    first = int(before[-1]) + 1 if before.size else 0
    last = int(after[0]) - 1 if after.size else near.size - 1
    return first, last
