"""Peaks, troughs and shoulders found in the trace without the model, as a check on the fit."""

from dataclasses import dataclass

import numpy as np

from scatterfit.inversion.noise import running_mean

# Of pure noise one record in three has a turn at 6, one in 300 at 7.5.
_CERTAIN = 7.5
_WIDTH = 9
_TOLERANCE = 0.04
_LEAST_SHARE = 0.004
_STILL = 0.5


@dataclass(frozen=True)
class Turn:
    """A peak or trough of a trace."""

    time: float
    """[s]."""
    kind: str
    """``"maximum"`` or ``"minimum"``."""
    prominence: float
    """Height over what surrounds it, in units of the smoothed noise [-]."""


def find_turns(time, values, weights, start):
    """Return the peaks and troughs that stand out of the noise.

    Parameters
    ----------
    time : ndarray, shape (m,)
        Bins [s].
    values : ndarray, shape (m,)
        Means [V].
    weights : ndarray, shape (m,)
        One over their standard deviations; zero where there is none [1/V].
    start : float
        Nothing before it counts [s].

    Returns
    -------
    turns : list of Turn
        In order of time, maxima and minima in turn.

    Examples
    --------
    >>> time = np.linspace(0.0, 1.0, 400)
    >>> turns = find_turns(time, -np.cos(20 * time), np.full(400, 1e3), 0.0)
    >>> [t.kind for t in turns][:3], round(turns[0].time, 3)
    (['maximum', 'minimum', 'maximum'], 0.157)
    """
    some = (weights > 0) & (time > start)
    time, values, weights = time[some], values[some], weights[some]
    if time.size < 3 * _WIDTH:
        return []
    smooth = running_mean(values, _WIDTH)
    noise = 1.0 / (np.median(weights) * np.sqrt(_WIDTH))
    local = 1.0 / (running_mean(weights, _WIDTH) * np.sqrt(_WIDTH))
    least = np.maximum(_CERTAIN * local, _LEAST_SHARE * np.ptp(smooth))
    turns = []
    for index, kind in _alternating(smooth, least):
        if _WIDTH <= index < time.size - _WIDTH:
            turns.append(Turn(_vertex(time, values, weights, index), kind,
                              float(least[index] / noise)))
    return turns


def _alternating(smooth, least):
    """Return indices of alternating maxima and minima with at least some height between them."""
    found, rising = [], True
    best, mark = smooth[0], 0
    for i, value in enumerate(smooth):
        if (value > best) if rising else (value < best):
            best, mark = value, i
        elif abs(value - best) > least[i]:
            if mark > 0:
                found.append((mark, "maximum" if rising else "minimum"))
            rising = not rising
            best, mark = value, i
    return found


def _vertex(time, values, weights, index):
    """Return the time of a turn from a parabola through the bins about it [s]."""
    low, high = max(index - 2 * _WIDTH // 2, 0), min(index + 2 * _WIDTH // 2 + 1, time.size)
    x = time[low:high] - time[index]
    scale = max(np.abs(x).max(), 1e-12)
    a, b, _ = np.polyfit(x / scale, values[low:high], 2, w=weights[low:high])
    if a == 0.0 or abs(b / (2.0 * a)) > 1.0:
        return float(time[index])
    return float(time[index] - scale * b / (2.0 * a))


def find_shoulders(time, values, weights, start):
    """Return where a trace that keeps rising or falling stands nearly still.

    Parameters
    ----------
    time : ndarray, shape (m,)
        Bins [s].
    values : ndarray, shape (m,)
        Means [V].
    weights : ndarray, shape (m,)
        One over their standard deviations; zero where there is none [1/V].
    start : float
        Nothing before it counts [s].

    Returns
    -------
    shoulders : list of Turn
        In order of time, of kind ``"shoulder"``.

    Examples
    --------
    >>> time = np.linspace(0.0, 1.0, 400)
    >>> found = find_shoulders(time, time + 0.9 * np.sin(12 * time) / 12, np.full(400, 1e5), 0.0)
    >>> [round(s.time, 1) for s in found]
    [0.3, 0.8]
    """
    some = (weights > 0) & (time > start)
    time, values, weights = time[some], values[some], weights[some]
    half = _WIDTH
    if time.size < 8 * half:
        return []
    slope, sigma = _slopes(time, values, weights, half)
    sign = np.sign(np.median(slope[np.abs(slope) > np.percentile(np.abs(slope), 60)]))
    slope = sign * slope
    found = []
    for index, kind in _alternating(slope, _CERTAIN * sigma):
        if kind != "minimum" or not half <= index < time.size - half:
            continue
        before = slope[max(index - 12 * half, 0):index].max()
        after = slope[index:index + 12 * half].max()
        low = slope[index]
        if -0.3 * min(before, after) < low < _STILL * min(before, after):
            height = float(min(before, after) / sigma[index])
            found.append(Turn(float(time[index]), "shoulder", height))
    return found


def _slopes(time, values, weights, half):
    """Return the slope of a straight line through the bins about each, and its deviation."""
    width = 2 * half + 1
    view = np.lib.stride_tricks.sliding_window_view
    t = view(np.pad(time, half, mode="reflect", reflect_type="odd"), width)
    v = view(np.pad(values, half, mode="reflect", reflect_type="odd"), width)
    t = t - t.mean(axis=1, keepdims=True)
    power = np.sum(t**2, axis=1)
    return np.sum(t * v, axis=1) / power, 1.0 / (weights * np.sqrt(power))


def match_turns(turns, radius_at, log_radius, curve):
    """Return the kernel's extremum that each turn of a trace belongs to.

    Parameters
    ----------
    turns : sequence of Turn
        From :func:`find_turns`.
    radius_at : callable
        Fitted radius [m] at a time [s].
    log_radius : ndarray, shape (n,)
        Of the kernel [-].
    curve : ndarray, shape (n,)
        Cross section averaged over the cloud [m^2].

    Returns
    -------
    matches : list of tuple
        Turn, and the radius of the kernel's extremum of the same kind within 4 percent of the
        fitted radius, or ``None`` [m].
    """
    slope = np.diff(curve)
    peaks = np.flatnonzero((slope[:-1] > 0) & (slope[1:] <= 0)) + 1
    troughs = np.flatnonzero((slope[:-1] < 0) & (slope[1:] >= 0)) + 1
    steep = np.diff(np.log(np.maximum(curve, 1e-300)))
    still = np.flatnonzero((steep[1:-1] < steep[:-2]) & (steep[1:-1] <= steep[2:])) + 1
    places = {"maximum": log_radius[peaks], "minimum": log_radius[troughs],
              "shoulder": log_radius[still]}
    matches = []
    for turn in turns:
        radius = radius_at(turn.time)
        there = places[turn.kind]
        if not radius > 0.0 or not there.size:
            matches.append((turn, None))
            continue
        nearest = there[np.argmin(np.abs(there - np.log(radius)))]
        close = abs(nearest - np.log(radius)) < _TOLERANCE
        matches.append((turn, float(np.exp(nearest)) if close else None))
    return matches
