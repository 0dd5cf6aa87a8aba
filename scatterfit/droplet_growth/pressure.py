"""A noisy pressure trace made smooth without rounding its corners."""

import numpy as np

_CONFIDENCE = 2.5
_SHY = 3.0
_WIDEST_FRACTION = 8
_BESIDE = 2
_SPIKE = 30.0
_ABSURD = 0.1


def smooth(values):
    """Return a smooth copy of a record whose corners stay where they are.

    Each sample becomes the mean over the widest symmetric window, of widths 1, 3, 5, 9, 17, ...
    samples, whose mean agrees within the noise with those of all narrower windows: wide where
    the record is straight, narrow at corners. Where it bends evenly, the mean is moved to the
    curve.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Evenly spaced record; not-a-number cells are bridged by straight lines [any].

    Returns
    -------
    smoothed : ndarray, shape (n,)
        Smooth record [any].
    noise : float
        Standard deviation of the noise found in differences of neighbours [any].

    References
    ----------
    .. [1] A. Goldenshluger, A. Nemirovski, "On spatially adaptive estimation of nonparametric
       regression", Math. Methods Statist. 6 (1997) 135-170.

    Examples
    --------
    >>> ramp = np.repeat([1.0, 0.0], 200)
    >>> smoothed, noise = smooth(ramp + 1e-3 * np.cos(np.arange(400) ** 2))
    >>> float(abs(smoothed - ramp).max()) < 3e-3
    True
    """
    values = _bridge_gaps(_without_spikes(np.asarray(values, dtype=float)))
    count = values.size
    noise = _noise(values)
    widest = max(count // _WIDEST_FRACTION, 1)
    padded = np.pad(values, widest, mode="reflect", reflect_type="odd")
    total = np.concatenate([[0.0], np.cumsum(padded - values[0])])
    bend = np.zeros(count)
    centre = np.arange(count) + widest
    low = np.full(count, -np.inf)
    high = np.full(count, np.inf)
    best = values.copy()
    growing = np.ones(count, dtype=bool)
    half = 0
    while half <= widest:
        width = 2 * half + 1
        mean = (total[centre + half + 1] - total[centre - half]) / width + values[0]
        margin = _CONFIDENCE * noise / np.sqrt(width)
        low = np.maximum(low, mean - margin)
        high = np.minimum(high, mean + margin)
        growing &= low <= high
        best = np.where(growing, mean, best)
        if half > 1:
            bend = np.where(growing, _bend(total, centre, half, (mean - values[0], noise)), bend)
        half = half + 1 if half < 2 else half * 2
    return best + bend, noise


def _bend(total, centre, half, about):
    """Return by how much means over a window miss a curve, where the noise lets it be seen.

    A mean lies off by the curvature times the window's second moment: that over half the window
    tells how much. The more the difference looks like noise, the less of it is believed.
    """
    mean, noise = about
    inner = half // 2
    ratio = inner * (inner + 1) / (half * (half + 1))
    narrow = (total[centre + inner + 1] - total[centre - inner]) / (2 * inner + 1)
    change = (narrow - mean) / (1.0 - ratio)
    variance = noise**2 * (1.0 / (2 * inner + 1) - 1.0 / (2 * half + 1)) / (1.0 - ratio) ** 2
    return change * np.maximum(0.0, 1.0 - _SHY * variance / np.maximum(change**2, 1e-300))


def _without_spikes(values):
    """Return the record with samples that stand alone and far away taken out (not a number)."""
    good = np.flatnonzero(np.isfinite(values))
    if good.size < 2 * _BESIDE + 1:
        return values
    kept = values[good]
    # Mirrored, the first and the last sample stand alone as well: a file cut short ends in half a
    # number.
    padded = np.pad(kept, _BESIDE, mode="reflect")
    middle = np.median(
        np.lib.stride_tricks.sliding_window_view(padded, 2 * _BESIDE + 1), axis=1
    )
    apart = np.abs(kept - middle)
    # A steep expansion moves by percents a sample; what is off by a tenth alone is no pressure.
    far = apart > np.maximum(_SPIKE * np.median(apart), _ABSURD * np.abs(middle))
    cleaned = values.copy()
    cleaned[good[far]] = np.nan
    return cleaned


def _noise(values):
    """Return the noise of a record from its third differences, robustly."""
    if values.size < 8:
        return 0.0
    third = np.diff(values, 3)
    return float(np.median(np.abs(third)) / 0.6745 / np.sqrt(20.0))


def _bridge_gaps(values):
    """Return the record with its gaps filled by straight lines."""
    good = np.isfinite(values)
    if good.all():
        return values
    index = np.arange(values.size)
    return np.interp(index, index[good], values[good])


def undo_lag(time, values, time_constant):
    """Return what a gauge with first-order lag would have shown without it.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time [s].
    values : ndarray, shape (n,)
        Smoothed reading [any].
    time_constant : float
        Lag [s].

    Returns
    -------
    corrected : ndarray, shape (n,)
        values + time_constant d(values)/dt [any].

    Examples
    --------
    >>> undo_lag(np.array([0.0, 1.0, 2.0]), np.array([0.0, 1.0, 2.0]), 0.5)
    array([0.5, 1.5, 2.5])
    """
    if not time_constant:
        return values
    return values + time_constant * np.gradient(values, time)
