"""Samples that can be fitted: what is left out, how noisy the rest is, and its averages."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.inversion.hops import Hops, find_hops, refine_hops
from scatterfit.inversion.noise import NoiseModel, estimate_noise, running_mean

_SMOOTHING = 15
_BESIDE = 3
_FARTHER = 4.0
_SPIKE = 8.0


@dataclass(frozen=True)
class ChannelData:
    """One optical channel's samples."""

    column: str
    kind: str
    """``"scatter"`` or ``"transmission"``."""
    signal: np.ndarray
    """As recorded, less nothing; not-a-number cells are zero and not used, shape (n,) [V]."""
    used: np.ndarray
    """Which samples are fitted, shape (n,) [bool]."""
    sigma: np.ndarray
    """Standard deviation of each sample, shape (n,) [V]."""
    noise: NoiseModel
    clipped: int
    """Samples left out as clipped."""
    missing: int
    """Samples left out as not finite."""
    spikes: int = 0
    """Samples left out because they stand alone far above or below their neighbours."""
    hops: Hops | None = None
    """Where the laser hops; the signal is then as if it had stayed dimmer."""
    raw: np.ndarray | None = None
    """The signal with its hops, shape (n,) [V]."""


@dataclass(frozen=True)
class Bins:
    """Channels averaged over the same intervals of time."""

    time: np.ndarray
    """Shape (m,) [s]."""
    values: np.ndarray
    """Weighted means, shape (channels, m) [V]."""
    weights: np.ndarray
    """One over the standard deviation of the mean; zero where there is none, (channels, m)."""
    counts: np.ndarray
    """Samples in each mean, shape (channels, m)."""


def channel_data(column, kind, signal, window, baseline, clipped=None):
    """Return a channel's samples with their noise.

    Parameters
    ----------
    column : str
        Its name.
    kind : str
        ``"scatter"`` or ``"transmission"``.
    signal : ndarray, shape (n,)
        Dark level removed; may hold not-a-number cells [V].
    window : ndarray, shape (n,)
        Which samples may be fitted [bool].
    baseline : ndarray, shape (n,)
        Which samples show no droplets [bool].
    clipped : ndarray, shape (n,), optional
        Samples at full scale, to be left out [bool].

    Returns
    -------
    data : ChannelData
        Samples, masks and noise.
    """
    finite = np.isfinite(signal)
    signal = np.where(finite, signal, 0.0)
    good = finite & window
    clipped = np.zeros(signal.size, dtype=bool) if clipped is None else clipped & good
    used = good & ~clipped
    spikes = _spikes(signal, used)
    used = used & ~spikes
    hops = find_hops(signal, used) if kind == "transmission" else None
    data = ChannelData(
        column, kind, signal, used, np.ones(signal.size), NoiseModel(1.0, 0.0, 0.0, 0.0, 0.0),
        int(clipped.sum()), int((~finite & window).sum()), int(spikes.sum()), hops, signal,
    )
    return _weighed(data, good, baseline & good)


def _spikes(signal, used):
    """Return the samples that stand alone: far from the mean of their quiet neighbours [bool]."""
    found = np.zeros(signal.size, dtype=bool)
    index = np.flatnonzero(used)
    if index.size < 60:
        return found
    values = signal[index]
    bend = np.zeros(values.size)
    bend[1:-1] = values[1:-1] - 0.5 * (values[:-2] + values[2:])
    quiet = np.median(np.abs(bend)) / 0.6745
    local = np.sqrt(running_mean(np.minimum(np.abs(bend), 6.0 * quiet) ** 2, 101))
    size = np.abs(bend)
    far = size > _SPIKE * np.maximum(local, 1e-300)
    # A lone sample bends its two neighbours half as much the other way, and nobody else.
    beside = np.maximum(np.roll(size, 2), np.roll(size, -2))
    next_to = np.maximum(np.roll(size, 1), np.roll(size, -1))
    lone = far & (next_to < 0.75 * size) & (beside < 0.35 * size)
    lone[:3] = lone[-3:] = False
    far[:3] = far[-3:] = True
    suspects = np.flatnonzero(far & ~lone)
    lone[suspects] = _apart(values, suspects) > _SPIKE * np.maximum(local[suspects], 1e-300)
    found[index[lone]] = True
    return found


