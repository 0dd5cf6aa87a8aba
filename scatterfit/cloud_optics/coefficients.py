"""Coefficients a_n and b_n of the Lorenz-Mie series, term by term for many sizes at once.

Convention: time factor exp(-i omega t), relative index m = n + ik (k > 0 absorbs), coefficients
as Bohren and Huffman define them. Every step of a recurrence is one NumPy operation on a row of
all sizes (and of several indices, which share the Bessel functions of the outside).
"""

from collections.abc import Iterator

import numpy as np

FULL_TERMS = 6.0
"""Series to x + 6 x^(1/3) + 2 terms: complete to 1e-12, narrow resonances included [-]."""


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


def coefficient_rows(
    x: np.ndarray, m: np.ndarray, terms: int, resolution: np.ndarray | None = None
) -> Iterator[tuple[int, np.ndarray, np.ndarray | None]]:
    """Yield coefficients from the last term to the first.

    That is the direction in which the logarithmic derivative D of the inside is stable, so that it
    needs no storage.

    Parameters
    ----------
    x : ndarray, shape (n_sizes,)
        Ascending size parameters that differ by little (see `series.size_blocks`) [-].
    m : ndarray, shape (n_indices,)
        Relative indices; a real array takes the faster path [-].
    terms : int
        Number of terms.
    resolution : ndarray, shape (n_sizes,), optional
        Widths to which narrower resonances are widened [-].

    Yields
    ------
    n : int
        Number of the term.
    rows : ndarray, shape (2, 2, n_indices, n_sizes)
        a_n and b_n, real and imaginary part [-]. Overwritten in the next step.
    apart : ndarray, shape (2, n_indices, n_sizes), or None
        |a_n|^2 and |b_n|^2 lost to the widening [-]; ``None`` where no resonance is narrow.

    Notes
    -----
    With p = D psi_n / m - psi_n' and q the same of chi_n, a_n = p / (p - i q); b_n has m D instead
    of D / m [1]_.

    A resonance of half width w in x is a_n = w / (w - i (x - x0)). Its area in a linear sum,
    pi w, does not change when the w of the denominator becomes W = (w^4 + resolution^4)^(1/4);
    its area in |a_n|^2 shrinks to w/W of what it was, and |a_n|^2 (W/w - 1) is handed back apart,
    without the phase that it no longer has with the other terms. At a resonance p = -1/chi_n by
    the Wronskian, and 1/w = (m^2 - 1) chi_n^2 for b_n,
    (1 - m^-2) (n(n+1) chi_n^2 / x^2 + m^2 chi_n'^2) for a_n; absorption adds x k / n to it.

    References
    ----------
    .. [1] C. F. Bohren and D. R. Huffman, "Absorption and Scattering of Light by Small
       Particles", Wiley (1983), equation 4.88, with xi = psi - i chi.

    Examples
    --------
    The first coefficients of x = 3, m = 1.33 (in print: 0.51631 - 0.49973 i and 0.73767 -
    0.43990 i):

    >>> for n, rows, _ in coefficient_rows(np.array([3.0]), np.array([1.33]), 11):
    ...     pass
    >>> n, rows[:, :, 0, 0]
    (1, array([[ 0.51631, -0.49973],
           [ 0.73767, -0.43990]]))
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
