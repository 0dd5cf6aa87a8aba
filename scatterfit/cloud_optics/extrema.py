"""Where a cloud's curve has a maximum, a minimum or a shoulder: radii one can read off a trace."""

from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np

from scatterfit.cloud_optics.table import KernelTable
from scatterfit.errors import InvalidInputError


@dataclass(frozen=True)
class KernelExtremum:
    """One distinct radius of a curve."""

    radius: float
    """Radius of the droplets [m]."""
    kind: Literal["maximum", "minimum", "shoulder"]
    """A shoulder is where a curve all but stops to rise, or to fall."""
    value: float
    """The curve there [m^2]."""
    prominence: float
    """How much it stands out: for a maximum or a minimum the lesser of the two differences of
    ln(value) to its neighbours; for a shoulder the lesser of the two differences of
    d ln(value)/d ln(radius) [-]."""


def kernel_extrema(
    table: KernelTable,
    row: np.ndarray,
    *,
    radius_range: tuple[float, float] = (0.0, np.inf),
    least_depth: float = 0.03,
    flatness: float = 0.5,
) -> tuple[KernelExtremum, ...]:
    """Find maxima, minima and shoulders of a curve against radius.

    Parameters
    ----------
    table : KernelTable
        Gives the grid.
    row : ndarray, shape (n,)
        A positive curve on the table's grid, such as ``table.collected[0]`` or
        ``table.extinction`` [m^2].
    radius_range : tuple of float
        Smallest and largest radius of interest [m].
    least_depth : float
        A maximum and a minimum that differ by less in ln(value) count as a shoulder [-].
    flatness : float
        A shoulder's slope, d ln(value)/d ln(radius), is less than this part of the slope on
        either side [-].

    Returns
    -------
    extrema : tuple of KernelExtremum
        In the order of radius. Positions lie between grid points, by parabolas.

    Raises
    ------
    InvalidInputError
        If the curve is not positive or the range holds fewer than 5 points of the table.

    Examples
    --------
    A curve that oscillates about the square of the radius, once wildly and once gently:

    >>> table = KernelTable(0.0, 0.01, 0.0, np.empty((0, 401)), np.ones(401), np.zeros(401))
    >>> wild = table.radius**2 * np.exp(np.cos(5 * np.log(table.radius)))
    >>> [(one.kind, round(one.radius, 3)) for one in kernel_extrema(table, wild)][:2]
    [('maximum', 1.086), ('minimum', 1.726)]
    >>> gentle = table.radius**2 * np.exp(0.35 * np.cos(5 * np.log(table.radius)))
    >>> [(one.kind, round(one.radius, 3)) for one in kernel_extrema(table, gentle)][:2]
    [('shoulder', 1.369), ('shoulder', 4.81)]
    """
    inside = np.flatnonzero((table.radius >= radius_range[0]) & (table.radius <= radius_range[1]))
    if inside.size < 5 or not np.all(row[inside] > 0):
        message = (
            f"extrema need at least 5 points of a positive curve, but the range "
            f"{radius_range[0]:g} to {radius_range[1]:g} m has {inside.size}, the smallest value "
            f"{row[inside].min() if inside.size else np.nan:g} m^2; widen the range"
        )
        raise InvalidInputError(message)
    level = np.log(row[inside])
    slope = np.gradient(level, table.step)
    turns = _turning_points(level, least_depth)
    found = [
        (position, "maximum" if level[position] > level[before] else "minimum", prominence)
        for before, position, prominence in _with_prominence(level, turns)
    ]
    for start, stop in pairwise(turns):
        rising = 1.0 if level[stop] > level[start] else -1.0
        found += _shoulders(rising * slope[start : stop + 1], start, flatness)
    grid = table.log_radius_start + table.step * inside
    return tuple(_refined(grid, table.step, level, slope, found_one) for found_one in sorted(found))


def _turning_points(level, least_depth):
    """Return positions of the two ends and of alternating extrema that differ enough."""
    rises = np.sign(np.diff(level))
    inner = np.flatnonzero(rises[1:] * rises[:-1] < 0) + 1
    points = [0, *inner.tolist(), level.size - 1]
    while len(points) > 2:
        depths = np.abs(np.diff(level[points]))
        smallest = int(np.argmin(depths))
        if depths[smallest] >= least_depth:
            break
        if smallest == 0:
            del points[1]
        elif smallest == len(depths) - 1:
            del points[-2]
        else:
            del points[smallest : smallest + 2]
    return points


def _with_prominence(level, turns):
    """Yield (previous point, point, lesser depth) for the inner turning points."""
    for before, position, after in zip(turns[:-2], turns[1:-1], turns[2:], strict=True):
        depth = min(abs(level[position] - level[before]), abs(level[position] - level[after]))
        yield before, position, float(depth)


def _shoulders(slope, start, flatness):
    """Return shoulders of a stretch that rises (or falls, with the sign turned)."""
    change = np.sign(np.diff(slope))
    lows = np.flatnonzero((change[1:] > 0) & (change[:-1] < 0)) + 1
    highs = np.flatnonzero((change[1:] < 0) & (change[:-1] > 0)) + 1
    found = []
    for low in lows:
        left = slope[highs[highs < low][-1]] if (highs < low).any() else slope[0]
        right = slope[highs[highs > low][0]] if (highs > low).any() else slope[-1]
        beside = min(left, right)
        if slope[low] < flatness * beside:
            found.append((start + int(low), "shoulder", float(beside - slope[low])))
    return found


def _refined(grid, step, level, slope, found):
    """Return the record of a found position, moved to the vertex of a parabola."""
    position, kind, prominence = found
    position = min(max(position, 1), level.size - 2)
    curve = slope if kind == "shoulder" else level
    before, here, after = curve[position - 1 : position + 2]
    bend = before - 2 * here + after
    offset = float(np.clip((before - after) / (2 * bend), -1, 1)) if bend else 0.0
    log_value = level[position] + offset * (level[position + 1] - level[position - 1]) / 2
    log_value += offset**2 * (level[position + 1] - 2 * level[position] + level[position - 1]) / 2
    radius = float(np.exp(grid[position] + offset * step))
    return KernelExtremum(radius, kind, float(np.exp(log_value)), prominence)
