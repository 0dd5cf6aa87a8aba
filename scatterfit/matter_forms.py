"""Ground floor: the equation forms that published property correlations share."""

import numpy as np

from scatterfit.constants import GAS_CONSTANT

REFERENCE_TEMPERATURE = 300.0
"""Where ``curved_power`` takes its leading coefficient [K]."""

SODIUM_LINE = 589.3e-9
"""Wavelength of handbook refractive indices [m]."""


def constant(temperature, *, value):
    """Return one value for every temperature.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    value : float
        The value, in any unit [-].

    Returns
    -------
    value : ndarray, shape (...)
        The same value everywhere, in its own unit [-].

    Examples
    --------
    >>> constant(np.array([250.0, 300.0]), value=998.0)
    array([998., 998.])
    """
    return value + 0.0 * temperature


def constant_index(wavelength, temperature, *, value):
    """Return one refractive index for every wavelength and temperature.

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength [m].
    temperature : array_like, shape (...)
        Temperature [K].
    value : complex
        Refractive index against vacuum, n + ik [-].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        The same value everywhere [-].

    Examples
    --------
    >>> constant_index(532e-9, np.array([250.0, 300.0]), value=1.39)
    array([1.39, 1.39])
    """
    return value + 0.0 * (wavelength + temperature)


def anchored(temperature, *, function, value, anchor):
    """Return a correlation scaled so that it passes through a stated value.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    function : callable
        The correlation whose dependence on temperature is kept.
    value : float
        What it shall be at the anchor, in its own unit [-].
    anchor : float
        Temperature of the stated value [K].

    Returns
    -------
    value : ndarray, shape (...)
        Scaled correlation, in its own unit [-].

    Examples
    --------
    >>> float(anchored(600.0, function=np.sqrt, value=2.0, anchor=150.0))
    4.0
    """
    return function(temperature) * (value / float(function(np.float64(anchor))))


def polynomial(temperature, *, coefficients, scale=1.0, shift=0.0):
    """Return a polynomial in temperature, coefficients in ascending order.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    coefficients : tuple of float
        Ascending coefficients, in the unit of the result over powers of kelvin [-].
    scale : float
        Factor on the sum [-].
    shift : float
        Origin of the temperature [K].

    Returns
    -------
    value : ndarray, shape (...)
        The polynomial, in the unit of the scale [-].

    Examples
    --------
    >>> float(polynomial(2.0, coefficients=(1.0, 2.0, 3.0)))
    17.0
    """
    reduced = temperature - shift
    total = coefficients[-1] + 0.0 * reduced
    for coefficient in coefficients[-2::-1]:
        total = total * reduced + coefficient
    return scale * total


def curved_power(temperature, *, value, exponent, curvature=0.0):
    r"""Return a power law whose exponent drifts: dilute-gas transport over a wide range.

    .. math:: v (T/300)^{b + c \ln (T/300)}

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    value : float
        Value at 300 K, in the unit of the result [-].
    exponent : float
        Slope b in the logarithms at 300 K [-].
    curvature : float
        Half the curvature in the logarithms, c [-].

    Returns
    -------
    value : ndarray, shape (...)
        The property, in the unit of ``value`` [-].

    Notes
    -----
    Positive and smooth at every temperature; fits reference conductivities and viscosities of
    gases between 150 and 340 K to 0.1 % or better.

    Examples
    --------
    >>> float(curved_power(1200.0, value=2.0, exponent=0.5))
    4.0
    """
    log_ratio = np.log(temperature / REFERENCE_TEMPERATURE)
    return value * np.exp(log_ratio * (exponent + curvature * log_ratio))


def wagner_pressure(temperature, *, coefficients, critical_temperature, critical_pressure):
    r"""Return a saturation pressure of Wagner's 2.5-5 form.

    .. math:: \ln (p/p_c) = (T_c/T) (A t + B t^{1.5} + C t^{2.5} + D t^5), \quad t = 1 - T/T_c

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    coefficients : tuple of float
        A, B, C, D [-].
    critical_temperature : float
        [K].
    critical_pressure : float
        [Pa].

    Returns
    -------
    pressure : ndarray, shape (...)
        Saturation pressure [Pa]; the critical pressure above the critical temperature.

    References
    ----------
    .. [1] B. E. Poling, J. M. Prausnitz, J. P. O'Connell, "The Properties of Gases and Liquids",
       5th ed., McGraw-Hill 2001, chapter 7 and appendix A.

    Examples
    --------
    Ethanol at 20 degrees Celsius:

    >>> ethanol = (-8.68587, 1.17831, -4.8762, 1.588)
    >>> float(wagner_pressure(293.15, coefficients=ethanol, critical_temperature=513.92,
    ...                       critical_pressure=6132000.0))
    5861.
    """
    a, b, c, d = coefficients
    t = np.maximum(1.0 - temperature / critical_temperature, 0.0)
    root = np.sqrt(t)
    series = t * (a + b * root + t * (c * root + d * t * t * t))
    return critical_pressure * np.exp(series * (critical_temperature / temperature))


