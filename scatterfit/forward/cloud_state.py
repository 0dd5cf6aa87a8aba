"""The cloud at the samples: radii of its classes, and how many droplets there are."""

from dataclasses import dataclass

import numpy as np

from scatterfit.forward.growth_model import LinearGrowth

_LARGEST_MOVE = 10.0


@dataclass(frozen=True)
class Segment:
    """A stretch of samples with classes fine enough for the light it shows."""

    radius: np.ndarray
    """Shape (c, n) [m]; zero before birth."""
    weights: np.ndarray
    """Share of droplets a class, shape (c,) [-]."""
    log_radius_by: dict
    """Derivatives of ln r by each parameter, shape (c, n)."""


@dataclass(frozen=True)
class CloudState:
    """The cloud at the sample times."""

    radius: np.ndarray
    """Of the solved classes, shape (c, n) [m]; zero before birth."""
    number_density: np.ndarray
    """Shape (n,) [1/m^3]."""
    log_radius_by: dict
    """Derivatives of ln r of the solved classes by each parameter, shape (c, n)."""
    log_density_by: dict
    """Derivatives of ln of the number density, shape (n,)."""
    linear: LinearGrowth
    """The solved cloud behind it."""
    segments: tuple[Segment, ...] = ()
    """The same, in order of time, with more classes where births still spread the radii."""
    table: object = None
    """The cross sections it was seen with (SpreadTable)."""

    @property
    def growth(self):
        """Return the solved cloud (CloudGrowth)."""
        return self.linear.growth


def cloud_state(linear, cloud, time, names=(), births=None):
    """Return radius and number density at the sample times, with their derivatives.

    Parameters
    ----------
    linear : LinearGrowth
        A solution at or near the cloud.
    cloud : Cloud
        Where to evaluate.
    time : ndarray, shape (n,)
        Samples, increasing [s].
    names : sequence of str
        Parameters to differentiate by.
    births : Births, optional
        With finer classes, used while births spread the radii; the solved classes serve where it
        is missing.

    Returns
    -------
    state : CloudState
        Per class and sample.
    """
    growth = linear.growth
    clock = time - cloud.delay
    place = _places(growth.time, clock)
    index, t, _ = place
    density = _straight(growth.number_density[0] * np.exp(-linear.cloud.depletion), index, t)
    density_by = {
        name: _straight(row, index, t) for name, row in linear.log_density_by.items()
    }
    density = density * np.exp(_thinner(linear, cloud, density_by))
    whole = _classes(linear, cloud, clock, place, names)
    segments, start = [], 0
    for finer in births.finer if births is not None else ():
        end = max(_unresolved(growth, finer.spread, clock), start)
        if end > start:
            part = slice(start, end)
            here = tuple(values[part] for values in place)
            segments.append(_classes(linear, cloud, clock[part], here, names, (births, finer)))
        start = end
    if start < clock.size:
        segments.append(Segment(
            whole.radius[:, start:], whole.weights,
            {name: rows[:, start:] for name, rows in whole.log_radius_by.items()},
        ))
    return CloudState(
        whole.radius, density, whole.log_radius_by, density_by, linear, tuple(segments)
    )


def _classes(linear, cloud, clock, place, names, births=None):
    """Return a stretch of samples with the solved classes or with finer ones."""
    growth = linear.growth
    index, t, width = place
    times, weights = growth.birth_times[0], growth.weights
    square = hermite(growth.square[0], growth.square_rate[0], index, t, width)
    rows = [*linear.log_radius_by.values()]
    if "delay" in names:
        rows.append(growth.square_rate[0])
    rows = _straight(np.array(rows), index, t) if rows else np.empty((0, *square.shape))
    if births is not None:
        plain, finer = births
        longer = (times[-1] - times[0]) / (plain.times[-1] - plain.times[0])
        times = times[0] + longer * (finer.times - plain.times[0])
        weights, square, rows = finer.weights, finer.carry @ square, finer.carry @ rows
    length = growth.length[0]
    born = clock > times[:, None]
    # Before its birth a class's (r + l)^2 is carried on backwards: there it has no size.
    safe = np.sqrt(np.maximum(square, (growth.start_radius + length) ** 2)) - length
    by = dict(zip(linear.log_radius_by, rows, strict=False))
    move = _log_move(linear, cloud, by)
    if move is not None:
        # Far from where growth was solved first order is no guide, but must stay a number.
        safe = safe * np.exp(np.clip(move, -_LARGEST_MOVE, _LARGEST_MOVE))
    if "delay" in names:
        by["delay"] = np.where(born, rows[-1] / (-2.0 * (safe + length) * safe), 0.0)
    return Segment(np.where(born, safe, 0.0), weights, by)


def _unresolved(growth, resolved, clock):
    """Return how many of the first samples have radii spread by birth by more than a limit.

    Droplets born early grew in the supersaturation of the hold: their radii differ by more than
    their ages say, so the spread is that of the solved classes.
    """
    log_radius = np.log(growth.radius[0])
    mean = growth.weights @ log_radius
    spread = np.sqrt(np.maximum(growth.weights @ (log_radius - mean) ** 2, 0.0))
    wide = (spread > resolved) | (growth.time < growth.birth_times[0].max())
    last = growth.time[np.flatnonzero(wide)[-1]] if wide.any() else -np.inf
    return int(np.searchsorted(clock, last, side="right"))


def _thinner(linear, cloud, density_by):
    """Return the first-order change of ln n from where growth was solved."""
    change = 0.0
    for name, rows in density_by.items():
        step = getattr(cloud, name) - getattr(linear.cloud, name)
        if name == "number":
            taken = step + cloud.depletion - linear.cloud.depletion
            change = change + step + taken * (rows - 1.0)
        elif step:
            change = change + step * rows
    return change


def _log_move(linear, cloud, by):
    """Return the first-order change of ln r from where growth was solved, or ``None``."""
    move = None
    for name, rows in by.items():
        step = getattr(cloud, name) - getattr(linear.cloud, name)
        if name == "number":
            step += cloud.depletion - linear.cloud.depletion
        if step:
            move = step * rows if move is None else move + step * rows
    return move


def _straight(values, index, t):
    """Return values between nodes by straight lines, shape (..., n)."""
    low = values.take(index, axis=-1)
    rise = values.take(index + 1, axis=-1)
    rise -= low
    rise *= t
    rise += low
    return rise


def _places(nodes, clock):
    """Return the cell of each sample, its place in the cell and the cell's width."""
    index = np.clip(np.searchsorted(nodes, clock, side="right") - 1, 0, nodes.size - 2)
    width = nodes[index + 1] - nodes[index]
    t = np.clip((clock - nodes[index]) / width, 0.0, 1.0)
    return index, t, width


def hermite(values, rates, index, t, width):
    """Return cubic interpolants of values with known time derivatives.

    Parameters
    ----------
    values : ndarray, shape (..., m)
        At the nodes [any].
    rates : ndarray, shape (..., m)
        Their time derivatives [any/s].
    index : ndarray, shape (n,)
        Cell of each point [-].
    t : ndarray, shape (n,)
        Place in the cell, 0 to 1 [-].
    width : ndarray, shape (n,)
        Of the cell [s].

    Returns
    -------
    interpolated : ndarray, shape (..., n)
        Values at the points [any].
    """
    after = index + 1
    low, high = values.take(index, axis=-1), values.take(after, axis=-1)
    first, last = rates.take(index, axis=-1) * width, rates.take(after, axis=-1) * width
    rise = high - low
    c = first + last - 2.0 * rise
    b = rise - first - c
    return low + t * (first + t * (b + t * c))
