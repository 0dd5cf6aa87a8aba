"""A first-order low-pass, as every photodiode amplifier is."""

import numpy as np


def low_pass(time, signal, time_constant):
    """Return what a first-order low-pass makes of a signal.

    Exact for signals that are straight between samples; the filter is at rest at the start.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Increasing [s].
    signal : ndarray, shape (..., n)
        Input [any].
    time_constant : float
        Of the filter [s].

    Returns
    -------
    filtered : ndarray, shape (..., n)
        Output [any].

    Examples
    --------
    A ramp comes out late by one time constant:

    >>> time = np.linspace(0.0, 1.0, 101)
    >>> float(time[-1] - low_pass(time, time, 0.02)[-1])
    0.02
    """
    if not time_constant:
        return signal
    from scipy.linalg.lapack import dtbtrs  # noqa: PLC0415  (a slow import that few calls need)

    h = np.diff(time) / time_constant
    keep = np.exp(-h)
    share = -np.expm1(-h) / h
    # y1 = keep y0 + (share - keep) x0 + (1 - share) x1
    driven = np.empty_like(signal)
    driven[..., 0] = signal[..., 0]
    driven[..., 1:] = (share - keep) * signal[..., :-1] + (1.0 - share) * signal[..., 1:]
    bands = np.ones((2, time.size))
    bands[1, :-1] = -keep
    flat = np.asfortranarray(driven.reshape(-1, time.size).T)
    filtered, _ = dtbtrs(bands, flat, uplo="L", overwrite_b=True)
    return filtered.T.reshape(signal.shape)
