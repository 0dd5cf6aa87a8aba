"""The nucleation hold: a pressure smooth enough for a rate that is steep in it."""

import numpy as np

STATED_DURATION = 0.03
"""Relative standard uncertainty of a stated duration, beside its own sigma (common practice, no
source) [-]."""

_DEPTH = 0.3
_SIGNIFICANT = 3.5
_FEWEST = 4
_BRIDGE = 5
_LOOKS = 3
_RIMS = (0.07, 0.15, 0.3)
"""Lengths over which the ends of a hold settle, in halves of the hold [-]."""
_PEAK = 1.2
_BARRIER = 0.05
_LEAST = 0.003


def settle_hold(time, recorded, smoothed, log_rate, noise):
    """Return the pressure with a plain curve through the samples where most droplets are born.

    The classical rate changes by several percent for one part in a thousand of pressure, so its
    peak picks the lowest of the noisy samples of a hold. Where the rate is within a factor
    exp(-0.3) of its level the recorded pressure is replaced by the plainest curve that the samples
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
    top = log_rate[peak]
    for _ in range(_LOOKS):
        # A few noisy samples do not end a hold, nor does one low excursion say how deep it is.
        near = np.convolve(log_rate > top - _DEPTH, np.ones(_BRIDGE), mode="same") > 0.5 * _BRIDGE
        near[peak] = True
        first, last = _run(near, peak)
        top = float(np.median(log_rate[first:last + 1]))
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


def duration_sigma(time, log_rate, rate_noise, samples):
    r"""Return how well the effective duration of a hold is known from a gauge.

    Two things make it wrong beside the sampling: noise of the pressure, by which the peak of the
    rate, and with it the duration, is off by more than the mean of the hold's samples is; and
    the steepness of the theory, which is off by some 5 percent in the exponent and matters to a
    hold that is not flat.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples [s].
    log_rate : ndarray, shape (n,)
        ln of the classical rate [-].
    rate_noise : float
        What one standard deviation of the pressure's noise does to ln of the rate [-].
    samples : float
        Samples within the effective duration [-].

    Returns
    -------
    sigma : float
        Relative standard uncertainty [-].

    Notes
    -----
    The factor of 1.2 on the noise of the mean is measured: ``docs/studies.md``, effective duration.

    Examples
    --------
    >>> time = np.linspace(0.0, 4e-3, 401)
    >>> flat = np.where(abs(time - 2e-3) < 1e-3, 0.0, -50.0)
    >>> duration_sigma(time, flat, 0.0, 200.0), duration_sigma(time, flat, 0.06, 200.0)
    (0.003, 0.006)
    """
    if not np.isfinite(np.max(log_rate)):
        return 1.0
    rate = np.maximum(log_rate - np.max(log_rate), -60.0)
    whole, steeper = (np.trapezoid(np.exp(factor * rate), time) for factor in (1.0, 1 + _BARRIER))
    shape = 1.0 - float(steeper / whole) if whole > 0.0 else 0.0
    noisy = _PEAK * rate_noise / np.sqrt(max(samples, 1.0))
    return float(np.linalg.norm([_LEAST, shape, min(noisy, 1.0)]))


def _run(near, peak):
    """Return the first and last index of the run of true values about one of them."""
    away = np.flatnonzero(~near)
    before, after = away[away < peak], away[away > peak]
    first = int(before[-1]) + 1 if before.size else 0
    last = int(after[0]) - 1 if after.size else near.size - 1
    return first, last
