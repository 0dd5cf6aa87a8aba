"""Averaged curves of a bench at given relative indices: the nodes from which kernels are made.

Everything is dimensionless: sizes are size parameters x in the gas, cross sections are multiplied
by the square of the wavenumber in the gas. A node therefore serves every wavelength and gas.

A single droplet's curve cannot be tabulated: beyond x of about 40 its resonances are narrower than
any grid. A cloud has a spread of radius, and its curve can. Each node is averaged over a normal
distribution of ln x of a small standard deviation; wider spreads are made from it later.
"""

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np

from scatterfit.cloud_optics.aperture import ConeQuadrature, cone_quadrature
from scatterfit.cloud_optics.coefficients import term_count
from scatterfit.cloud_optics.series import (
    AngularMatrix,
    add_product,
    angular_matrix,
    intensities,
    series_sums,
    size_blocks,
)

LOWEST_SIZE = 0.05
"""Size parameter at which every table starts [-]."""
STEPS_A_SPREAD = 0.3
"""Spacing of the table in ln x over its spread; cubic splines on it are good to 1e-4 [-]."""

_REACH = 18
_FINEST = 20
_RESOLUTION = 0.85
_TERMS = 3.5
_LAST_SMOOTH_SIZE = 10.0
_BLOCK = 8000
_COUNT_LATTICE = 64


@dataclass(frozen=True)
class View:
    """What one detector sees."""

    angle: float
    """Scattering angle of its axis [rad]."""
    half_angle: float
    """Half angle of its cone [rad]."""
    angle_step: float = 0.0
    """Spacing of the five axis angles tabulated about the nominal one; 0 is that one only [rad]."""

    @property
    def axes(self) -> np.ndarray:
        """Return the tabulated axis angles, shape (1,) or (5,) [rad]."""
        offsets = np.arange(-2, 3) if self.angle_step else np.zeros(1)
        return self.angle + self.angle_step * offsets


@dataclass(frozen=True)
class Recipe:
    """What a node is made from, apart from its index."""

    polarization: float | None
    """Angle of the electric field from the scattering plane [rad]; ``None`` is unpolarized."""
    views: tuple[View, ...]
    """One for each detector."""
    forward_half_angle: float
    """Half angle of the transmission receiver; 0 collects nothing [rad]."""
    spread: float
    """Standard deviation of ln x over which the curves are averaged [-]."""
    count: int
    """Points of the table."""

    @property
    def step(self) -> float:
        """Return the spacing of the table in ln x [-]."""
        return STEPS_A_SPREAD * self.spread

    @property
    def size_parameter(self) -> np.ndarray:
        """Return the size parameters of the table, shape (count,) [-]."""
        return LOWEST_SIZE * np.exp(self.step * np.arange(self.count))

    @cached_property
    def cones(self) -> tuple[ConeQuadrature, ...]:
        """Return a quadrature for each axis of each view, then one for the receiver."""
        largest = LOWEST_SIZE * np.exp(self.step * (self.count + _REACH))
        cones = [
            cone_quadrature(axis, view.half_angle, self.polarization, largest)
            for view in self.views
            for axis in view.axes
        ]
        if self.forward_half_angle:
            cones.append(cone_quadrature(0.0, self.forward_half_angle, None, largest))
        return tuple(cones)


@dataclass(frozen=True)
class Node:
    """Averaged curves at one relative index, times the square of the wavenumber in the gas."""

    collected: tuple[np.ndarray, ...]
    """For each detector, collected light at each of its axes, shape (n_axes, count) [-]."""
    extinction: np.ndarray
    """pi x^2 Qext, shape (count,) [-]."""
    forward: np.ndarray
    """Light within the transmission receiver, shape (count,) [-]."""


@dataclass(frozen=True)
class _Collector:
    """The cones of a recipe as matrices over angles and terms."""

    matrix: AngularMatrix
    perpendicular: np.ndarray
    parallel: np.ndarray
    electric_apart: np.ndarray
    magnetic_apart: np.ndarray


