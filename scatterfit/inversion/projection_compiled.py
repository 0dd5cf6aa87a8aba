"""The projection of :mod:`scatterfit.inversion.projection` as a compiled loop."""

import math

import numpy as np
from numba import njit

from scatterfit.inversion.projection import SINGULAR

# Sums may be taken in another order; what is not a number stays so.
_FAST = {"reassoc", "contract", "arcp", "nsz"}


def load_projection():
    """Compile the loop, or load it from where compiled code is kept."""
    some = np.ones((1, 2))
    projected((some[0], some[0]), (some, some[0]), (some, np.zeros(1, bool)), some)


def projected(data, columns, by, amplitude):
    """Return factors, fit, residual, basis and derivatives; ``None`` for columns that depend.

    Parameters
    ----------
    data, columns, by, amplitude : tuple of ndarray or ndarray
        As for :func:`scatterfit.inversion.projection.project` [V or -].

    Returns
    -------
    found : tuple of ndarray or None
        The fields of a ``Projected`` [V or -].
    """
    values, weight, free, fixed, amplitude = (
        np.array(a, dtype=float, order="C") for a in (*data, *columns, amplitude))
    rows, volts = np.array(by[0], dtype=float, order="C"), np.array(by[1], dtype=bool)
    factors, basis = np.zeros(free.shape[0]), free * weight
    fit, residual = np.empty_like(values), np.empty_like(values)
    if not _project((values, weight, fixed), (free, basis, amplitude), (rows, volts),
                    (factors, fit, residual)):
        return None
    return factors, fit, residual, basis.T, rows


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _project(data, columns, by, out):
    """Fill all that comes out; return whether the columns are independent."""
    values, weight, fixed = data
    free, basis, amplitude = columns
    factors, fit, residual = out
    count, samples = basis.shape
    triangle, norms = np.zeros((count, count)), np.empty(count)
    if not _orthonormal(basis, triangle, norms):
        return False
    for m in range(samples):
        residual[m] = (values[m] - fixed[m]) * weight[m]
        fit[m] = fixed[m]
    for q in range(count):
        factors[q] = _removed(basis[q], residual)
    for q in range(count - 1, -1, -1):
        for k in range(q + 1, count):
            factors[q] -= triangle[q, k] * factors[k]
        factors[q] /= triangle[q, q]
    for q in range(count):
        factors[q] /= norms[q]
        for m in range(samples):
            fit[m] += factors[q] * free[q, m]
    _derived(weight, (basis, amplitude), by, factors)
    return True


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _derived(weight, columns, by, factors):
    """Change derivatives of the shape into those of the projected residual."""
    basis, amplitude = columns
    rows, volts = by
    size = np.full(weight.size, 1.0 if amplitude.shape[0] == 0 else 0.0)
    for e in range(amplitude.shape[0]):
        for m in range(weight.size):
            size[m] += factors[e] * amplitude[e, m]
    for k in range(rows.shape[0]):
        for m in range(weight.size):
            rows[k, m] *= -weight[m] * (1.0 if volts[k] else size[m])
        for q in range(basis.shape[0]):
            _removed(basis[q], rows[k])


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _removed(direction, vector):
    """Take from a vector what lies along a unit vector; return how much that was."""
    part = 0.0
    for m in range(vector.size):
        part += direction[m] * vector[m]
    for m in range(vector.size):
        vector[m] -= part * direction[m]
    return part


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _orthonormal(basis, triangle, norms):
    """Make the rows orthonormal by Gram and Schmidt's way, twice; return whether they can be."""
    for q in range(basis.shape[0]):
        norms[q] = max(math.sqrt(_power(basis[q])), 1e-300)
        for m in range(basis.shape[1]):
            basis[q, m] /= norms[q]
        for _ in range(2):
            for k in range(q):
                triangle[k, q] += _removed(basis[k], basis[q])
        triangle[q, q] = math.sqrt(_power(basis[q]))
        if not triangle[q, q] > 10.0 * SINGULAR:
            return False
        for m in range(basis.shape[1]):
            basis[q, m] /= triangle[q, q]
    return True


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _power(vector):
    """Return the sum of squares."""
    total = 0.0
    for m in range(vector.size):
        total += vector[m] * vector[m]
    return total
