"""When a seed becomes a droplet: Kelvin, Koehler, Fletcher."""

import numpy as np

from scatterfit.constants import BOLTZMANN, GAS_CONSTANT
from scatterfit.errors import InvalidInputError

FLETCHER_PREFACTOR = 1e29
"""Kinetic prefactor of heterogeneous nucleation per area of seed [1/(m^2 s)].

1e25 1/(cm2 s) in N. H. Fletcher, J. Chem. Phys. 29 (1958) 572; an order of magnitude.
"""

_HALVINGS = 200


def kelvin_length(temperature, liquid):
    r"""Return the length over which curvature acts, :math:`A = 4 \sigma M / (\rho R T)`.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    liquid : tuple of array_like
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol].

    Returns
    -------
    length : ndarray, shape (...)
        The vapour pressure of a droplet of diameter d is raised by exp(A / d) [m].

    References
    ----------
    .. [1] W. Thomson, "On the equilibrium of vapour at a curved surface of liquid",
       Philosophical Magazine 42 (1871) 448-452. doi:10.1080/14786447108640606

    Examples
    --------
    Water at 5 degrees Celsius: a droplet of 10 nm radius needs S = 1.12 (Wallace and Hobbs 2006):

    >>> length = kelvin_length(278.15, (74.94e-3, 999.97, 18.015e-3))
    >>> round(float(np.exp(length / 20e-9)), 2)
    1.12
    """
    tension, density, molar_mass = liquid
    return 4.0 * tension * molar_mass / (density * GAS_CONSTANT * np.asarray(temperature))


def equivalent_diameter(saturation_ratio, temperature, liquid):
    r"""Return the diameter of a pure droplet in equilibrium, :math:`A / \ln S`.

    Parameters
    ----------
    saturation_ratio : array_like, shape (...)
        Over the flat liquid, > 1 [-].
    temperature : array_like, shape (...)
        Temperature [K].
    liquid : tuple of array_like
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol].

    Returns
    -------
    diameter : ndarray, shape (...)
        Kelvin-equivalent diameter [m].

    Examples
    --------
    >>> liquid = (74.94e-3, 999.97, 18.015e-3)
    >>> float(equivalent_diameter(1.12385, 278.15, liquid)) * 1e9
    20.00
    """
    return kelvin_length(temperature, liquid) / np.log(saturation_ratio)


def koehler_maximum(diameter, kappa, length):
    r"""Return the supersaturation at which a soluble seed activates.

    The maximum over D of

    .. math:: S(D) = \frac{D^3 - d^3}{D^3 - d^3 (1 - \kappa)} \exp(A / D)

    Parameters
    ----------
    diameter : float
        Of the dry seed d, > 0 [m].
    kappa : float
        Hygroscopicity, >= 0; zero is a wettable, insoluble seed [-].
    length : float
        Kelvin length A [m].

    Returns
    -------
    ratio : float
        Critical saturation ratio [-].
    droplet : float
        Diameter of the droplet there [m].

    References
    ----------
    .. [1] M. D. Petters, S. M. Kreidenweis, "A single parameter representation of hygroscopic
       growth and cloud condensation nucleus activity", Atmos. Chem. Phys. 7 (2007) 1961-1971.
       doi:10.5194/acp-7-1961-2007

    Examples
    --------
    Sodium chloride of 100 nm, about 0.13 percent in Seinfeld and Pandis 2006, chapter 17:

    >>> round(koehler_maximum(100e-9, 1.28, 2.155e-9)[0], 4)
    1.0012
    """
    if kappa == 0:
        return float(np.exp(length / diameter)), float(diameter)
    # The slope of ln S: zero at the maximum, positive below, negative above.
    low, high = 0.0, 1.0
    while _koehler_slope(diameter * (1.0 + high), diameter, kappa, length) > 0:
        high *= 2.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        rising = _koehler_slope(diameter * (1.0 + middle), diameter, kappa, length) > 0
        low, high = (middle, high) if rising else (low, middle)
    droplet = diameter * (1.0 + high)
    # A nearly insoluble seed may have its maximum at its own size.
    excess = (droplet / diameter) ** 3 - 1.0
    ratio = float(excess / (excess + kappa) * np.exp(length / droplet))
    return ratio, float(droplet)


def _koehler_slope(droplet, diameter, kappa, length):
    """Return d ln S / dD times D."""
    volume = (droplet / diameter) ** 3
    excess = volume - 1.0
    if excess <= 0:
        return np.inf
    return 3.0 * volume * kappa / (excess * (excess + kappa)) - length / droplet


def kappa_for(diameter, ratio, length):
    """Return the hygroscopicity that makes a seed activate at a supersaturation.

    Parameters
    ----------
    diameter : float
        Of the dry seed [m].
    ratio : float
        Critical saturation ratio, > 1 [-].
    length : float
        Kelvin length [m].

    Returns
    -------
    kappa : float or None
        Hygroscopicity [-]; ``None`` where the ratio is above the Kelvin limit of the seed or too
        low for any solute (kappa above 10).

    Examples
    --------
    >>> kappa = kappa_for(100e-9, koehler_maximum(100e-9, 0.61, 2.155e-9)[0], 2.155e-9)
    >>> round(kappa, 3)
    0.61
    """
    if not 1.0 < ratio < np.exp(length / diameter) or koehler_maximum(diameter, 10.0,
                                                                      length)[0] > ratio:
        return None
    low, high = -12.0, 1.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        above = koehler_maximum(diameter, 10.0**middle, length)[0] > ratio
        low, high = (middle, high) if above else (low, middle)
    return float(10.0 ** (0.5 * (low + high)))


