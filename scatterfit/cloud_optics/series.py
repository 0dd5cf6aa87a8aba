"""The sums of the Lorenz-Mie series, block by block.

Sizes are sorted and worked through in blocks; coefficients arrive term by term as rows over all
sizes of a block and several indices, and are folded into sums over angles by matrix products.
"""

from dataclasses import dataclass

import numpy as np

from scatterfit.cloud_optics.coefficients import coefficient_rows

_BLOCK = 2000
_BLOCK_RATIO = 1.2
_CHUNK = 32
_SERIAL_PRODUCT = 250_000


@dataclass(frozen=True)
class AngularMatrix:
    """Angular functions times (2n+1)/(n(n+1)) at fixed angles, one column a term of the series."""

    plus: np.ndarray
    """Weights of a_n + b_n in S1 + S2, shape (n_angles, n_terms) [-]."""
    minus: np.ndarray
    """Weights of a_n - b_n in S1 - S2, shape (n_angles, n_terms) [-]."""


@dataclass(frozen=True)
class SeriesSums:
    """Sums of the series over one block; real and imaginary parts lie on the second axis."""

    plus: np.ndarray
    """S1 + S2, shape (n_angles, 2, n_indices, n_sizes) [-]."""
    minus: np.ndarray
    """S1 - S2, shape (n_angles, 2, n_indices, n_sizes) [-]."""
    extinction: np.ndarray
    """sum (2n+1) Re(a_n + b_n), shape (n_indices, n_sizes) [-]."""
    scattering: np.ndarray
    """sum (2n+1) (|a_n|^2 + |b_n|^2), shape (n_indices, n_sizes) [-]."""
    apart: np.ndarray
    """|a_n|^2 and |b_n|^2 without phase, for the last n of the series, shape
    (n_widened, 2, n_indices, n_sizes) [-]."""


def angular_matrix(angle: np.ndarray, terms: int) -> AngularMatrix:
    """Return the angular functions pi_n and tau_n, combined and weighted for the two sums.

    Parameters
    ----------
    angle : array_like, shape (n_angles,)
        Scattering angles [rad].
    terms : int
        Number of terms of the series.

    Returns
    -------
    matrix : AngularMatrix
        Weights of the sums and differences of the coefficients.

    References
    ----------
    .. [1] C. F. Bohren and D. R. Huffman, "Absorption and Scattering of Light by Small
       Particles", Wiley (1983), equations 4.47 and 4.74.

    Examples
    --------
    Straight forward both polarizations are the same, and each term counts 2n + 1:

    >>> matrix = angular_matrix([0.0], 3)
    >>> matrix.plus, matrix.minus
    (array([[3., 5., 7.]]), array([[0., 0., 0.]]))
    """
    mu = np.cos(np.atleast_1d(np.asarray(angle, dtype=float)))
    plus = np.empty((mu.size, terms))
    minus = np.empty((mu.size, terms))
    pi_before, pi_n = np.zeros_like(mu), np.ones_like(mu)
    for n in range(1, terms + 1):
        tau_n = n * mu * pi_n - (n + 1) * pi_before
        factor = (2 * n + 1) / (n * (n + 1))
        plus[:, n - 1] = factor * (pi_n + tau_n)
        minus[:, n - 1] = factor * (pi_n - tau_n)
        pi_before, pi_n = pi_n, ((2 * n + 1) * mu * pi_n - (n + 1) * pi_before) / n
    return AngularMatrix(plus, minus)


def size_blocks(size_parameter: np.ndarray, block: int = _BLOCK) -> list[slice]:
    """Cut a sorted list of sizes into blocks that can share one number of terms.

    Parameters
    ----------
    size_parameter : ndarray, shape (n,)
        Ascending size parameters, > 0 [-].
    block : int
        Largest number of sizes in a block.

    Returns
    -------
    blocks : list of slice
        Consecutive slices. Sizes within a block differ by at most 20 percent, because the
        functions of the smallest would overflow in the terms that only the largest needs.

    Examples
    --------
    >>> size_blocks(np.array([1.0, 1.1, 5.0]))
    [slice(0, 2, None), slice(2, 3, None)]
    """
    blocks, start = [], 0
    while start < size_parameter.size:
        limit = size_parameter[start] * _BLOCK_RATIO
        stop = min(start + block, int(np.searchsorted(size_parameter, limit, side="right")))
        stop = max(stop, start + 1)
        blocks.append(slice(start, stop))
        start = stop
    return blocks


