"""Laser mode hops: the light jumps by a few percent and back, like a telegraph."""

from dataclasses import dataclass

import numpy as np

_FEWEST = 8
_SMALLEST = 0.012
_SIGMAS = 5.0
_BALANCE = 0.25
_SPREAD = 0.3
_FILTER = 5


@dataclass(frozen=True)
class Hops:
    """A laser that hops between two modes."""

    height: float
    """ln of the brighter over the dimmer light [-]."""
    upper: np.ndarray
    """Samples in the brighter state, shape (n,) [bool]."""
    edge: np.ndarray
    """Samples at a jump, in neither state, shape (n,) [bool]."""

    def corrected(self, signal):
        """Return the signal as if the laser had stayed dimmer, shape (n,) [V]."""
        return np.where(self.upper, signal * np.exp(-self.height), signal)


def find_hops(signal, used):
    """Return the two states between which the light jumps, or ``None``.

    Jumps are steps of the logarithm far above the noise. They count as mode hops when there are
    many, up and down, most of about the same height; the state is then followed from jump to jump.

    Parameters
    ----------
    signal : ndarray, shape (n,)
        Light, dark level removed [V].
    used : ndarray, shape (n,)
        Samples that may be used [bool].

    Returns
    -------
    hops : Hops or None
        States of every sample.

    Examples
    --------
    >>> rng = np.random.default_rng(3)
    >>> state = (np.arange(4000) // 50) % 4 == 1
    >>> light = (1.0 + 0.06 * state) * (1.0 + 0.004 * rng.standard_normal(4000))
    >>> hops = find_hops(light, np.ones(4000, dtype=bool))
    >>> round(hops.height, 2), float(np.mean(hops.upper == state)) > 0.99
    (0.06, True)
    """
    good = used & (signal > 0.0)
    if good.sum() < 100:
        return None
    index = np.flatnonzero(good)
    light = np.log(signal[index])
    rise = _rises(light)
    noise = float(np.median(np.abs(rise - np.median(rise)))) / 0.6745
    places = _peaks(rise, max(_SIGMAS * noise, _SMALLEST))
    if places.size < _FEWEST:
        return None
    height = _typical(np.abs(rise[places]))
    like = places[np.abs(np.abs(rise[places]) - height) < _SPREAD * height]
    up = int((rise[like] > 0).sum())
    lopsided = min(up, like.size - up) < _BALANCE * like.size
    if like.size < max(_FEWEST, 0.5 * places.size) or lopsided:
        return None
    return _spread_out(signal.size, index, height, _follow(rise, like), like)


def refine_hops(hops, signal, fit, used):
    """Return hops decided anew from what a fit leaves.

    Parameters
    ----------
    hops : Hops
        As found from the jumps.
    signal : ndarray, shape (n,)
        Light, dark level removed [V].
    fit : ndarray, shape (n,)
        Fitted light in the dimmer state [V].
    used : ndarray, shape (n,)
        Samples that may be used [bool].

    Returns
    -------
    hops : Hops
        A sample is in the brighter state where it and its neighbours lie nearer to it.
    """
    good = used & (signal > 0.0) & (fit > 0.0)
    index = np.flatnonzero(good)
    if index.size < 100:
        return hops
    left = np.log(signal[index] / fit[index])
    middle = _median_of_few(left)
    upper = middle > 0.5 * hops.height
    own = left > 0.5 * hops.height
    edge = own != upper
    jump = np.flatnonzero(np.diff(upper.astype(int)))
    edge[jump] = edge[jump + 1] = True
    clear = ~edge
    if (upper & clear).any() and (~upper & clear).any():
        height = float(np.median(left[upper & clear]) - np.median(left[~upper & clear]))
    else:
        height = hops.height
    if not 0.5 * hops.height < height < 1.5 * hops.height:
        height = hops.height
    full = Hops(height, np.zeros(signal.size, bool), np.zeros(signal.size, bool))
    full.upper[index], full.edge[index] = upper, edge
    return full


def _rises(light):
    """Return the mean of the two next samples less that of the two last, shape (n,)."""
    padded = np.concatenate([light[:1], light[:1], light, light[-1:], light[-1:]])
    return 0.5 * (padded[3:-1] + padded[4:] - padded[:-4] - padded[1:-3])


def _peaks(rise, least):
    """Return where the size of a rise is a maximum among its neighbours and large enough."""
    size = np.abs(rise)
    padded = np.pad(size, 2)
    around = np.maximum.reduce([padded[k:k + size.size] for k in (0, 1, 3, 4)])
    found = np.flatnonzero((size > least) & (size >= around))
    return found[np.diff(found, prepend=-9) > 2]


def _typical(sizes):
    """Return the height about which most sizes gather: the half-sample mode."""
    values = np.sort(sizes)
    while values.size > 3:
        half = (values.size + 1) // 2
        width = values[half - 1:] - values[: values.size - half + 1]
        start = int(np.argmin(width))
        values = values[start:start + half]
    return float(np.median(values))


def _follow(rise, like):
    """Return the upper state of each sample: after an upward jump until the next downward one."""
    signs = np.sign(rise[like])
    last = np.searchsorted(like, np.arange(rise.size), side="right") - 1
    return np.where(last >= 0, signs[np.maximum(last, 0)] > 0, signs[0] < 0)


def _spread_out(count, index, height, upper, like):
    """Return the hops on the whole record; samples left out take their neighbour's state."""
    everywhere = upper[np.clip(np.searchsorted(index, np.arange(count)), 0, index.size - 1)]
    edge = np.zeros(count, dtype=bool)
    for shift in (-1, 0, 1):
        edge[index[np.clip(like + shift, 0, index.size - 1)]] = True
    return Hops(height, everywhere, edge)


def _median_of_few(values):
    """Return the running median over five samples."""
    half = _FILTER // 2
    padded = np.pad(values, half, mode="edge")
    return np.median(np.lib.stride_tricks.sliding_window_view(padded, _FILTER), axis=-1)