def wagner_latent_heat(temperature, *, coefficients, critical_temperature):
    """Return R T^2 d(ln p)/dT of ``wagner_pressure``.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    coefficients : tuple of float
        A, B, C, D of the pressure [-].
    critical_temperature : float
        [K].

    Returns
    -------
    latent_heat : ndarray, shape (...)
        Latent heat with an ideal vapour and a liquid of no volume [J/mol].

    Examples
    --------
    Ethanol at 25 degrees Celsius (42.3 kJ/mol measured, with the vapour not quite ideal):

    >>> ethanol = (-8.68587, 1.17831, -4.8762, 1.588)
    >>> float(wagner_latent_heat(298.15, coefficients=ethanol, critical_temperature=513.92)) / 1e3
    42.8
    """
    a, b, c, d = coefficients
    t = np.maximum(1.0 - temperature / critical_temperature, 0.0)
    root = np.sqrt(t)
    series = t * (a + b * root + t * (c * root + d * t * t * t))
    slope = a + 1.5 * b * root + t * (2.5 * c * root + 5.0 * d * t * t * t)
    return -GAS_CONSTANT * (critical_temperature * series + temperature * slope)


def rackett_density(temperature, *, coefficients, molar_mass):
    r"""Return a liquid density of the modified Rackett form (DIPPR equation 105).

    .. math:: \rho = M C_1 / C_2^{1 + (1 - T/C_3)^{C_4}}

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    coefficients : tuple of float
        C1 [mol/m^3], C2 [-], C3 [K], C4 [-].
    molar_mass : float
        [kg/mol].

    Returns
    -------
    density : ndarray, shape (...)
        Density of the saturated liquid [kg/m^3].

    Examples
    --------
    1-propanol at 20 degrees Celsius:

    >>> propanol = (1245.7, 0.27281, 536.8, 0.23994)
    >>> float(rackett_density(293.15, coefficients=propanol, molar_mass=0.060095))
    803.8
    """
    c1, c2, c3, c4 = coefficients
    t = np.maximum(1.0 - temperature / c3, 0.0)
    return (molar_mass * c1) * np.exp(-np.log(c2) * (1.0 + t**c4))


def guggenheim_tension(temperature, *, scale, exponent, correction=0.0, critical_temperature):
    r"""Return a surface tension that vanishes at the critical point.

    .. math:: \sigma = s t^b (1 + c t), \quad t = 1 - T/T_c

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    scale : float
        s [N/m].
    exponent : float
        b [-].
    correction : float
        c [-].
    critical_temperature : float
        [K].

    Returns
    -------
    surface_tension : ndarray, shape (...)
        Surface tension [N/m].

    Examples
    --------
    Water at 20 degrees Celsius (IAPWS R1-76: 72.74 mN/m):

    >>> float(guggenheim_tension(293.15, scale=0.2358, exponent=1.256, correction=-0.625,
    ...                          critical_temperature=647.096)) * 1e3
    72.74
    """
    t = np.maximum(1.0 - temperature / critical_temperature, 0.0)
    return scale * t**exponent * (1.0 + correction * t)


def sellmeier(wavelength, *, terms):
    r"""Return a refractive index of Sellmeier's form.

    .. math:: n^2 = 1 + \sum b \lambda^2/(\lambda^2 - c)

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength [m].
    terms : tuple of tuple of float
        Pairs b [-] and c [um^2].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        Refractive index [-].

    Examples
    --------
    1-butanol at 22 degrees Celsius, Chang et al. 2024:

    >>> float(sellmeier(589.3e-9, terms=((0.9314, 0.0959**2), (0.0137, 2.97**2))))
    1.3986
    """
    square = (wavelength * 1e6) ** 2
    return np.sqrt(1.0 + sum(b * square / (square - c) for b, c in terms))


def cauchy(wavelength, *, terms):
    r"""Return a refractive index as a sum of powers of the wavelength.

    .. math:: n = \sum b \lambda^c

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength [m].
    terms : tuple of tuple of float
        Pairs b and c, for a wavelength in micrometres [-].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        Refractive index [-].

    Examples
    --------
    Ethanol at 20 degrees Celsius, Rheims et al. 1997:

    >>> float(cauchy(589.3e-9, terms=((1.35265, 0), (0.00306, -2), (0.00002, -4))))
    1.36163
    """
    micrometres = wavelength * 1e6
    return sum(b * micrometres**c for b, c in terms)


def handbook_index(wavelength, temperature, *, shape, level, slope, level_temperature):
    """Return a handbook index n_D carried to other wavelengths and temperatures.

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength [m].
    temperature : array_like, shape (...)
        Temperature [K].
    shape : callable
        Published dispersion, vacuum wavelength [m] to index; only its shape is used.
    level : float
        Handbook index at 589.3 nm [-].
    slope : float
        Change of the index with temperature [1/K].
    level_temperature : float
        Temperature of the handbook index [K].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        Refractive index [-].

    Notes
    -----
    The dispersion formulas of different authors agree in shape to 1e-4 or better over the visible
    but differ in level by up to 1.4e-3, more than handbook values do.

    Examples
    --------
    >>> float(handbook_index(589.3e-9, 283.15, shape=np.sqrt, level=1.385, slope=-4e-4,
    ...                      level_temperature=293.15))
    1.389
    """
    dispersion = shape(wavelength) - float(shape(SODIUM_LINE))
    return level + dispersion + slope * (temperature - level_temperature)
