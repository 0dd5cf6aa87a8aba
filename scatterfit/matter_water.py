"""Ground floor: water, supercooled to 230 K."""

from functools import partial

import numpy as np

from scatterfit.constants import GAS_CONSTANT, ICE_POINT
from scatterfit.matter_forms import curved_power, guggenheim_tension, polynomial
from scatterfit.matter_records import Property, RefractiveIndex, properties_over
from scatterfit.matter_substance import Substance

WATER_MOLAR_MASS = 18.015268e-3
"""[kg/mol], IAPWS-95."""

STRUCTURE_DENSITY = 80.0
"""How much lighter than normal the open structure of deeply supercooled water is [kg/m^3]."""

_DENSITY_SERIES = (999.8645, 6.858948, -91.88767, 95.10014, -81.42752, 30.07377)
_DENSITY_STEP = (224.1039, 5.417401)
_HEAT_SERIES = (4227.58, -225.95, 231.804)
_HEAT_STEP = (3000.0, 233.896, 5.84539)
_R9_97 = (
    0.244257733,
    9.74634476e-3,
    -3.73234996e-3,
    2.68678472e-4,
    1.58920570e-3,
    2.45934259e-3,
    0.900704920,
    -1.66626219e-2,
)
_R9_97_ULTRAVIOLET = 0.2292020
_R9_97_INFRARED = 5.432937


def water_saturation_pressure(temperature):
    """Return the vapour pressure of supercooled and normal liquid water.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature, valid for 123 to 332 K [K].

    Returns
    -------
    pressure : ndarray, shape (...)
        Saturation pressure over the liquid [Pa].

    References
    ----------
    .. [1] D. M. Murphy, T. Koop, "Review of the vapour pressures of ice and supercooled water for
       atmospheric applications", Q. J. R. Meteorol. Soc. 131 (2005) 1539-1565, equation 10.
       doi:10.1256/qj.04.94

    Examples
    --------
    The authors' table C1 gives 37.667 Pa at 240 K and 3536.8 Pa at 300 K:

    >>> water_saturation_pressure(np.array([240.0, 300.0]))
    array([  37.667, 3536.8])
    """
    inverse, log = 1.0 / temperature, np.log(temperature)
    cold = 53.878 - 1331.22 * inverse - 9.44523 * log + 0.014025 * temperature
    switch = np.tanh(0.0415 * (temperature - 218.8))
    warm = 54.842763 - 6763.22 * inverse - 4.210 * log + 0.000367 * temperature
    return np.exp(warm + switch * cold)


def water_latent_heat(temperature):
    """Return R T^2 d(ln p)/dT of ``water_saturation_pressure``.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature, valid for 123 to 332 K [K].

    Returns
    -------
    latent_heat : ndarray, shape (...)
        Latent heat of vaporization with an ideal vapour and a liquid of no volume [J/mol].

    Examples
    --------
    The IAPWS formulation gives 45.05 kJ/mol at 0 degrees Celsius:

    >>> float(water_latent_heat(273.15)) / 1e3
    45.08
    """
    log = np.log(temperature)
    cold = 53.878 - 1331.22 / temperature - 9.44523 * log + 0.014025 * temperature
    switch = np.tanh(0.0415 * (temperature - 218.8))
    square = temperature * temperature
    warm_slope = 6763.22 - 4.210 * temperature + 0.000367 * square
    cold_slope = 1331.22 - 9.44523 * temperature + 0.014025 * square
    switch_slope = 0.0415 * (1.0 - switch * switch) * square
    return GAS_CONSTANT * (warm_slope + switch * cold_slope + switch_slope * cold)


def water_density(temperature):
    """Return the density of liquid water at atmospheric pressure, supercooled to 230 K.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature, valid for 230 to 373 K [K].

    Returns
    -------
    density : ndarray, shape (...)
        Density [kg/m^3].

    Notes
    -----
    A polynomial less a step for the open structure of deeply supercooled water, fitted to IAPWS
    G12-15 below 275 K and IAPWS-95 above, at 101325 Pa. It leaves at most 2e-5 between 255 and
    310 K, 2e-4 to 373 K, 5e-4 down to 232 K and 4e-3 at 230 K, beyond the guideline's own range.

    References
    ----------
    .. [1] IAPWS G12-15, "Guideline on Thermodynamic Properties of Supercooled Water" (2015).
    .. [2] IAPWS R6-95(2018), "Revised Release on the IAPWS Formulation 1995".

    Examples
    --------
    The guideline gives 999.842 kg/m^3 at 273.15 K and 968.100 kg/m^3 at 235.15 K:

    >>> water_density(np.array([235.15, 273.15]))
    array([967.6 , 999.86])
    """
    centre, width = _DENSITY_STEP
    series = polynomial(0.01 * temperature, coefficients=_DENSITY_SERIES, shift=0.01 * ICE_POINT)
    # 1/(1 + exp u) as a tanh: no overflow at any temperature
    step = 0.5 - 0.5 * np.tanh((0.5 / width) * (temperature - centre))
    return series - STRUCTURE_DENSITY * step


def water_heat_capacity(temperature):
    """Return the molar heat capacity of liquid water at atmospheric pressure.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature, valid for 235 to 373 K [K].

    Returns
    -------
    heat_capacity : ndarray, shape (...)
        Heat capacity at constant pressure [J/(mol K)].

    Notes
    -----
    Fitted as ``water_density`` was: within 0.5 percent from 245 to 373 K, 6 percent at 235 K, where
    the guideline rises steeply.

    Examples
    --------
    IAPWS G12-15 gives 4218.3 J/(kg K) at 273.15 K:

    >>> float(water_heat_capacity(273.15)) / WATER_MOLAR_MASS
    4231.
    """
    height, centre, width = _HEAT_STEP
    series = polynomial(0.01 * temperature, coefficients=_HEAT_SERIES, shift=0.01 * ICE_POINT)
    step = 0.5 - 0.5 * np.tanh((0.5 / width) * (temperature - centre))
    return WATER_MOLAR_MASS * (series + height * step)


