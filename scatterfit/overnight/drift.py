"""How quantities go through a night: their running level, their drift, and what stands out."""

from dataclasses import dataclass

import numpy as np

BLOCKS = 24
"""Most blocks that a night is cut into for its running level."""

FEWEST = 8
"""Pulses below which nothing is said."""

_MAD_TO_SIGMA = 1.4826  # of a normal distribution: 1 / its third quartile
_MEDIAN_ERROR = 1.2533  # sqrt(pi / 2): error of a median over that of a mean, normal distribution
_FAR = 5.0
_NEIGHBOURS = 25


@dataclass(frozen=True)
class Drift:
    """Running level of a quantity through a night, and a straight line through it."""

    at: np.ndarray
    """Places of the blocks on the axis, shape (m,)."""
    level: np.ndarray
    """Median in each block, shape (m,)."""
    change: float
    """Of the line from the first to the last pulse, in the quantity's unit."""
    sigma: float
    """Standard uncertainty of the change."""

    @property
    def is_certain(self):
        """Whether there is a drift beyond three standard uncertainties."""
        return abs(self.change) > 3 * self.sigma


def drift(places, values):
    """Return how a quantity goes through a night.

    Medians of blocks are not moved by single bad pulses; the line is fitted through them by
    least squares, and its uncertainty is that of their scatter.

    Parameters
    ----------
    places : array_like, shape (n,)
        Where each pulse stands on the axis, in any unit [-].
    values : array_like, shape (n,)
        The quantity; NaN where it is not known [any unit].

    Returns
    -------
    drift : Drift or None
        ``None`` for fewer than 8 pulses.

    Examples
    --------
    >>> found = drift(np.arange(100.0), 1.0 + 0.001 * np.arange(100.0))
    >>> found.change, found.is_certain
    (0.099, True)
    """
    places, values = np.asarray(places, dtype=float), np.asarray(values, dtype=float)
    good = np.isfinite(values) & np.isfinite(places)
    if good.sum() < FEWEST:
        return None
    order = np.argsort(places[good], kind="stable")
    x, y = places[good][order], values[good][order]
    parts = np.array_split(np.arange(x.size), min(BLOCKS, x.size // (FEWEST // 2)))
    at = np.array([x[part].mean() for part in parts])
    level = np.array([np.median(y[part]) for part in parts])
    span = float(x[-1] - x[0])
    centred = at - at.mean()
    power = float(centred @ centred)
    if span <= 0 or power <= 0:
        return Drift(at, level, 0.0, float("inf"))
    slope = float(centred @ (level - level.mean())) / power
    scatter = _spread(y - np.interp(x, at, level)) * _MEDIAN_ERROR / np.sqrt(x.size / at.size)
    # Blocks that wander more than the pulses in them do say so themselves.
    rest = level - level.mean() - slope * centred
    wander = np.sqrt(float(rest @ rest) / max(at.size - 2, 1))
    sigma = max(scatter, float(wander)) / np.sqrt(power)
    return Drift(at, level, slope * span, float(sigma * span))


def _spread(values):
    """Return the standard deviation of the bulk of values, blind to a few far ones."""
    return _MAD_TO_SIGMA * float(np.median(np.abs(values - np.median(values))))


def far_from_neighbours(values, sigmas=None):
    """Return how far each value is from those before and after it, where that is far.

    Parameters
    ----------
    values : array_like, shape (n,)
        In the order of the night; NaN where not known [any unit].
    sigmas : array_like, shape (n,), optional
        Their standard uncertainties [same unit].

    Returns
    -------
    far : dict of int to float
        Index to distance from the running median, in units of the scatter about it, beyond five;
        empty for fewer than 8 values.

    Examples
    --------
    >>> values = np.sin(np.arange(40.0))
    >>> values[20] = 30.0
    >>> list(far_from_neighbours(values))
    [20]
    """
    values = np.asarray(values, dtype=float)
    known = np.flatnonzero(np.isfinite(values))
    if known.size < FEWEST:
        return {}
    y = values[known]
    half = min(_NEIGHBOURS, y.size - 1) // 2
    padded = np.concatenate([y[half:0:-1], y, y[-2 : -half - 2 : -1]])
    windows = np.lib.stride_tricks.sliding_window_view(padded, 2 * half + 1)
    distance = y - np.median(windows, axis=1)
    floor = 0.0 if sigmas is None else np.nan_to_num(np.asarray(sigmas, dtype=float)[known])
    scale = np.maximum(_spread(distance), floor)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(scale > 0, distance / scale, 0.0)
    return {int(known[i]): float(ratio[i]) for i in np.flatnonzero(np.abs(ratio) > _FAR)}
