"""Light scattered by single droplets: amplitudes, intensities, efficiencies, coefficients.

Convention: time factor exp(-i omega t), relative index m = n + ik (k > 0 absorbs), amplitudes as
Bohren and Huffman define them, so that for unpolarized light
dC_sca/dOmega = (|S1|^2 + |S2|^2) / (2 k^2) with k the wavenumber in the gas.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from scatterfit.cloud_optics.coefficients import coefficient_rows, term_count
from scatterfit.cloud_optics.series import (
    SeriesSums,
    angular_matrix,
    intensities,
    series_sums,
    size_blocks,
)
from scatterfit.errors import InvalidInputError


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
    for n, rows, _ in coefficient_rows(x, m, terms):
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
