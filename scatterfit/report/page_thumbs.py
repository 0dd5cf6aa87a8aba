"""A trace and its fit as few bytes: what a page draws its small pictures from."""

import base64

import numpy as np

LEVELS = 254
"""Steps from the lowest to the highest value of a channel; one more stands for a gap."""

_GAP = 255
_EVEN = 0.01


def thumbnail(channels, points):
    """Return the channels of a pulse as bytes in base64.

    Parameters
    ----------
    channels : sequence of mapping
        As the ledger keeps them: ``column``, ``label``, ``time_ms``, ``signal_V``, ``fit_V``.
    points : int
        Most points of a channel.

    Returns
    -------
    drawn : list of dict
        For each channel with any number: ``l`` its name, ``lo`` and ``hi`` the range that the
        levels span [V], ``s`` and ``f`` the levels of signal and fit, and ``x`` those of the
        times where they are not evenly spaced.
    span : list of float
        First and last time [ms].
    """
    drawn, span = [], [0.0, 0.0]
    for channel in channels:
        time, signal, fit = (_every(channel[name], points)
                             for name in ("time_ms", "signal_V", "fit_V"))
        seen = np.concatenate([signal[np.isfinite(signal)], fit[np.isfinite(fit)]])
        if not seen.size:
            continue
        low, high = float(seen.min()), float(seen.max())
        span = [float(time[0]), float(time[-1])]
        part = {"l": f"{channel['label']} ({channel['column']})", "lo": low, "hi": high,
                "s": _levels(signal, low, high), "f": _levels(fit, low, high)}
        if not _is_even(time):
            part["x"] = _levels(time, *span)
        drawn.append(part)
    return drawn, span


def _every(values, points):
    values = np.array(values, dtype=float)  # None becomes NaN
    return values[:: max(1, -(-values.size // points))]


def _levels(values, low, high):
    scale = LEVELS / (high - low) if high > low else 0.0
    with np.errstate(invalid="ignore"):
        levels = np.where(np.isfinite(values), np.rint((values - low) * scale), _GAP)
    return base64.b64encode(levels.astype(np.uint8).tobytes()).decode("ascii")


def _is_even(time):
    if time.size < 3 or time[-1] <= time[0]:
        return True
    even = np.linspace(time[0], time[-1], time.size)
    return float(np.abs(time - even).max()) <= _EVEN * (time[-1] - time[0])
