"""Kernels of a bench: nodes from a store where it has them, otherwise built, checked and kept.

The store is an object passed in by the edge of the program; this stage does not touch the disk.
"""

import hashlib
from collections.abc import Mapping, Sequence
from typing import Protocol

import numpy as np

from scatterfit.apparatus.records import Apparatus
from scatterfit.cloud_optics.node import (
    Node,
    Recipe,
    View,
    build_nodes,
    single_curves,
    table_count,
)
from scatterfit.cloud_optics.table import INDEX_STEP, OpticalKernel
from scatterfit.errors import InvalidInputError, KernelError

KERNEL_VERSION = 2
"""Raised whenever nodes would come out differently; part of every key."""
BASE_SPREAD = 0.003
"""Standard deviation of ln(radius) that every table has at least [-]."""

_MARGIN = 1.03
_ANGLE_STEPS = np.radians([0.2, 0.4, 0.8])
_CHECKED_SIZES = 24
_AVERAGED = 7
_LARGEST_AVERAGED = 10.0
_TOLERANCE = 1e-5
_TOLERANCE_AVERAGED = 5e-5
_NEAR_ZERO = 0.1


class KernelStore(Protocol):
    """Where nodes are kept from one run to the next."""

    def load(self, key: str) -> Mapping[str, np.ndarray] | None:
        """Return the arrays saved under a key, or ``None``."""

    def save(self, key: str, arrays: Mapping[str, np.ndarray]) -> None:
        """Keep arrays under a key; a store that cannot says nothing."""


def build_kernel(
    apparatus: Apparatus,
    gas_index: float,
    relative_indices: complex | Sequence[complex],
    store: KernelStore | None = None,
    *,
    angle_reach: float | Sequence[float] = 0.0,
    spread: float = BASE_SPREAD,
) -> OpticalKernel:
    """Return the kernel of a bench for a range of relative index.

    Parameters
    ----------
    apparatus : Apparatus
        Beam, detectors, transmission and largest radius are used.
    gas_index : float
        Refractive index of the gas against vacuum [-].
    relative_indices : complex or sequence of complex
        Indices of the liquid over that of the gas; the kernel serves all between the least and
        the largest real part. Absorption is that of the first, to three digits [-].
    store : KernelStore, optional
        Where nodes are looked up and kept.
    angle_reach : float or sequence of float
        How far the fit may shift each detector's angle (one for all, or one each): 0, or rounded
        up to 0.4, 0.8 or 1.6 degrees, of which the last is the limit [rad].
    spread : float
        Standard deviation of ln(radius) built into the tables [-].

    Returns
    -------
    kernel : OpticalKernel
        Tables are made by its method ``at``.

    Raises
    ------
    InvalidInputError
        If an index or an angle reach is out of range.
    KernelError
        If newly built curves disagree with the independent Mie library.
    """
    indices = np.atleast_1d(np.asarray(relative_indices, dtype=complex))
    first, last, absorption = _lattice(indices)
    wavenumber = 2 * np.pi * gas_index / apparatus.beam.wavelength
    recipe = _recipe(apparatus, wavenumber, angle_reach, spread)
    wanted = range(first, last + 1)
    nodes = {i: _stored(store, recipe, i, absorption) for i in wanted}
    missing = [i for i in wanted if nodes[i] is None]
    if missing:
        real = np.array(missing) * INDEX_STEP
        built = build_nodes(recipe, real + 1j * absorption if absorption else real)
        for i, node in zip(missing, built, strict=True):
            check_node(recipe, node, i * INDEX_STEP + 1j * absorption)
            nodes[i] = node
            if store is not None:
                store.save(node_key(recipe, i, absorption), _arrays(node))
    return OpticalKernel(wavenumber, recipe, first, absorption, tuple(nodes[i] for i in wanted))


def node_key(recipe: Recipe, index_number: int, absorption: float) -> str:
    """Return the name under which a store keeps a node.

    Parameters
    ----------
    recipe : Recipe
        What the node is made from.
    index_number : int
        Real index in steps of 0.001.
    absorption : float
        Imaginary part of the index [-].

    Returns
    -------
    key : str
        Hexadecimal digest of all inputs and the kernel version.

    Examples
    --------
    >>> recipe = Recipe(None, (View(0.5, 0.01),), 0.0, 0.003, 64)
    >>> node_key(recipe, 1333, 0.0) == node_key(recipe, 1334, 0.0)
    False
    """
    text = repr((KERNEL_VERSION, index_number, absorption, recipe))
    return hashlib.sha256(text.encode()).hexdigest()[:40]


def check_node(recipe: Recipe, node: Node, relative_index: complex) -> None:
    """Compare a node with miepython, an independent implementation of the series.

    Parameters
    ----------
    recipe : Recipe
        What the node was made from.
    node : Node
        Averaged curves.
    relative_index : complex
        Index of the droplet over that of the gas [-].

    Raises
    ------
    KernelError
        If single droplets at two dozen sizes over the whole table, or the averages at four small
        sizes, where an average over seven droplets is near enough, differ: by more than 1e-5,
        averages of collected light by 5e-5; near a zero of the light, by that part of the light at
        neighbouring sizes.
    """
    grid = recipe.size_parameter
    sizes = np.geomspace(grid[0], grid[-1], _CHECKED_SIZES)
    ours = single_curves(recipe, relative_index, sizes)
    theirs = _independent_curves(recipe, relative_index, sizes)
    _compare(ours, theirs, sizes, "single droplets")
    rows = np.concatenate([*node.collected, node.forward[None], node.extinction[None]])
    if not recipe.forward_half_angle:
        rows = np.delete(rows, -2, axis=0)
    spots = np.geomspace(grid[0], min(grid[-1], _LARGEST_AVERAGED), 4)
    points = np.minimum(np.searchsorted(grid, spots), grid.size - 1)
    away, share = np.polynomial.hermite_e.hermegauss(_AVERAGED)
    near = (grid[points, None] * np.exp(recipe.spread * away)).ravel()
    theirs = _independent_curves(recipe, relative_index, near)
    theirs = theirs.reshape(-1, points.size, _AVERAGED) @ (share / share.sum())
    _compare(rows[:-1, points], theirs[:-1], grid[points], "averages", _TOLERANCE_AVERAGED)
    _compare(rows[-1:, points], theirs[-1:], grid[points], "averages")