def _apart(values, suspects):
    """Return how far samples lie from their six neighbours, zero where these differ as much.

    Spikes close to each other, or to an end, hide behind one another from differences; the middle
    four of six neighbours do not care for two that are far off.
    """
    first = np.clip(suspects - _BESIDE, 0, values.size - 2 * _BESIDE - 1)
    around = first[:, None] + np.arange(2 * _BESIDE + 1)
    others = values[around[around != suspects[:, None]].reshape(-1, 2 * _BESIDE)]
    others.sort(axis=1)
    away = np.abs(values[suspects] - 0.5 * (others[:, _BESIDE - 1] + others[:, _BESIDE]))
    return np.where(away > _FARTHER * (others[:, -2] - others[:, 1]), away, 0.0)


def _weighed(data, good, before):
    """Return a channel with its hops taken out and its noise estimated anew."""
    signal, used = data.raw, good & data.used
    if data.hops is not None:
        signal = data.hops.corrected(signal)
        used = used & ~data.hops.edge
    rest = float(np.median(signal[before])) if before.any() else 0.0
    noise = estimate_noise(signal[used], rest if data.kind == "scatter" else 0.0)
    smooth = running_mean(np.where(good, signal, rest), _SMOOTHING)
    return replace(data, signal=signal, used=used, noise=noise,
                   sigma=np.sqrt(noise.variance(smooth)))


def rehopped(data, fit):
    """Return a channel whose laser's states are decided anew from what a fit leaves.

    Parameters
    ----------
    data : ChannelData
        With hops.
    fit : ndarray, shape (n,)
        Fitted light [V].

    Returns
    -------
    data : ChannelData
        The channel with better hops.
    """
    good = data.used | data.hops.edge
    hops = refine_hops(data.hops, data.raw, fit, good)
    return _weighed(replace(data, hops=hops, used=good), good, np.zeros(good.size, dtype=bool))


def without(data, bad):
    """Return a channel with some more samples left out.

    Parameters
    ----------
    data : ChannelData
        A channel.
    bad : ndarray, shape (n,)
        Samples to leave out [bool].

    Returns
    -------
    data : ChannelData
        The channel without them.
    """
    return replace(data, used=data.used & ~bad)


def bin_edges(time, start, most):
    """Return where to cut the record so that no bin is longer than it need be.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples, increasing [s].
    start : float
        When droplets are born: before it bins may be long [s].
    most : int
        Number of bins at the most, roughly.

    Returns
    -------
    edges : ndarray, shape (m,)
        Index of the first sample of each bin, increasing, first is 0 [-].

    Examples
    --------
    >>> bin_edges(np.arange(10.0), -1.0, 5)
    array([0, 1, 3, 5, 7])
    """
    n = time.size
    if n <= most:
        return np.arange(n)
    span = time[-1] - time[0]
    age = np.maximum(time - start, 0.0)
    # Lobes come evenly in r, so ever slower in time: bins follow, within a factor.
    density = np.where(time < start, 0.25, 1.0 + 0.7 * np.sqrt(span / (age + 0.02 * span)))
    cumulative = np.cumsum(density)
    bins = np.floor(cumulative / cumulative[-1] * most * 0.999999).astype(int)
    return np.flatnonzero(np.diff(bins, prepend=-1) > 0)


def bin_channels(time, channels, edges):
    """Return all channels averaged over the same bins.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Channels of the trace.
    edges : ndarray, shape (m,)
        First sample of each bin [-].

    Returns
    -------
    bins : Bins
        Means and their weights.
    """
    total = np.add.reduceat(np.ones(time.size), edges)
    middle = np.add.reduceat(time, edges) / total
    # A last bin without weight asks the model for the cloud at the very last sample.
    closing = 1 if middle[-1] < time[-1] else 0
    values, weights, counts = [], [], []
    for data in channels:
        inverse = np.where(data.used, data.sigma**-2.0, 0.0)
        strength = np.add.reduceat(inverse, edges)
        top = np.add.reduceat(inverse * data.signal, edges)
        moment = np.add.reduceat(inverse * time, edges)
        some = strength > 0.0
        mean = np.where(some, top / np.where(some, strength, 1.0), 0.0)
        # A bin with samples left out has its centre elsewhere: shift its mean back along the slope,
        # which empty bins must not take part in.
        centre = np.where(some, moment / np.where(some, strength, 1.0), middle)
        slope = np.zeros_like(mean)
        if some.sum() > 2:
            slope[some] = np.gradient(mean[some], centre[some])
        full = np.add.reduceat(data.used.astype(float), edges)
        values.append(mean + slope * (middle - centre))
        weights.append(np.sqrt(strength))
        counts.append(full)
    end = ((0, 0), (0, closing))
    return Bins(
        np.append(middle, time[-1:]) if closing else middle,
        np.pad(values, end, mode="edge"), np.pad(weights, end), np.pad(counts, end),
    )
