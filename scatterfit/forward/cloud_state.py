"""The cloud at the samples: radii of its classes, and how many droplets there are."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from scatterfit.droplet_growth.births import Births
from scatterfit.forward.growth_model import Cloud, LinearGrowth, setting
from scatterfit.forward.light import SpreadTable

LARGEST_MOVE = 10.0
"""Of ln r by first order, either way [-]."""


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
    """The cloud at the sample times; what nobody asks for is not worked out."""

    linear: LinearGrowth
    """The solved cloud behind it."""
    cloud: Cloud
    """Where it is evaluated."""
    time: np.ndarray
    """Samples, shape (n,) [s]."""
    names: tuple[str, ...] = ()
    """Parameters to differentiate by."""
    births: Births | None = None
    """With finer classes."""
    table: SpreadTable | None = None
    """The cross sections it was seen with."""

    @property
    def growth(self):
        """Return the solved cloud (CloudGrowth)."""
        return self.linear.growth

    @property
    def clock(self):
        """Return the samples on the clock of the pressure, shape (n,) [s]."""
        return self.time - self.cloud.delay

    @property
    def radius(self):
        """Return radii of the solved classes, zero before birth, shape (c, n) [m]."""
        return self._whole.radius

    @property
    def log_radius_by(self):
        """Return derivatives of ln r of the solved classes by each parameter, shape (c, n)."""
        return self._whole.log_radius_by

    @cached_property
    def log_density_by(self):
        """Return derivatives of ln of the number density, shape (n,)."""
        index, t, _ = self._place
        return {name: _straight(row, index, t) for name, row in self.linear.log_density_by.items()}

    @cached_property
    def number_density(self):
        """Return droplets per volume, shape (n,) [1/m^3]."""
        index, t, _ = self._place
        lone = self.growth.number_density[0] * np.exp(-self.linear.cloud.depletion)
        thinner = _thinner(self.linear, self.cloud, self.log_density_by)
        return _straight(lone, index, t) * np.exp(thinner)

    @cached_property
    def stretches(self):
        """Return samples and classes to see them with, in order of time.

        Each is the first sample, the sample after the last, and finer classes or ``None`` where
        the solved ones do.
        """
        found, start, clock = [], 0, self.clock
        for finer in self.births.finer if self.births is not None else ():
            last = self.linear.resolved_from(finer.spread)
            end = max(int(np.searchsorted(clock, last, side="right")), start)
            if end > start:
                found.append((start, end, finer))
            start = end
        if start < clock.size:
            found.append((start, clock.size, None))
        return tuple(found)

    @cached_property
    def segments(self):
        """Return the stretches with more classes where births still spread the radii."""
        whole, segments = self._whole, []
        for start, end, finer in self.stretches:
            part = slice(start, end)
            if finer is None:
                segments.append(Segment(
                    whole.radius[:, part], whole.weights,
                    {name: rows[:, part] for name, rows in whole.log_radius_by.items()},
                ))
            else:
                here = tuple(values[part] for values in self._place)
                segments.append(_classes(self.linear, self.cloud, self.clock[part], here,
                                         self.names, (self.births, finer)))
        return tuple(segments)

    @cached_property
    def _place(self):
        return _places(self.growth.time, self.clock)

    @cached_property
    def _whole(self):
        return _classes(self.linear, self.cloud, self.clock, self._place, self.names)


def finer_times(linear, births, finer):
    """Return when finer classes are born once births last longer or shorter.

    Parameters
    ----------
    linear : LinearGrowth
        With the births as they were solved.
    births : Births
        As the setup has them.
    finer : FinerClasses
        Of those births.

    Returns
    -------
    times : ndarray, shape (f,)
        Births [s].
    """
    times = linear.growth.birth_times[0]
    longer = (times[-1] - times[0]) / (births.times[-1] - births.times[0])
    return times[0] + longer * (finer.times - births.times[0])


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
        times = finer_times(linear, plain, finer)
        weights, square, rows = finer.weights, finer.carry @ square, finer.carry @ rows
    length = growth.length[0]
    born = clock > times[:, None]
    # Before its birth a class's (r + l)^2 is carried on backwards: there it has no size.
    safe = np.sqrt(np.maximum(square, (growth.start_radius + length) ** 2)) - length
    by = dict(zip(linear.log_radius_by, rows, strict=False))
    move = _log_move(linear, cloud, by)
    if move is not None:
        # Far from where growth was solved first order is no guide, but must stay a number.
        safe = safe * np.exp(np.clip(move, -LARGEST_MOVE, LARGEST_MOVE))
    if "delay" in names:
        by["delay"] = np.where(born, rows[-1] / (-2.0 * (safe + length) * safe), 0.0)
    return Segment(np.where(born, safe, 0.0), weights, by)


def _thinner(linear, cloud, density_by):
    """Return the first-order change of ln n from where growth was solved."""
    change = 0.0
    for name, rows in density_by.items():
        step = setting(cloud, name) - setting(linear.cloud, name)
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
        step = setting(cloud, name) - setting(linear.cloud, name)
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