def water_refractive_index(wavelength, temperature, density):
    r"""Return the refractive index of water of a given density against vacuum.

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength, valid for 0.2 to 1.1 um [m].
    temperature : array_like, shape (...)
        Temperature, valid from 261.15 K, extrapolated with care below [K].
    density : array_like, shape (...)
        Density [kg/m^3].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        Real part; visible light is absorbed with k of 1e-9 to 2e-8 only, taken as 0 [-].

    References
    ----------
    .. [1] IAPWS R9-97, "Release on the Refractive Index of Ordinary Water Substance as a Function
       of Wavelength, Temperature and Pressure" (1997).

    Examples
    --------
    The release's formula at 25 degrees Celsius on the sodium line is 1.33285819:

    >>> float(water_refractive_index(589.3e-9, 298.15, 997.047435))
    1.33285819
    """
    a0, a1, a2, a3, a4, a5, a6, a7 = _R9_97
    rho = density / 1000.0
    tau = temperature / ICE_POINT
    square = (wavelength / 0.589e-6) ** 2
    light = a4 / square + a5 / (square - _R9_97_ULTRAVIOLET**2)
    light = a0 + light + a6 / (square - _R9_97_INFRARED**2)
    refraction = rho * (light + (a2 + a3 * square) * tau + rho * (a1 + a7 * rho))
    return np.sqrt((2.0 * refraction + 1.0) / (1.0 - refraction))


def liquid_water_index(wavelength, temperature, *, density, factor=1.0):
    """Return the refractive index of water (or heavy water) along its density.

    Parameters
    ----------
    wavelength : array_like, shape (...)
        Vacuum wavelength [m].
    temperature : array_like, shape (...)
        Temperature [K].
    density : callable
        Temperature [K] to density [kg/m^3].
    factor : float
        Density of water over the density of the liquid of the same index [-].

    Returns
    -------
    refractive_index : ndarray, shape (...)
        Refractive index [-].

    Examples
    --------
    >>> float(liquid_water_index(632.8e-9, 293.15, density=water_density))
    1.33211
    """
    return water_refractive_index(wavelength, temperature, factor * density(temperature))


dilute_vapour = properties_over(200.0, 400.0)
"""Makes a property of a dilute vapour."""

LATENT_SOURCE = "R T^2 d(ln p)/dT of the saturation pressure used"
VAPOUR_FIT = "own fit (0.1 percent) to {}, dilute vapour 275 to 375 K, extrapolated below"

WATER = Substance(
    name="water",
    cas="7732-18-5",
    aliases=("H2O", "light water"),
    molar_mass=WATER_MOLAR_MASS,
    critical_temperature=647.096,
    diffusion_volume=13.1,
    saturation_pressure=Property(
        "saturation pressure",
        "Pa",
        water_saturation_pressure,
        "Murphy and Koop 2005, eq. 10",
        (123.0, 332.0),
        0.003,
    ),
    density=Property(
        "density",
        "kg/m^3",
        water_density,
        "own fit to IAPWS G12-15 and IAPWS-95 at 101325 Pa",
        (232.0, 373.0),
        0.0005,
    ),
    surface_tension=Property(
        "surface tension",
        "N/m",
        partial(
            guggenheim_tension,
            scale=0.2358,
            exponent=1.256,
            correction=-0.625,
            critical_temperature=647.096,
        ),
        "IAPWS R1-76(2014), extrapolated below 248 K",
        (248.0, 647.0),
        0.005,
    ),
    latent_heat=Property(
        "latent heat", "J/mol", water_latent_heat, LATENT_SOURCE, (123.0, 332.0), 0.003
    ),
    vapour_heat_capacity=dilute_vapour(
        "vapour heat capacity",
        "J/(mol K)",
        partial(
            polynomial,
            coefficients=(4.395, -0.004186, 1.405e-5, -1.564e-8, 6.32e-12),
            scale=GAS_CONSTANT,
        ),
        "Poling et al. 2001, appendix A",
        0.003,
    ),
    liquid_heat_capacity=Property(
        "liquid heat capacity",
        "J/(mol K)",
        water_heat_capacity,
        "own fit to IAPWS G12-15 and IAPWS-95 at 101325 Pa",
        (245.0, 373.0),
        0.006,
    ),
    vapour_conductivity=dilute_vapour(
        "vapour conductivity",
        "W/(m K)",
        partial(curved_power, value=1.85652e-2, exponent=1.1284, curvature=0.3623),
        VAPOUR_FIT.format("IAPWS R15-11"),
        0.02,
    ),
    vapour_viscosity=dilute_vapour(
        "vapour viscosity",
        "Pa s",
        partial(curved_power, value=9.77118e-6, exponent=0.9897, curvature=0.3707),
        VAPOUR_FIT.format("IAPWS R12-08"),
        0.02,
    ),
    refractive_index=RefractiveIndex(
        partial(liquid_water_index, density=water_density),
        "IAPWS R9-97 with the density used, extrapolated below 261 K; absorption taken as 0",
        (240.0, 373.0),
        (0.2e-6, 1.1e-6),
        5e-5,
    ),
)
"""Ordinary water."""