def fletcher_factor(cosine, size):
    r"""Return the part of the homogeneous barrier that is left on a spherical seed.

    With :math:`g^2 = 1 + x^2 - 2 m x`,

    .. math:: 2 f = 1 + \left( \frac{1 - m x}{g} \right)^3
        + x^3 \left( 2 - 3 \frac{x - m}{g} + \left( \frac{x - m}{g} \right)^3 \right)
        + 3 m x^2 \left( \frac{x - m}{g} - 1 \right)

    Parameters
    ----------
    cosine : array_like, shape (...)
        Cosine of the contact angle m, from -1 to 1 [-].
    size : array_like, shape (...)
        Radius of the seed over that of the critical cluster x, >= 0 [-].

    Returns
    -------
    factor : ndarray, shape (...)
        Between 0 and 1 [-].

    Raises
    ------
    InvalidInputError
        If an argument is outside its range.

    Notes
    -----
    For x > m the differences are written with :math:`1 - (x - m)/g = (1 - m^2) / (g (g + x - m))`,
    which loses no digits; as printed, the formula is wrong by percents from x of 1e4 on. A seed
    much larger than the cluster is a flat surface, :math:`f = (2 + m)(1 - m)^2 / 4`.

    References
    ----------
    .. [1] N. H. Fletcher, "Size effect in heterogeneous nucleation", J. Chem. Phys. 29 (1958)
       572-576. doi:10.1063/1.1744540

    Examples
    --------
    >>> float(fletcher_factor(0.5, 1.0)), float(fletcher_factor(0.5, 1e9))
    (0.5, 0.15625)
    """
    m, x = np.broadcast_arrays(np.asarray(cosine, dtype=float), np.asarray(size, dtype=float))
    if not (np.all(np.abs(m) <= 1) and np.all(x >= 0)):
        message = "the cosine of a contact angle is between -1 and 1, the size is not negative"
        raise InvalidInputError(message)
    flat = x > 1e8
    x = np.where(flat, 1.0, x)
    g = np.maximum(np.sqrt(np.maximum(1.0 + x**2 - 2.0 * m * x, 0.0)), 1e-150)
    c = np.clip((x - m) / g, -1.0, 1.0)
    short = np.where(x > m, (1.0 - m**2) / (g * np.maximum(g + x - m, 1e-150)), 1.0 - c)
    cap = np.clip((1.0 - m * x) / g, -1.0, 1.0) ** 3
    twice = 1.0 + cap + x**3 * short**2 * (3.0 - short) - 3.0 * m * x**2 * short
    return np.clip(np.where(flat, 0.25 * (2.0 + m) * (1.0 - m) ** 2, 0.5 * twice), 0.0, 1.0)


def contact_angle(ratio, diameter, duration, temperature, liquid):
    r"""Return the contact angle for which half of the seeds activate.

    Half are activated when one nucleation per seed is expected ln 2 times,
    :math:`\pi d^2 K t \exp(-f \Delta G^* / k T) = \ln 2` with K of ``FLETCHER_PREFACTOR``.

    Parameters
    ----------
    ratio : float
        Saturation ratio at half activation [-].
    diameter : float
        Of the seed [m].
    duration : float
        For which it holds [s].
    temperature : float
        Temperature [K].
    liquid : tuple of float
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol].

    Returns
    -------
    angle : float or None
        Contact angle [rad]; ``None`` where no angle would do: homogeneous nucleation would come
        first, or the ratio is not above the Kelvin limit of the seed.
    factor : float or None
        Part of the homogeneous barrier that is left [-].

    Examples
    --------
    >>> water = (75.6e-3, 999.8, 18.015e-3)
    >>> angle, factor = contact_angle(1.5, 50e-9, 1e-3, 273.15, water)
    >>> round(float(np.degrees(angle)), 1), round(factor, 4)
    (37.7, 0.0378)
    """
    length = float(kelvin_length(temperature, liquid))
    if not ratio > np.exp(length / diameter):
        return None, None
    tension = float(liquid[0])
    cluster = 0.5 * length / np.log(ratio)
    barrier = 4.0 * np.pi * cluster**2 * tension / (3.0 * BOLTZMANN * temperature)
    wanted = np.log(np.pi * diameter**2 * FLETCHER_PREFACTOR * duration / np.log(2.0)) / barrier
    if not 0.0 < wanted < 1.0:
        return None, None
    low, high = -1.0, 1.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        above = float(fletcher_factor(middle, 0.5 * diameter / cluster)) > wanted
        low, high = (middle, high) if above else (low, middle)
    return float(np.arccos(0.5 * (low + high))), float(wanted)

