"""One channel's residuals with what enters linearly projected out, and their derivatives."""

from dataclasses import dataclass

import numpy as np

from scatterfit.compiled import compiled

SINGULAR = 1e-12
"""Part of a column beyond the others, from which it is one of its own [-]."""


@dataclass(frozen=True)
class Projected:
    """A channel once its linear parameters are fitted."""

    factors: np.ndarray
    """Linear parameters, shape (q,)."""
    fit: np.ndarray
    """Model values, shape (m,) [V]."""
    residual: np.ndarray
    """Weighted, shape (m,) [-]."""
    basis: np.ndarray
    """Orthonormal weighted linear columns, shape (m, q)."""
    by: np.ndarray
    """Derivatives of the residual, projected, shape (k, m)."""


def project(data, columns, by, amplitude):
    """Return a channel with its linear parameters fitted and projected out.

    Parameters
    ----------
    data : tuple of ndarray
        Values [V] and weights [1/V], shape (m,).
    columns : tuple of ndarray
        Columns to be fitted, shape (q, m), and what has no free factor, shape (m,) [V].
    by : tuple of ndarray
        Derivatives of the channel's shape, shape (k, m) [V or -], and which of them are volts
        already, shape (k,) [bool].
    amplitude : ndarray, shape (e, m)
        What the first factors multiply to make the amplitude of the shape: ones, then slow
        changes; none where the amplitude is known [-].

    Returns
    -------
    projected : Projected
        The channel.

    References
    ----------
    .. [1] G. H. Golub, V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least
       squares problems whose variables separate", SIAM J. Numer. Anal. 10 (1973) 413-432.
    """
    if compiled():
        from scatterfit.inversion.projection_compiled import projected  # noqa: PLC0415 (numba)

        found = projected(data, columns, by, amplitude)
        if found is not None:
            return Projected(*found)
    return _projected(data, columns, by, amplitude)


def _projected(data, columns, by, amplitude):
    values, weight = data
    free, fixed = columns
    weighted = free * weight
    # Columns differ by many powers of ten; of one size, none is taken for nothing.
    norms = np.maximum(np.sqrt(np.einsum("qm,qm->q", weighted, weighted)), 1e-300)
    basis, triangle = np.linalg.qr((weighted / norms[:, None]).T)
    target = (values - fixed) * weight
    shadow = basis.T @ target
    factors = _solve(triangle, shadow) / norms
    rows, volts = by
    if rows.size:
        size = factors[: len(amplitude)] @ amplitude if len(amplitude) else 1.0
        rows = rows * np.where(volts[:, None], -weight, -size * weight)
        rows -= (rows @ basis) @ basis.T
    return Projected(factors, fixed + factors @ free, target - basis @ shadow, basis, rows)


def _solve(triangle, shadow):
    """Return the solution of an upper triangular system that may be singular."""
    size = np.abs(np.diag(triangle))
    if size.size and size.min() > SINGULAR * max(size.max(), 1e-300):
        found = np.zeros_like(shadow)
        for k in reversed(range(shadow.size)):
            found[k] = (shadow[k] - triangle[k, k + 1:] @ found[k + 1:]) / triangle[k, k]
        return found
    return np.linalg.lstsq(triangle, shadow, rcond=SINGULAR)[0]