def table_count(largest_size: float, spread: float) -> int:
    """Return how many points reach a size, on a lattice of lengths so that benches share nodes.

    Parameters
    ----------
    largest_size : float
        Size parameter to be covered [-].
    spread : float
        Standard deviation of ln x over which the curves are averaged [-].

    Returns
    -------
    count : int
        A multiple of 64 points.

    Examples
    --------
    >>> table_count(100.0, 0.003)
    8448
    """
    steps = np.log(largest_size / LOWEST_SIZE) / (STEPS_A_SPREAD * spread) + 1
    return _COUNT_LATTICE * max(1, int(np.ceil(steps / _COUNT_LATTICE)))


def build_nodes(recipe: Recipe, relative_index: np.ndarray, threads: int = 2) -> list[Node]:
    """Evaluate and average the curves of a bench at several indices in one pass.

    Parameters
    ----------
    recipe : Recipe
        Bench, spread and length of the table.
    relative_index : ndarray, shape (n_indices,)
        Index of the droplet over that of the gas; a real array takes the faster path [-].
    threads : int
        Blocks of sizes worked on at the same time.

    Returns
    -------
    nodes : list of Node
        One for each index.

    Notes
    -----
    Below each interval of the table lie up to 20 evaluations. Resonances narrower than 0.85 of
    their spacing are widened to it with their area kept (see `coefficient_rows`), so that a chance
    hit or miss of a narrow one does not matter. Against evaluations that resolve every resonance,
    averages over the spread of 0.003 are right to 5e-4 up to 120 degrees and to 3e-3 near 180
    degrees, for x to 100.
    """
    subdivision = _subdivision(recipe)
    x, spacing = _fine_sizes(recipe, subdivision)
    collector = _collector(recipe, term_count(x[-1], _TERMS))
    blocks = size_blocks(x, max(200, _BLOCK // relative_index.size))
    fine = np.empty((len(recipe.cones) + 1, relative_index.size, x.size))

    def work(block):
        fine[..., block] = _curves(x[block], relative_index, collector, spacing[block])

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(work, blocks))
    averaged = _averaged(fine, subdivision, recipe)
    return [_as_node(averaged[:, i], recipe) for i in range(relative_index.size)]


def single_curves(recipe: Recipe, relative_index: complex, size_parameter) -> np.ndarray:
    """Return the curves of single droplets, not averaged.

    Parameters
    ----------
    recipe : Recipe
        Bench, spread and length of the table.
    relative_index : complex
        Index of the droplet over that of the gas [-].
    size_parameter : ndarray, shape (n,)
        Ascending size parameters within the table [-].

    Returns
    -------
    curves : ndarray, shape (n_cones + 1, n)
        Light in each of the recipe's cones, then extinction, times the wavenumber squared [-].
    """
    m = np.array([relative_index if np.imag(relative_index) else np.real(relative_index)])
    collector = _collector(recipe, term_count(size_parameter[-1]))
    blocks = size_blocks(size_parameter)
    found = [_curves(size_parameter[block], m, collector, None)[:, 0] for block in blocks]
    return np.concatenate(found, axis=-1)


def _subdivision(recipe):
    """Return the evaluations in each interval of the table, from 18 before it to 18 after it."""
    interval = np.arange(-_REACH, recipe.count + _REACH)
    size = LOWEST_SIZE * np.exp(recipe.step * interval)
    return np.clip(np.ceil(size) + 2, 3, _FINEST).astype(int)


def _fine_sizes(recipe, subdivision):
    """Return the size parameters of all evaluations and the widths that they can resolve."""
    start = np.repeat(np.arange(subdivision.size) - _REACH, subdivision)
    within = np.arange(start.size) - np.repeat(np.cumsum(subdivision) - subdivision, subdivision)
    parts = np.repeat(subdivision, subdivision)
    x = LOWEST_SIZE * np.exp(recipe.step * (start + (within + 0.5) / parts))
    return x, np.where(x > _LAST_SMOOTH_SIZE, _RESOLUTION * recipe.step * x / parts, 0.0)


def _collector(recipe, terms):
    """Return matrices that turn the sums of the series into the light in each cone."""
    cones = recipe.cones
    matrix = angular_matrix(np.concatenate([cone.angle for cone in cones] or [np.zeros(1)]), terms)
    perpendicular = np.zeros((len(cones), matrix.plus.shape[0]))
    parallel = np.zeros_like(perpendicular)
    start = 0
    for row, cone in enumerate(cones):
        columns = slice(start, start + cone.angle.size)
        perpendicular[row, columns], parallel[row, columns] = cone.perpendicular, cone.parallel
        start += cone.angle.size
    pi_squared = ((matrix.plus + matrix.minus) / 2) ** 2
    tau_squared = ((matrix.plus - matrix.minus) / 2) ** 2
    return _Collector(
        matrix,
        perpendicular,
        parallel,
        perpendicular @ pi_squared + parallel @ tau_squared,
        perpendicular @ tau_squared + parallel @ pi_squared,
    )


def _curves(x, relative_index, collector, resolution):
    """Return light in each cone and extinction, shape (n_cones + 1, n_indices, n)."""
    margin = {} if resolution is None else {"margin": _TERMS}
    if resolution is not None and not resolution.any():
        resolution = None
    terms = min(term_count(x[-1], **margin), collector.matrix.plus.shape[1])
    sums = series_sums(x, relative_index, collector.matrix, terms, resolution)
    curves = np.zeros((collector.perpendicular.shape[0] + 1, relative_index.size, x.size))
    perpendicular, parallel = intensities(sums)
    pairs = [(collector.perpendicular, perpendicular), (collector.parallel, parallel)]
    if sums.apart.size:
        last = slice(terms - sums.apart.shape[0], terms)
        pairs.append((collector.electric_apart[:, last], sums.apart[:, 0]))
        pairs.append((collector.magnetic_apart[:, last], sums.apart[:, 1]))
    light = curves[:-1].reshape(curves.shape[0] - 1, relative_index.size * x.size)
    for weights, values in pairs:
        add_product(light, weights, values.reshape(values.shape[0], light.shape[1]))
    curves[-1] = 2 * np.pi * sums.extinction
    return curves


def _averaged(fine, subdivision, recipe):
    """Average fine curves over the normal distribution, shape (..., count)."""
    total = np.zeros((*fine.shape[:-1], recipe.count + 4 * _REACH))
    edges = np.flatnonzero(np.diff(subdivision, prepend=0, append=0))
    start = 0
    for first, last in pairwise(edges):
        parts = int(subdivision[first])
        values = fine[..., start : start + (last - first) * parts]
        start += (last - first) * parts
        values = values.reshape(*fine.shape[:-1], last - first, parts)
        shares = np.zeros((2 * _REACH + 1, values.size // parts))
        add_product(shares, _shares(parts).T, values.reshape(-1, parts).T)
        shares = shares.reshape(-1, *values.shape[:-1])
        for back, share in enumerate(shares):
            total[..., first + back : last + back] += share
    return total[..., 2 * _REACH : 2 * _REACH + recipe.count]


def _shares(parts):
    """Return the weight of each evaluation in an interval in the 37 points of the table near it.

    Shape (parts, 37); column b is the point b - 18 intervals after the interval's start.
    """
    position = (np.arange(parts)[:, None] + 0.5) / parts
    distance = STEPS_A_SPREAD * (np.arange(-_REACH, _REACH + 1) - position)
    return np.exp(-(distance**2) / 2) * STEPS_A_SPREAD / (np.sqrt(2 * np.pi) * parts)


def _as_node(rows, recipe):
    """Name the rows of averaged curves."""
    collected, start = [], 0
    for view in recipe.views:
        collected.append(rows[start : start + view.axes.size])
        start += view.axes.size
    forward = rows[start] if recipe.forward_half_angle else np.zeros(recipe.count)
    return Node(tuple(collected), rows[-1], forward)
