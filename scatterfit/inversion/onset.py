"""When the light starts to rise, for benches without a pressure trace."""

import numpy as np

from scatterfit.inversion.noise import running_mean

_SIGMAS = 4.0
_WIDTH = 11
_SHARE = 0.03


def find_onset(bins, kinds):
    """Return when a channel first leaves its baseline for good.

    Parameters
    ----------
    bins : Bins
        Binned channels.
    kinds : sequence of str
        ``"scatter"`` or ``"transmission"`` of each.

    Returns
    -------
    onset : float
        Earliest over the channels; the first sample if none leaves [s].
    """
    starts = []
    for values, weights, kind in zip(bins.values, bins.weights, kinds, strict=True):
        some = weights > 0
        time, signal = bins.time[some], values[some]
        sign = -1.0 if kind == "transmission" else 1.0
        first = max(time.size // 50, 5)
        baseline = np.median(signal[:first])
        mean = running_mean(sign * (signal - baseline), _WIDTH)
        noise = running_mean(1.0 / weights[some], _WIDTH) / np.sqrt(_WIDTH)
        # Hum and drift of a few percent of the light are no onset.
        least = _SHARE * np.percentile(mean, 98.0)
        above = mean > np.maximum(_SIGMAS * noise * np.sqrt(1.0 + _WIDTH / first), least)
        still = np.flatnonzero(~above[: int(0.95 * above.size)])
        last = still[-1] if still.size else 0
        # After the onset the light may touch the baseline again in a deep trough: half is enough.
        runs = np.flatnonzero(above)
        for start in runs:
            if above[start:start + 4 * _WIDTH].mean() > 0.95:
                starts.append(time[start])
                break
        else:
            starts.append(time[min(last + 1, time.size - 1)])
    return float(min(starts)) if starts else float(bins.time[0])
