"""Quantiles for intervals, in closed form: scipy's would double the start-up of a command."""

from statistics import NormalDist

import numpy as np

from scatterfit.errors import InvalidInputError

_NORMAL = NormalDist()


def student_quantile(probability, freedom):
    r"""Return a quantile of Student's distribution.

    Parameters
    ----------
    probability : float
        Between 0 and 1, both excluded [-].
    freedom : float
        Degrees of freedom, at least 1; infinite gives the normal distribution [-].

    Returns
    -------
    quantile : float
        The value that is not exceeded with this probability [-].

    Raises
    ------
    InvalidInputError
        If there is less than one degree of freedom.

    Notes
    -----
    Exact for one and two degrees of freedom; beyond, the expansion in 1/freedom is good to 0.2
    percent at three and to 1e-4 from six on, at probabilities between 0.025 and 0.975.

    References
    ----------
    .. [1] M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, NBS 1964, eq. 26.7.5.

    Examples
    --------
    Table 26.10 of the reference has 2.228 for 10 degrees of freedom:

    >>> round(student_quantile(0.975, 10), 3), round(student_quantile(0.975, 1), 3)
    (2.228, 12.706)
    """
    if not freedom >= 1:
        message = f"a quantile needs a degree of freedom, but there are {freedom:g}"
        raise InvalidInputError(message)
    if freedom < 2:
        return float(np.tan(np.pi * (probability - 0.5)))
    if freedom < 3:
        centred = 2.0 * probability - 1.0
        return float(centred * np.sqrt(2.0 / (1.0 - centred**2)))
    x = _NORMAL.inv_cdf(probability)
    terms = (
        (x**3 + x) / 4,
        (5 * x**5 + 16 * x**3 + 3 * x) / 96,
        (3 * x**7 + 19 * x**5 + 17 * x**3 - 15 * x) / 384,
        (79 * x**9 + 776 * x**7 + 1482 * x**5 - 1920 * x**3 - 945 * x) / 92160,
    )
    return x + sum(term / freedom**power for power, term in enumerate(terms, start=1))


def chi_square_quantile(probability, freedom):
    """Return a quantile of the chi-square distribution.

    Parameters
    ----------
    probability : float
        Between 0 and 1, both excluded [-].
    freedom : float
        Degrees of freedom, > 0 [-].

    Returns
    -------
    quantile : float
        The value that is not exceeded with this probability [-].

    References
    ----------
    .. [1] E. B. Wilson, M. M. Hilferty, "The distribution of chi-square", Proc. Natl. Acad. Sci.
       USA 17 (1931) 684-688. doi:10.1073/pnas.17.12.684

    Examples
    --------
    Tables have 3.247 and 20.483 for 10 degrees of freedom:

    >>> round(chi_square_quantile(0.025, 10), 1), round(chi_square_quantile(0.975, 10), 1)
    (3.2, 20.5)
    """
    width = 2.0 / (9.0 * freedom)
    root = 1.0 - width + _NORMAL.inv_cdf(probability) * np.sqrt(width)
    return float(freedom * max(root, 0.0) ** 3)


def normal_quantile(probability):
    """Return a quantile of the standard normal distribution.

    Parameters
    ----------
    probability : float
        Between 0 and 1, both excluded [-].

    Returns
    -------
    quantile : float
        The value that is not exceeded with this probability [-].

    Examples
    --------
    >>> round(normal_quantile(0.975), 4)
    1.96
    """
    return _NORMAL.inv_cdf(probability)
