"""What is not droplets: slow drift, mains hum, glitches."""

import numpy as np

MAINS = (50.0, 60.0)
_HARMONICS = (1, 2, 3)
_WORTH = 40.0
_WORTH_DRIFT = 16.0
_MEDIAN_SQUARE = 0.455
# Below so many periods of the mains a hum cannot be told from lobes (common practice, no source);
# half as many do where some of the hum is seen before the droplets.
_PERIODS = 2.5
_PERIODS_SEEN = 1.25
_BEFORE = 0.25
_GLITCH = 6.0
_NEIGHBOURS = 4


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
    groups = {"drift": place[None, :], "curved drift": place[None, :] ** 2}
    for mains in MAINS:
        for harmonic in _HARMONICS:
            phase = 2.0 * np.pi * mains * harmonic * time
            groups[f"hum {mains * harmonic:g} Hz"] = np.stack([np.sin(phase), np.cos(phase)])
    return groups


def find_disturbances(problem, evaluation, known=None):
    """Return the disturbances that the residuals show beyond what droplets could explain.

    Each group of columns is judged by how much it would lower chi-square if the cloud were
    fitted anew with it (the score test): what the fit can already do is projected out of it.
    The best group is taken as long as it is worth more than chance and model error.

    Parameters
    ----------
    problem : Problem
        What was fitted, with the disturbances known so far.
    evaluation : Evaluation
        At the best cloud, with its Jacobian.
    known : sequence of sequence of str, optional
        Names already in the problem, by channel.

    Returns
    -------
    names : tuple of tuple of str
        By channel: the known ones and those found.
    """
    chosen = [list(names) for names in known] if known else [[] for _ in problem.model.channels]
    rows = evaluation.residual.size
    base = np.linalg.qr(evaluation.jacobian)[0]
    left = evaluation.residual - base @ (base.T @ evaluation.residual)
    # Spikes must not hide a hum: the typical residual sets the scale, not the largest.
    scale = max(float(np.median(left[:rows] ** 2)) / _MEDIAN_SQUARE, 1.0)
    while groups := _stacked_groups(problem, evaluation, chosen):
        gains = {}
        for key, columns in groups.items():
            own = columns - base @ (base.T @ columns)
            size = np.sqrt(np.sum(own**2, axis=0))
            if np.any(size < 1e-3 * np.sqrt(np.sum(columns**2, axis=0))):
                continue
            shape = np.linalg.qr(own)[0]
            gains[key] = float(np.sum((shape.T @ left) ** 2)), shape
        if not gains:
            break
        key = max(gains, key=lambda k: gains[k][0])
        gain, shape = gains[key]
        if gain < _worth(key[1]) * scale:
            break
        chosen[key[0]].append(key[1])
        base = np.hstack([base, shape])
        left = left - shape @ (shape.T @ left)
    return tuple(tuple(names) for names in chosen)


def _stacked_groups(problem, evaluation, chosen):
    """Return every group not chosen yet as weighted columns over all channels' residuals."""
    time = problem.bins.time
    candidates = candidate_columns(time)
    groups, start = {}, 0
    first = problem.model.setup.births.times[0]
    for i, channel in enumerate(problem.model.channels):
        weight, basis = problem.bins.weights[i], evaluation.bases[i]
        full = evaluation.fits[i] if channel.kind == "transmission" else np.ones_like(weight)
        for name, group in candidates.items():
            if name in chosen[i] or _needs_fundamental(name, chosen[i]):
                continue
            if name.startswith("hum") and not _told(
                    name, time[weight > 0.0], evaluation.cloud.delay + first):
                continue
            own = (group * full * weight).T
            columns = np.zeros((evaluation.residual.size, own.shape[1]))
            columns[start:start + weight.size] = own - basis @ (basis.T @ own)
            groups[i, name] = columns
        start += weight.size
    return groups


def _told(name, time, birth):
    """Return whether the used times are enough to tell a hum from lobes."""
    if not time.size:
        return False
    frequency = float(name.split()[1])
    mains = next(m for m in MAINS if frequency / m in _HARMONICS)
    before = mains * (birth - time[0])
    return mains * np.ptp(time) >= (_PERIODS_SEEN if before >= _BEFORE else _PERIODS)


def _worth(name):
    """Return by how much a group must lower chi-square: slow drift is common, hum rarer."""
    return _WORTH_DRIFT if "drift" in name else _WORTH


def _needs_fundamental(name, chosen):
    """Return whether a group is a harmonic of a hum that has not been found."""
    if not name.startswith("hum"):
        return False
    frequency = float(name.split()[1])
    mains = next(m for m in MAINS if frequency / m in _HARMONICS)
    return frequency != mains and f"hum {mains:g} Hz" not in chosen


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
    """Return samples that lie far outside the noise while their neighbours do not.

    Parameters
    ----------
    residual : ndarray, shape (n,)
        In units of the noise [-].
    used : ndarray, shape (n,)
        Samples fitted so far [bool].

    Returns
    -------
    glitches : ndarray, shape (n,)
        Samples to leave out [bool]. Runs of more than three outliers are not glitches but
        something that the model misses.

    Examples
    --------
    >>> find_glitches(np.array([0.1, -9.0, 0.3, 1.0]), np.ones(4, dtype=bool))
    array([False,  True, False, False])
    """
    if not used.any():
        return np.zeros(residual.size, dtype=bool)
    centre = np.median(residual[used])
    spread = max(np.median(np.abs(residual[used] - centre)) / 0.6745, 1.0)
    place = np.where(used, (residual - centre) / spread, 0.0)
    far = used & (np.abs(place) > _GLITCH)
    padded = np.pad(place, _NEIGHBOURS, mode="edge")
    around = np.lib.stride_tricks.sliding_window_view(padded, 2 * _NEIGHBOURS + 1)
    middle = np.zeros(residual.size)
    index = np.flatnonzero(far)
    middle[index] = np.median(around[index], axis=1)
    return far & (np.abs(place - middle) > _GLITCH)
