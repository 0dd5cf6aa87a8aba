"""When the light starts to rise, for benches without a pressure trace."""

import numpy as np

from scatterfit.inversion.noise import running_mean

_SIGMAS = 4.0
_WIDTH = 11
_SHARE = 0.03
_RISEN = 0.1


def find_onsets(bins, kinds):
    """Return when a channel first leaves its baseline for good.

    A slow hum may look like faint droplets. Where the first rise falls back before it has come to
    a tenth of the light, the first that does not is an onset too.

    Parameters
    ----------
    bins : Bins
        Binned channels.
    kinds : sequence of str
        ``"scatter"`` or ``"transmission"`` of each.

    Returns
    -------
    onsets : tuple of float
        One or two, in order; each the earliest over the channels, the first sample if none
        leaves [s].
    """
    early, late = [], []
    for values, weights, kind in zip(bins.values, bins.weights, kinds, strict=True):
        some = weights > 0
        time, signal = bins.time[some], values[some]
        sign = -1.0 if kind == "transmission" else 1.0
        first = max(time.size // 50, 5)
        baseline = np.median(signal[:first])
        mean = running_mean(sign * (signal - baseline), _WIDTH)
        noise = running_mean(1.0 / weights[some], _WIDTH) / np.sqrt(_WIDTH)
        # Hum and drift of a few percent of the light are no onset.
        top = np.percentile(mean, 98.0)
        above = mean > np.maximum(_SIGMAS * noise * np.sqrt(1.0 + _WIDTH / first), _SHARE * top)
        still = np.flatnonzero(~above[: int(0.95 * above.size)])
        last = still[-1] if still.size else 0
        # After the onset the light may touch the baseline again in a deep trough: half is enough.
        starts = [i for i in np.flatnonzero(above) if above[i:i + 4 * _WIDTH].mean() > 0.95]
        start = starts[0] if starts else min(last + 1, time.size - 1)
        early.append(time[start])
        late.append(time[_risen(starts, above, mean > _RISEN * top) if starts else start])
    if not early:
        return (float(bins.time[0]),)
    return tuple(sorted({float(min(early)), float(min(late))}))


def _risen(starts, above, bright):
    """Return the first start from which the light becomes bright before it falls back."""
    for start in starts:
        fallen = np.flatnonzero(~above[start:])
        end = start + int(fallen[0]) if fallen.size else above.size
        if bright[start:end].any():
            return start
    return starts[0]
