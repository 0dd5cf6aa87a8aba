"""A pulse's channels with fewer points: what the ledger keeps of a trace and its fit.

Every k-th sample is kept as it was measured, not an average, so that the noise looks as it is.
"""

import math

import numpy as np

from scatterfit.measured_pulse.record import ChannelView

POINTS = 256
"""Most points kept of a channel."""


def thinned(channels, points=POINTS):
    """Return the channels of a pulse with at most so many points, ready for JSON.

    Parameters
    ----------
    channels : sequence of ChannelView
        ``MeasuredPulse.channels``.
    points : int
        Most points of a channel.

    Returns
    -------
    kept : list of dict
        For each channel ``column``, ``label``, ``every`` (one sample in so many is kept) and the
        lists ``time_ms``, ``signal_V``, ``fit_V``, ``residual`` (in units of the noise) and
        ``used`` (1 where the sample was fitted); ``None`` stands where there is no number.
    """
    return [_thin_channel(channel, points) for channel in channels]


def _thin_channel(channel, points):
    every = max(1, math.ceil(len(channel.time) / points))
    keep = slice(every // 2 if every > 1 else 0, None, every)
    return {
        "column": channel.column,
        "label": channel.label,
        "every": every,
        "time_ms": _numbers(1e3 * np.asarray(channel.time)[keep], 8),
        "signal_V": _numbers(channel.signal[keep], 6),
        "fit_V": _numbers(_array_or_nan(channel.fit, channel)[keep], 6),
        "residual": _numbers(_array_or_nan(channel.residual, channel)[keep], 3),
        "used": [int(flag) for flag in np.asarray(channel.used)[keep]],
    }


def _array_or_nan(values, channel):
    return np.full(len(channel.time), np.nan) if values is None else np.asarray(values)


def _numbers(values, digits):
    """Return floats of so many significant digits, ``None`` where one is not finite."""
    return [float(f"{value:.{digits}g}") if math.isfinite(value) else None
            for value in np.asarray(values, dtype=float).tolist()]


def channels_from(kept):
    """Return channels for figures from what the ledger has kept.

    Parameters
    ----------
    kept : sequence of mapping
        As `thinned` gives it.

    Returns
    -------
    channels : tuple of ChannelView
        Times in s; NaN where there is no number.

    Examples
    --------
    >>> view = ChannelView("s_V", "s", np.arange(4.0), np.ones(4), np.ones(4), np.zeros(4),
    ...                    np.ones(4, bool))
    >>> channels_from(thinned([view], points=2))[0].time
    array([1., 3.])
    """
    return tuple(
        ChannelView(
            column=channel["column"],
            label=channel["label"],
            time=_array(channel["time_ms"]) / 1e3,
            signal=_array(channel["signal_V"]),
            fit=_array(channel["fit_V"]),
            residual=_array(channel["residual"]),
            used=np.array(channel["used"], dtype=bool),
        )
        for channel in kept
    )


def _array(values):
    return np.array(values, dtype=float)  # None becomes NaN
