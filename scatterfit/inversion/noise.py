"""The noise of a channel, from the trace itself."""

from dataclasses import dataclass

import numpy as np

_LEVELS = 24
_SMOOTHING = 21
_CLIP = 4.5
_THIRD_DIFFERENCE = 20.0


@dataclass(frozen=True)
class NoiseModel:
    """Variance of a sample as a function of the light above the baseline."""

    floor: float
    """Variance without light [V^2]."""
    shot: float
    """Growth of the variance with the signal [V]."""
    relative: float
    """Squared relative noise [-]."""
    baseline: float
    """Signal without light [V]."""
    step: float
    """Resolution of the digitizer, zero if none is seen [V]."""

    def variance(self, signal):
        """Return the variance of samples with this mean signal, shape (...) [V^2]."""
        light = np.maximum(np.asarray(signal) - self.baseline, 0.0)
        return self.floor + light * (self.shot + light * self.relative)


def resolution_step(values):
    """Return the digitizer's step, the smallest difference between values, or zero.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Finite samples [V].

    Returns
    -------
    step : float
        Step [V]; zero where values are too dense to show one.

    Examples
    --------
    >>> resolution_step(np.round(np.sin(np.arange(5000) / 700.0), 2))
    0.01
    """
    unique = np.unique(values)
    if unique.size < 2 or unique.size > 0.5 * values.size:
        return 0.0
    gaps = np.diff(unique)
    step = float(np.median(gaps[gaps < 1.5 * np.percentile(gaps, 20)]))
    return step if step > 0 else 0.0


def running_mean(values, width):
    """Return the mean over a centred window, narrower at the ends.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Samples [any].
    width : int
        Odd number of samples.

    Returns
    -------
    mean : ndarray, shape (n,)
        Running mean [any].

    Examples
    --------
    >>> running_mean(np.array([0.0, 3.0, 0.0, 3.0]), 3)
    array([1.5, 1. , 2. , 1.5])
    """
    half = width // 2
    total = np.concatenate([[0.0], np.cumsum(values)])
    index = np.arange(values.size)
    low = np.maximum(index - half, 0)
    high = np.minimum(index + half + 1, values.size)
    return (total[high] - total[low]) / (high - low)


def estimate_noise(values, baseline):
    """Return a noise model from third differences of the samples.

    A signal that is smooth over four samples drops out of third differences, whose variance is
    20 times that of white noise; hum and drift drop out too.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Finite samples in order of time [V].
    baseline : float
        Signal without light [V].

    Returns
    -------
    noise : NoiseModel
        Floor, shot and relative part, each >= 0.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> light = 2.0 - 2.0 * np.cos(np.arange(6000) / 300.0)
    >>> noise = estimate_noise(light * (1 + 0.01 * rng.standard_normal(6000))
    ...                        + 0.005 * rng.standard_normal(6000), 0.0)
    >>> round(noise.relative ** 0.5, 3), round(noise.floor ** 0.5, 3)
    (0.010, 0.005)
    """
    step = resolution_step(values)
    quantum = step**2 / 12.0
    if values.size < 60:
        spread = float(np.var(np.diff(values)) / 2.0) if values.size > 2 else 0.0
        return NoiseModel(max(spread, quantum, 1e-24), 0.0, 0.0, baseline, step)
    third = np.diff(values, 3)
    level = np.maximum(running_mean(values, _SMOOTHING)[1:-2] - baseline, 0.0)
    groups = np.array_split(np.argsort(level, kind="stable"), min(_LEVELS, values.size // 30))
    levels = np.array([level[g].mean() for g in groups])
    variances = np.array([_clipped_variance(third[g]) for g in groups]) / _THIRD_DIFFERENCE
    counts = np.array([g.size for g in groups])
    floor, shot, relative = _fit_variance(levels, np.maximum(variances, quantum), counts)
    return NoiseModel(max(floor, quantum, 1e-24), shot, relative, baseline, step)


def _clipped_variance(differences):
    """Return the variance of differences without the glitches among them."""
    size = np.abs(differences)
    # The middle of the sorted values: a tenth of what a median of so few costs otherwise.
    ranked = np.sort(size)
    scale = 0.5 * (ranked[(size.size - 1) // 2] + ranked[size.size // 2]) / 0.6745
    if not scale > 0.0:
        return float(np.mean(differences**2))
    kept = differences[size < _CLIP * scale]
    return float(kept @ kept) / kept.size


def _fit_variance(levels, variances, counts):
    """Return non-negative floor, shot and relative terms of variance against level."""
    from scipy.optimize import nnls  # noqa: PLC0415  (a slow import that only fits need)

    columns = np.stack([np.ones_like(levels), levels, levels**2], axis=1)
    scale = np.maximum(np.abs(columns).max(axis=0), 1e-300)
    model = variances
    for _ in range(3):
        weight = np.sqrt(counts) / np.maximum(model, 1e-30)
        found, _ = nnls(columns / scale * weight[:, None], variances * weight)
        model = np.maximum(columns / scale @ found, 1e-3 * variances.max())
    return tuple(float(v) for v in found / scale)