def series_sums(
    size_parameter: np.ndarray,
    relative_index: np.ndarray,
    matrix: AngularMatrix,
    terms: int,
    resolution: np.ndarray | None = None,
) -> SeriesSums:
    """Sum the series for one block of sizes and several indices.

    Parameters
    ----------
    size_parameter : ndarray, shape (n_sizes,)
        Ascending, from one of `size_blocks` [-].
    relative_index : ndarray, shape (n_indices,)
        Index of the droplet against the gas; a real array takes the faster path [-].
    matrix : AngularMatrix
        From `angular_matrix`, for at least `terms` terms.
    terms : int
        Number of terms, enough for the largest size.
    resolution : ndarray, shape (n_sizes,), optional
        Where the sums are to be averaged over size, the spacing of the sizes: resonances
        narrower than it are widened to it, their area kept (see `coefficient_rows`) [-].

    Returns
    -------
    sums : SeriesSums
        Amplitudes, the sums behind the two efficiencies and, with a resolution, the intensity
        that the widening took from the squares of the amplitudes.
    """
    shape = (2, relative_index.size, size_parameter.size)
    angular = np.vstack([matrix.plus[:, :terms], 2 * np.arange(1, terms + 1) + 1.0])
    plus, minus = np.zeros((angular.shape[0], *shape)), np.zeros((angular.shape[0] - 1, *shape))
    scattering = np.zeros(shape[1:])
    sums, differences = np.empty((_CHUNK, *shape)), np.empty((_CHUNK, *shape))
    lost = []
    filled = _CHUNK
    for n, (a, b), apart in coefficient_rows(size_parameter, relative_index, terms, resolution):
        filled -= 1
        np.add(a, b, out=sums[filled])
        np.subtract(a, b, out=differences[filled])
        if np.iscomplexobj(relative_index):
            scattering += (2 * n + 1) * (a * a + b * b).sum(axis=0)
        if apart is not None:
            lost.append(apart)
        if filled == 0 or n == 1:
            columns = slice(n - 1, n - 1 + _CHUNK - filled)
            _fold(plus, angular[:, columns], sums[filled:])
            _fold(minus, matrix.minus[:, columns], differences[filled:])
            filled = _CHUNK
    extinction = plus[-1, 0]
    if not np.iscomplexobj(relative_index):
        scattering = extinction
    return SeriesSums(plus[:-1], minus, extinction, scattering, np.array(lost[::-1]))


def _fold(total, weights, rows):
    """Add the matrix product of angular weights and a chunk of coefficient rows."""
    add_product(total.reshape(total.shape[0], -1), weights, rows.reshape(rows.shape[0], -1))


def add_product(total: np.ndarray, left: np.ndarray, right: np.ndarray) -> None:
    """Add a matrix product to ``total`` in place, cut so that no library starts threads for it.

    Blocks run in threads of their own already, and linear-algebra threads that wait for each other
    on a busy machine make the whole three times slower.

    Parameters
    ----------
    total : ndarray, shape (n, m)
        Changed in place, in the unit of the product [-].
    left : ndarray, shape (n, k)
        First factor [-].
    right : ndarray, shape (k, m)
        Second factor, in any unit [-].

    Examples
    --------
    >>> total = np.ones((1, 2))
    >>> add_product(total, np.array([[2.0]]), np.array([[1.0, 3.0]]))
    >>> total
    array([[3., 7.]])
    """
    columns = max(16, _SERIAL_PRODUCT // max(left.size, 1))
    for start in range(0, right.shape[1], columns):
        part = slice(start, start + columns)
        total[:, part] += left @ right[:, part]


def intensities(sums: SeriesSums) -> tuple[np.ndarray, np.ndarray]:
    """Return |S1|^2 and |S2|^2 of a block.

    Parameters
    ----------
    sums : SeriesSums
        From `series_sums`.

    Returns
    -------
    perpendicular, parallel : ndarray, shape (n_angles, n_indices, n_sizes)
        |S1|^2 and |S2|^2 [-].
    """
    squares = np.einsum("arms,arms->ams", sums.plus, sums.plus)
    squares += np.einsum("arms,arms->ams", sums.minus, sums.minus)
    cross = 2 * np.einsum("arms,arms->ams", sums.plus, sums.minus)
    return (squares + cross) / 4, (squares - cross) / 4
