"""Which samples of a record are looked at, and which of them may be fitted."""

import numpy as np

FEWEST = 20
"""Samples that a column must have at the least."""


def span(apparatus, time):
    """Return the samples up to the end of the window: later ones play no part.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,)
        Samples [s].

    Returns
    -------
    kept : slice
        Of the samples.
    """
    if apparatus.analysis.window is None:
        return slice(0, time.size)
    end = int(np.searchsorted(time, apparatus.analysis.window[1], side="right"))
    return slice(0, max(end, min(FEWEST, time.size)))


def window_of(apparatus, time, exclude=()):
    """Return which samples may be fitted.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,)
        Samples [s].
    exclude : sequence of tuple of float
        Ranges of time to leave out [s].

    Returns
    -------
    window : ndarray, shape (n,)
        Samples that may be fitted [bool].
    """
    window = np.ones(time.size, dtype=bool)
    if apparatus.analysis.window is not None:
        low, high = apparatus.analysis.window
        window &= (time >= low) & (time <= high)
    for low, high in exclude:
        window &= (time < low) | (time > high)
    return window