def _compare(ours, theirs, sizes, what, tolerance=_TOLERANCE):
    """Raise where two sets of curves differ."""
    beside = np.pad(theirs, ((0, 0), (1, 1)), mode="edge")
    around = (beside[:, :-2] * beside[:, 1:-1] * beside[:, 2:]) ** (1.0 / 3.0)
    error = np.abs(ours - theirs) / np.maximum(theirs, _NEAR_ZERO * around)
    if not np.all(error < tolerance):
        row, column = np.unravel_index(np.nanargmax(error), error.shape)
        message = (
            f"kernel {what} differ from miepython by {error[row, column]:.1e} in curve {row} at "
            f"size parameter {sizes[column]:.5g}; reinstall numpy and miepython"
        )
        raise KernelError(message)


def _independent_curves(recipe, relative_index, sizes):
    """Return light in each cone and extinction by miepython, shape (n_cones + 1, n)."""
    import miepython  # noqa: PLC0415, half a second that only a new kernel pays

    cones = recipe.cones
    cosines = np.cos(np.concatenate([cone.angle for cone in cones] or [np.zeros(1)]))
    ends = np.cumsum([cone.angle.size for cone in cones])[:-1]
    index = complex(relative_index).conjugate()
    curves = np.empty((len(cones) + 1, len(sizes)))
    for column, size in enumerate(sizes):
        s1, s2 = miepython.S1_S2(index, size, cosines, norm="wiscombe")
        i1, i2 = np.split(np.abs(s1) ** 2, ends), np.split(np.abs(s2) ** 2, ends)
        for row, cone in enumerate(cones):
            curves[row, column] = cone.perpendicular @ i1[row] + cone.parallel @ i2[row]
        curves[-1, column] = np.pi * size**2 * miepython.efficiencies_mx(index, size)[0]
    return curves


def _lattice(indices):
    """Return the first and last node needed, and the absorption."""
    bad = indices[~((indices.real >= 1.01) & (indices.imag >= 0) & np.isfinite(indices))]
    if bad.size or not indices.size:
        shown = f"{bad[0]:g}" if bad.size else "missing"
        message = f"relative index is {shown}, must be n + ik with n >= 1.01 and k >= 0"
        raise InvalidInputError(message)
    low, high = indices.real.min() / INDEX_STEP, indices.real.max() / INDEX_STEP
    first = int(np.floor(low + 1e-6)) - 1
    last = max(int(np.ceil(high - 1e-6)) + 1, first + 3)
    return first, last, float(f"{indices[0].imag:.3g}")


def _recipe(apparatus, wavenumber, angle_reach, spread):
    """Return what the nodes of a bench are made from."""
    detectors = apparatus.detectors
    steps = [_angle_step(reach) for reach in np.broadcast_to(angle_reach, len(detectors))]
    views = tuple(
        View(round(float(one.angle), 9), round(float(one.half_angle), 9), step)
        for one, step in zip(detectors, steps, strict=True)
    )
    transmission = apparatus.transmission
    forward = 0.0 if transmission is None else round(float(transmission.half_angle), 9)
    largest = _MARGIN * wavenumber * apparatus.analysis.max_radius
    polarization = apparatus.beam.polarization
    if polarization is not None:
        polarization = round(float(polarization), 9)
    return Recipe(polarization, views, forward, float(spread), table_count(largest, spread))


def _angle_step(reach):
    """Return the spacing of five angles that reach as far as wanted, at most 1.6 degrees."""
    if not reach >= 0:
        message = f"angle reach is {reach:g} rad, must be 0 or positive"
        raise InvalidInputError(message)
    if reach == 0:
        return 0.0
    fitting = _ANGLE_STEPS[2 * _ANGLE_STEPS - reach > -1e-9]
    return float(fitting[0] if fitting.size else _ANGLE_STEPS[-1])


def _arrays(node):
    """Return a node as named arrays."""
    named = {f"collected_{i}": axes for i, axes in enumerate(node.collected)}
    return named | {"extinction": node.extinction, "forward": node.forward}


def _stored(store, recipe, index_number, absorption):
    """Return a node from the store, or ``None`` where it is missing or is not what it should be."""
    arrays = None if store is None else store.load(node_key(recipe, index_number, absorption))
    if arrays is None:
        return None
    shapes = {
        f"collected_{i}": (view.axes.size, recipe.count) for i, view in enumerate(recipe.views)
    }
    shapes |= {"extinction": (recipe.count,), "forward": (recipe.count,)}
    for name, shape in shapes.items():
        found = arrays.get(name)
        if found is None or found.shape != shape or found.dtype != float:
            return None
        if not np.isfinite(found).all():
            return None
    collected = tuple(arrays[f"collected_{i}"] for i in range(len(recipe.views)))
    return Node(collected, arrays["extinction"], arrays["forward"])
