"""Ground floor: how vapours diffuse in carrier gases."""

import numpy as np

from scatterfit.constants import ICE_POINT, STANDARD_PRESSURE

FULLER_UNCERTAINTY = 0.06
"""Of a diffusion coefficient by Fuller's rule, standard [-]; high for organic vapours in air."""

FULLER_EXPONENT = 1.75
"""Of temperature in Fuller's rule [-]."""

_MEASURED = {
    ("water", "air"): (0.2178e-4, 1.81, 0.025, "Massman 1998"),
    ("water", "nitrogen"): (0.2178e-4, 1.81, 0.03, "as in air (Marrero and Mason 1972)"),
    ("water", "oxygen"): (0.2200e-4, 1.81, 0.04, "1.01 times air (Marrero and Mason 1972)"),
    (
        "water",
        "argon",
    ): (0.2144e-4, 1.81, 0.04, "water in nitrogen times the ratio of Fuller's rule"),
    (
        "water",
        "helium",
    ): (0.735e-4, 1.75, 0.05, "0.902 cm2/s at 307.1 K, Schwertz and Brow 1951, from memory"),
}
"""Diffusivity at 273.15 K and 101325 Pa [m^2/s], exponent, uncertainty [-], source."""


def reduced_mass(first, second):
    """Return the harmonic mean of two molar masses, as Fuller's rule takes it.

    Parameters
    ----------
    first : float
        Molar mass [kg/mol].
    second : float
        Molar mass [kg/mol].

    Returns
    -------
    mass : float
        2/(1/first + 1/second) [kg/mol].

    Examples
    --------
    >>> reduced_mass(0.02, 0.02)
    0.02
    """
    return 2.0 / (1.0 / first + 1.0 / second)


def fuller_diffusivity(vapour, gas):
    """Return a binary diffusion coefficient by the rule of Fuller, Schettler and Giddings.

    Parameters
    ----------
    vapour : Substance
        The vapour.
    gas : PureGas
        The gas.

    Returns
    -------
    diffusivity : float
        At 273.15 K and 101325 Pa; goes with T^1.75 [m^2/s].

    References
    ----------
    .. [1] E. N. Fuller, P. D. Schettler, J. C. Giddings, "A new method for prediction of binary
       gas-phase diffusion coefficients", Ind. Eng. Chem. 58 (1966) 18-27; constants of Poling
       et al. 2001, equation 11-4.4 and table 11-1.

    Examples
    --------
    Ethanol in air at 0 degrees Celsius (0.102 cm2/s in the International Critical Tables):

    >>> from scatterfit.matter import substance
    >>> from scatterfit.matter_gases import pure_gas
    >>> fuller_diffusivity(substance("ethanol"), pure_gas("air")) * 1e4
    0.105
    """
    mass = 1e3 * reduced_mass(vapour.molar_mass, gas.molar_mass)
    width = np.cbrt(vapour.diffusion_volume) + np.cbrt(gas.diffusion_volume)
    square_centimetres = (
        0.00143 * ICE_POINT**FULLER_EXPONENT / (1e-5 * STANDARD_PRESSURE * mass**0.5 * width**2)
    )
    return float(1e-4 * square_centimetres)


def binary_diffusivity(vapour, gas, water_mass):
    """Return the power law of one vapour in one gas: measured where it was, else by rule.

    Parameters
    ----------
    vapour : Substance
        The vapour; heavy water diffuses as water, slower by the root of the reduced mass.
    gas : PureGas
        The gas.
    water_mass : float
        Molar mass of ordinary water [kg/mol].

    Returns
    -------
    law : tuple
        Diffusivity at 273.15 K and 101325 Pa [m^2/s], exponent of temperature [-], relative
        standard uncertainty [-], source.

    Examples
    --------
    >>> from scatterfit.matter import substance
    >>> from scatterfit.matter_gases import pure_gas
    >>> binary_diffusivity(substance("water"), pure_gas("air"), 0.018)[:2]
    (2.178e-05, 1.81)
    """
    kind = "water" if vapour.name == "heavy water" else vapour.name
    if (kind, gas.name) not in _MEASURED:
        source = "Fuller, Schettler and Giddings 1966"
        return fuller_diffusivity(vapour, gas), FULLER_EXPONENT, FULLER_UNCERTAINTY, source
    value, exponent, uncertainty, source = _MEASURED[kind, gas.name]
    if kind != vapour.name:
        light = reduced_mass(water_mass, gas.molar_mass)
        value *= (light / reduced_mass(vapour.molar_mass, gas.molar_mass)) ** 0.5
        source = f"water ({source}) over the root of the reduced mass"
    return value, exponent, uncertainty, source


def blanc_diffusivity(temperature, *, laws):
    r"""Return the diffusivity of a dilute vapour in a gas mixture by Blanc's law.

    .. math:: 1/D = \sum x_i / D_i, \quad D_i = D_{0,i} (T/273.15)^{s_i}

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    laws : tuple
        Mole fraction [-], diffusivity at 273.15 K [m^2/s] and exponent [-] of each gas.

    Returns
    -------
    diffusivity : ndarray, shape (...)
        Diffusivity at the pressure of the laws [m^2/s].

    Examples
    --------
    >>> float(blanc_diffusivity(273.15, laws=((0.5, 1e-5, 1.8), (0.5, 3e-5, 1.8)))) * 1e5
    1.50
    """
    log_ratio = np.log(temperature / ICE_POINT)
    if len(laws) == 1:
        ((_, value, exponent),) = laws
        return value * np.exp(exponent * log_ratio)
    slowness = sum(
        fraction / value * np.exp(-exponent * log_ratio) for fraction, value, exponent in laws
    )
    return 1.0 / slowness
