"""What is not droplets: slow drift, mains hum, glitches."""

import numpy as np

MAINS = (50.0, 60.0)
_WORTH = 30.0
_GLITCH = 6.0


def candidate_columns(time):
    """Return what may be added to a channel's baseline, in groups.

    Parameters
    ----------
    time : ndarray, shape (m,)
        Times [s].

    Returns
    -------
    groups : dict of str to ndarray
        Name to columns, each shape (k, m) [-].
    """
    place = 2.0 * (time - time[0]) / (time[-1] - time[0]) - 1.0
    groups = {"drift": place[None, :]}
    for mains in MAINS:
        for harmonic in (1, 2, 3):
            phase = 2.0 * np.pi * mains * harmonic * time
            groups[f"hum {mains * harmonic:g} Hz"] = np.stack([np.sin(phase), np.cos(phase)])
    return groups


def find_disturbances(time, residual, weight, columns, allowed=None):
    """Return the names of disturbances that a channel's residuals show.

    Each group of columns is tried on what the others leave; the best is taken while it lowers
    chi-square by more than chance and model error would.

    Parameters
    ----------
    time : ndarray, shape (m,)
        Times [s].
    residual : ndarray, shape (m,)
        Unweighted residuals of the channel [V].
    weight : ndarray, shape (m,)
        One over the standard deviations [1/V].
    columns : ndarray, shape (k, m)
        What is fitted already and may be traded [any].
    allowed : sequence of str, optional
        Groups to try; all by default.

    Returns
    -------
    names : list of str
        Groups worth adding.
    """
    groups = candidate_columns(time)
    if allowed is not None:
        groups = {name: groups[name] for name in allowed}
    target = residual * weight
    base = np.linalg.qr((columns * weight).T)[0]
    scale = max(float(target @ target) / max(target.size, 1), 1.0)
    chosen = []
    while groups:
        left = target - base @ (base.T @ target)
        gains = {}
        for name, group in groups.items():
            own = (group * weight).T
            own = own - base @ (base.T @ own)
            shape = np.linalg.qr(own)[0]
            gains[name] = float(np.sum((shape.T @ left) ** 2)), shape
        name = max(gains, key=lambda key: gains[key][0])
        gain, shape = gains[name]
        if gain < _WORTH * scale:
            break
        chosen.append(name)
        base = np.hstack([base, shape])
        del groups[name]
    return chosen


def stack_columns(time, names):
    """Return the columns of the named disturbances, shape (k, m) [-].

    Parameters
    ----------
    time : ndarray, shape (m,)
        Times [s].
    names : sequence of str
        Names from :func:`candidate_columns`.

    Returns
    -------
    columns : ndarray, shape (k, m)
        Stacked columns [-].
    """
    groups = candidate_columns(time)
    return np.vstack([np.empty((0, time.size)), *(groups[name] for name in names)])


def find_glitches(residual, used):
    """Return samples that lie far outside the noise.

    Parameters
    ----------
    residual : ndarray, shape (n,)
        In units of the noise [-].
    used : ndarray, shape (n,)
        Samples fitted so far [bool].

    Returns
    -------
    glitches : ndarray, shape (n,)
        Samples to leave out [bool].

    Examples
    --------
    >>> find_glitches(np.array([0.1, -9.0, 0.3, 1.0]), np.ones(4, dtype=bool))
    array([False,  True, False, False])
    """
    centre = np.median(residual[used]) if used.any() else 0.0
    spread = max(np.median(np.abs(residual[used] - centre)) / 0.6745, 1.0) if used.any() else 1.0
    return used & (np.abs(residual - centre) > _GLITCH * spread)
