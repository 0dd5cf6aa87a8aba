"""Light scattered by one droplet: the Lorenz-Mie series for many sizes and angles at once.

Convention: time factor exp(-i omega t), relative index m = n + ik (k > 0 absorbs), amplitudes as
Bohren and Huffman define them, so that for unpolarized light
dC_sca/dOmega = (|S1|^2 + |S2|^2) / (2 k^2) with k the wavenumber in the gas.

Sizes are sorted and worked through in blocks; within a block every step of a recurrence is one
NumPy operation on a row of all sizes (and of several indices, which share the Bessel functions of
the outside).
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from scatterfit.errors import InvalidInputError

FULL_TERMS = 6.0
"""Series to x + 6 x^(1/3) + 2 terms: complete to 1e-12, narrow resonances included [-]."""

_BLOCK = 2000
_BLOCK_RATIO = 1.2
_CHUNK = 32
_SERIAL_PRODUCT = 250_000


@dataclass(frozen=True)
class DropletLight:
    """Intensities and efficiencies of single droplets."""

    perpendicular: np.ndarray
    """|S1|^2, field perpendicular to the scattering plane, shape (n_angles, n_sizes) [-]."""
    parallel: np.ndarray
    """|S2|^2, field in the scattering plane, shape (n_angles, n_sizes) [-]."""
    extinction_efficiency: np.ndarray
    """Qext, shape (n_sizes,) [-]."""
    scattering_efficiency: np.ndarray
    """Qsca, shape (n_sizes,) [-]."""


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


def term_count(size_parameter: float, margin: float = FULL_TERMS) -> int:
    """Return how many terms of the series a size needs.

    Parameters
    ----------
    size_parameter : float
        Circumference over wavelength in the gas, > 0 [-].
    margin : float
        Factor of x^(1/3) beyond x; 6 is complete to 1e-12, 4.05 to about 1e-7 [-].

    Returns
    -------
    terms : int
        Number of terms, at least 3.

    References
    ----------
    .. [1] W. J. Wiscombe, "Improved Mie scattering algorithms", Applied Optics 19 (1980)
       1505-1509, for the form of the rule (with 4.05). doi:10.1364/AO.19.001505

    Examples
    --------
    >>> term_count(100.0)
    130
    """
    return max(3, int(np.ceil(size_parameter + margin * np.cbrt(size_parameter) + 2)))


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
        narrower than it are widened to it, their area kept [-].

    Returns
    -------
    sums : SeriesSums
        Amplitudes, the sums behind the two efficiencies and, with a resolution, the intensity
        that the widening took from the squares of the amplitudes.

    Notes
    -----
    Terms are visited from the last to the first, in the direction in which the logarithmic
    derivative is stable, so that it needs no storage; a chunk of coefficients is folded into the
    sums by a matrix product while it is still in the cache.

    A resonance of half width w in x is a_n = w / (w - i (x - x0)). Its area in a linear sum,
    pi w, does not change when the denominator's w becomes W = sqrt(w^2 + resolution^2); its area
    in |a_n|^2 shrinks to w/W of what it was, and |a_n|^2 (W/w - 1) is handed back apart, without
    the phase that it no longer has with the other terms. With the Wronskian of psi and chi,
    1/w = (m^2 - 1) chi_n^2 for b_n and (1 - m^-2) (n(n+1) chi_n^2 / x^2 + m^2 chi_n'^2) for a_n;
    absorption adds x k / n to the width that counts here.
    """
    shape = (2, relative_index.size, size_parameter.size)
    angular = np.vstack([matrix.plus[:, :terms], 2 * np.arange(1, terms + 1) + 1.0])
    plus, minus = np.zeros((angular.shape[0], *shape)), np.zeros((angular.shape[0] - 1, *shape))
    scattering = np.zeros(shape[1:])
    sums, differences = np.empty((_CHUNK, *shape)), np.empty((_CHUNK, *shape))
    lost = []
    filled = _CHUNK
    for n, (a, b), apart in _coefficient_rows(size_parameter, relative_index, terms, resolution):
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
        Changed in place, in the unit of the product.
    left : ndarray, shape (n, k)
        First factor, in any unit.
    right : ndarray, shape (k, m)
        Second factor, in any unit.

    Examples
    --------
    >>> total = np.ones((1, 2))
    >>> add_product(total, np.array([[2.0]]), np.array([[1.0, 3.0]]))
    >>> total
    array([[3., 7.]])
    """
    columns = max(16, _SERIAL_PRODUCT // left.size)
    for start in range(0, right.shape[1], columns):
        part = slice(start, start + columns)
        total[:, part] += left @ right[:, part]


def _coefficient_rows(x, m, terms, resolution=None) -> Iterator[tuple]:
    """Yield (n, rows, apart) from the last term to the first.

    ``rows`` has the shape (a or b, real or imaginary, n_indices, n_sizes) and is overwritten in
    the next step. With p = D psi_n / m - psi_n', q the same of chi_n: a_n = p / (p - i q)
    (Bohren and Huffman 1983, equation 4.88, with xi = psi - i chi); b_n with m D instead of D / m.
    ``apart`` is |a_n|^2 and |b_n|^2 lost to the widening, or ``None`` where there is none: in
    terms n < x no resonance is narrow.
    """
    outside = _outside_functions(x, terms)
    factor = np.stack([1 / m, m])[:, None, :, None]
    inverse = 1 / (m[:, None] * x)
    log_derivative = _log_derivative_above(m, x, terms)
    rows = np.empty((2, 2, m.size, x.size))
    pq = np.empty((2, 2, m.size, x.size), dtype=m.dtype)
    step, scaled = np.empty_like(log_derivative), np.empty(pq.shape[1:], dtype=m.dtype)
    work = _real_coefficients if pq.dtype.kind == "f" else _complex_coefficients
    first_narrow = terms + 1 if resolution is None else int(x[0] + np.cbrt(x[0]))
    for n in range(terms, 0, -1):
        values, slopes = outside[n]
        np.multiply(log_derivative, values[:, None], out=scaled)
        np.multiply(factor, scaled, out=pq)
        pq -= slopes[:, None]
        denominator, apart = pq[:, 0], None
        if n >= first_narrow:
            widened, ratio = _widening(n, x, m, outside[n, :, 1], resolution)
            denominator = denominator + widened
        work(pq, denominator, rows)
        if n >= first_narrow:
            apart = ratio * (rows * rows).sum(axis=1)
        yield n, rows, apart
        np.multiply(inverse, n, out=step)
        log_derivative += step
        np.divide(1.0, log_derivative, out=log_derivative)
        np.subtract(step, log_derivative, out=log_derivative)


def _widening(n, x, m, chi, resolution):
    """Return what to add to p in the denominator, and W/w - 1; shape (2, n_indices, n_sizes).

    Indices come from a narrow lattice: one width, that of their mean, serves all.
    """
    index, absorption = m.real.mean(), m.imag.mean() / m.real.mean()
    value, slope = chi
    strength = np.empty((2, 1, x.size))
    strength[0, 0] = (1 - index**-2) * (n * (n + 1) * (value / x) ** 2 + (index * slope) ** 2)
    strength[1, 0] = (index**2 - 1) * value**2
    total = 1 / strength + x * absorption
    extra = np.sqrt(np.sqrt(total**4 + resolution**4)) - total
    extra[..., int(np.searchsorted(x + np.cbrt(x), n, side="right")) :] = 0.0
    return -extra * strength / value, extra / total


def _real_coefficients(pq, denominator, rows):
    """Write p / (denominator - i q) for real p and q."""
    p, q = pq[:, 0], pq[:, 1]
    weight = denominator * denominator
    weight += q * q
    np.divide(p, weight, out=weight)
    np.multiply(denominator, weight, out=rows[:, 0])
    np.multiply(q, weight, out=rows[:, 1])


def _complex_coefficients(pq, denominator, rows):
    """Write p / (denominator - i q) for complex p and q."""
    p, q = pq[:, 0], pq[:, 1]
    coefficient = p / (denominator - 1j * q)
    rows[:, 0], rows[:, 1] = coefficient.real, coefficient.imag


def _log_derivative_above(m, x, terms):
    """Return D_terms(m x), started far enough out that the start no longer matters.

    From max(N, |mx|) + 16 the recurrence has not settled for a real index (8e-5 at x = 100);
    z + 7.5 z^(1/3) + 10 is enough to 1e-13.
    """
    z = m[:, None] * x
    largest = max(float(np.abs(z[:, -1]).max()), float(x[-1]))
    inverse = 1 / z
    derivative = np.zeros_like(z)
    start = max(terms + 2, int(np.ceil(largest + 7.5 * np.cbrt(largest) + 10)))
    for n in range(start, terms, -1):
        step = n * inverse
        derivative += step
        np.subtract(step, 1 / derivative, out=derivative)
    return derivative


def _outside_functions(x, terms):
    """Return psi_n, chi_n and their derivatives, shape (terms + 1, 2, 2, n_sizes).

    Axes: order n, value or derivative, psi or chi, size. chi grows with n and is taken upwards;
    psi is taken upwards while n <= x, and beyond by the ratio psi_n / psi_(n-1), which is stable
    downwards.
    """
    inverse = 1 / x
    functions = np.empty((terms + 1, 2, 2, x.size))
    ratio = _psi_ratios(x, terms)
    functions[0, 0] = np.sin(x), np.cos(x)
    before = np.stack([np.cos(x), -np.sin(x)])
    over = np.empty_like(before)
    for n in range(1, terms + 1):
        last, (value, slope) = functions[n - 1, 0], functions[n]
        np.multiply((2 * n - 1) * inverse, last, out=value)
        value -= before
        small = slice(0, int(np.searchsorted(x, n)))
        np.multiply(ratio[n, small], last[0, small], out=value[0, small])
        np.multiply(n * inverse, value, out=over)
        np.subtract(last, over, out=slope)
        before = last
    return functions


def _psi_ratios(x, terms):
    """Return psi_n / psi_(n-1), shape (terms + 1, n_sizes); the first row is not used."""
    start = max(terms, int(np.ceil(x[-1] + 7.5 * np.cbrt(x[-1]) + 10)))
    inverse = 1 / x
    ratios = np.zeros((terms + 1, x.size))
    ratio = np.zeros_like(x)
    for n in range(start, int(x[0]), -1):
        ratio = 1 / ((2 * n + 1) * inverse - ratio)
        if n <= terms:
            ratios[n] = ratio
    return ratios


def amplitudes(size_parameter, relative_index, angle) -> tuple[np.ndarray, np.ndarray]:
    """Return the scattering amplitudes S1 and S2.

    Parameters
    ----------
    size_parameter : array_like, shape (n_sizes,)
        Circumference over wavelength in the gas, > 0, in any order [-].
    relative_index : complex
        Index of the droplet over that of the gas, n + ik with k >= 0 [-].
    angle : array_like, shape (n_angles,)
        Scattering angles, 0 is forward [rad].

    Returns
    -------
    perpendicular, parallel : ndarray, shape (n_angles, n_sizes)
        S1 and S2 [-].

    Raises
    ------
    InvalidInputError
        If a size or the index is out of range.

    References
    ----------
    .. [1] C. F. Bohren and D. R. Huffman, "Absorption and Scattering of Light by Small
       Particles", Wiley (1983), section 4.4.

    Examples
    --------
    Wiscombe's case x = 1, m = 1.33 - 1e-5 i at 90 degrees (his time factor is the conjugate):

    >>> s1, s2 = amplitudes([1.0], 1.33 + 1e-5j, [np.pi / 2])
    >>> s1.real, s1.imag
    (array([[0.02296081]]), array([[-0.1828349]]))
    """
    x, m, angle = _checked(size_parameter, relative_index, angle)
    plus = np.empty((angle.size, x.size), dtype=complex)
    minus = np.empty_like(plus)
    for columns, sums in _all_blocks(x, m, angle):
        plus[:, columns] = sums.plus[:, 0, 0] + 1j * sums.plus[:, 1, 0]
        minus[:, columns] = sums.minus[:, 0, 0] + 1j * sums.minus[:, 1, 0]
    return (plus + minus) / 2, (plus - minus) / 2


def scatter(size_parameter, relative_index, angle) -> DropletLight:
    """Return intensities at given angles and the efficiencies of single droplets.

    Parameters
    ----------
    size_parameter : array_like, shape (n_sizes,)
        Circumference over wavelength in the gas, > 0, in any order [-].
    relative_index : complex
        Index of the droplet over that of the gas, n + ik with k >= 0 [-].
    angle : array_like, shape (n_angles,)
        Scattering angles, 0 is forward [rad].

    Returns
    -------
    light : DropletLight
        |S1|^2, |S2|^2, Qext and Qsca.

    Raises
    ------
    InvalidInputError
        If a size or the index is out of range.

    Examples
    --------
    Bohren and Huffman's worked example (appendix A): Qext = 3.10543.

    >>> scatter([2 * np.pi * 0.525 / 0.6328], 1.55, [0.0]).extinction_efficiency
    array([3.10543])
    """
    x, m, angle = _checked(size_parameter, relative_index, angle)
    perpendicular = np.empty((angle.size, x.size))
    parallel = np.empty_like(perpendicular)
    efficiencies = np.empty((2, x.size))
    for columns, sums in _all_blocks(x, m, angle):
        i1, i2 = intensities(sums)
        perpendicular[:, columns], parallel[:, columns] = i1[:, 0], i2[:, 0]
        efficiencies[:, columns] = np.stack([sums.extinction[0], sums.scattering[0]])
    efficiencies *= 2 / x**2
    return DropletLight(perpendicular, parallel, *efficiencies)


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


def coefficients(size_parameter: float, relative_index: complex) -> tuple[np.ndarray, np.ndarray]:
    """Return the coefficients a_n and b_n of one droplet.

    Parameters
    ----------
    size_parameter : float
        Circumference over wavelength in the gas, > 0 [-].
    relative_index : complex
        Index of the droplet over that of the gas, n + ik with k >= 0 [-].

    Returns
    -------
    electric, magnetic : ndarray, shape (n_terms,)
        a_n and b_n for n = 1, 2, ... [-].

    Raises
    ------
    InvalidInputError
        If the size or the index is out of range.

    Examples
    --------
    Bohren and Huffman, table 4.1 (x = 3, m = 1.33 + 1e-8 i): a_1 = 0.51631 - 0.49973 i.

    >>> a, b = coefficients(3.0, 1.33 + 1e-8j)
    >>> a[0].real, a[0].imag
    (np.float64(0.51631), np.float64(-0.49973))
    """
    x, m, _ = _checked(size_parameter, relative_index, [0.0])
    terms = term_count(x[-1])
    found = np.empty((2, terms), dtype=complex)
    for n, rows, _ in _coefficient_rows(x, m, terms):
        found[:, n - 1] = rows[:, 0, 0, 0] + 1j * rows[:, 1, 0, 0]
    return found[0], found[1]


def _all_blocks(x, m, angle) -> Iterator[tuple[np.ndarray, SeriesSums]]:
    """Yield (positions in x, sums) for sizes in any order."""
    order = np.argsort(x, kind="stable")
    ordered = x[order]
    matrix = angular_matrix(angle, term_count(ordered[-1]))
    for block in size_blocks(ordered):
        sizes = ordered[block]
        yield order[block], series_sums(sizes, m, matrix, term_count(sizes[-1]))


def _checked(size_parameter, relative_index, angle):
    """Return the arguments as arrays (a real index as a real one), or refuse them."""
    x = np.atleast_1d(np.asarray(size_parameter, dtype=float))
    bad = np.flatnonzero(~(np.isfinite(x) & (x > 0)))
    if bad.size:
        message = f"size parameter must be positive, but element {bad[0]} is {x[bad[0]]:g}"
        raise InvalidInputError(message)
    m = complex(relative_index)
    if not (np.isfinite(m) and m.real > 0 and m.imag >= 0):
        message = f"relative index must be n + ik with n > 0 and k >= 0, but it is {m:g}"
        raise InvalidInputError(message)
    index = np.array([m]) if m.imag else np.array([m.real])
    return x, index, np.atleast_1d(np.asarray(angle, dtype=float))
