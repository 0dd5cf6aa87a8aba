"""Ground floor: heavy water, supercooled to 245 K, mostly as colder ordinary water."""

from functools import partial

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.matter_forms import curved_power, guggenheim_tension, polynomial
from scatterfit.matter_records import Property, RefractiveIndex
from scatterfit.matter_substance import Substance
from scatterfit.matter_water import (
    LATENT_SOURCE,
    VAPOUR_FIT,
    dilute_vapour,
    liquid_water_index,
    water_density,
    water_heat_capacity,
    water_latent_heat,
    water_saturation_pressure,
)

HEAVY_WATER_MOLAR_MASS = 20.027508e-3
"""[kg/mol], IAPWS R16-17."""

ISOTOPE_SHIFT = 7.2
"""Heavy water behaves as ordinary water this much colder [K]: its density peaks at 284.3 K."""

ISOTOPE_DENSITY_RATIO = 1.10587
"""Density of heavy water over that of water ``ISOTOPE_SHIFT`` colder [-]."""

ISOTOPE_PRESSURE = (-0.0830865764, 134.242593, -45703.7829)
"""ln of the ratio of the saturation pressures, coefficients of 1, 1/T [K] and 1/T^2 [K^2]."""

ISOTOPE_INDEX_DENSITY = 0.88919
"""Density of water over that of heavy water of the same index [-]: n_D = 1.3283 at 20 C."""


def heavy_water_saturation_pressure(temperature):
    """Return the vapour pressure of (supercooled) heavy water, as a ratio to that of water.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    pressure : ndarray, shape (...)
        Saturation pressure over the liquid [Pa].

    Notes
    -----
    The ratio is fitted (within 2e-4) to IAPWS R16-17 over IAPWS-95 between 277 and 373 K.

    Examples
    --------
    IAPWS R16-17 gives 1999.3 Pa at 20 degrees Celsius:

    >>> float(heavy_water_saturation_pressure(293.15))
    1999.
    """
    a, b, c = ISOTOPE_PRESSURE
    inverse = 1.0 / temperature
    return water_saturation_pressure(temperature) * np.exp(a + inverse * (b + c * inverse))


def heavy_water_latent_heat(temperature):
    """Return R T^2 d(ln p)/dT of ``heavy_water_saturation_pressure``.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    latent_heat : ndarray, shape (...)
        Latent heat with an ideal vapour and a liquid of no volume [J/mol].

    Examples
    --------
    >>> float(heavy_water_latent_heat(293.15)) / 1e3
    45.7
    """
    _, b, c = ISOTOPE_PRESSURE
    return water_latent_heat(temperature) - GAS_CONSTANT * (b + 2.0 * c / temperature)


def heavy_water_density(temperature):
    """Return the density of heavy water: that of water, colder and heavier.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    density : ndarray, shape (...)
        Density [kg/m^3].

    References
    ----------
    .. [1] M. Vedamuthu, S. Singh, G. W. Robinson, "Properties of liquid water: origin of the
       density anomalies", J. Phys. Chem. 98 (1994) 2222-2230 (the shift; the ratio is fitted to
       IAPWS R16-17 between 277 and 320 K).

    Examples
    --------
    >>> float(heavy_water_density(293.15))
    1105.3
    """
    return ISOTOPE_DENSITY_RATIO * water_density(temperature - ISOTOPE_SHIFT)


def heavy_water_heat_capacity(temperature):
    """Return the molar heat capacity of liquid heavy water: 1.115 times that of colder water.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    heat_capacity : ndarray, shape (...)
        Heat capacity at constant pressure [J/(mol K)].

    Examples
    --------
    >>> float(heavy_water_heat_capacity(293.15))
    84.4
    """
    return 1.115 * water_heat_capacity(temperature - ISOTOPE_SHIFT)


HEAVY_WATER = Substance(
    name="heavy water",
    cas="7789-20-0",
    aliases=("D2O", "deuterium oxide", "water-d2"),
    molar_mass=HEAVY_WATER_MOLAR_MASS,
    critical_temperature=643.847,
    diffusion_volume=13.1,
    saturation_pressure=Property(
        "saturation pressure",
        "Pa",
        heavy_water_saturation_pressure,
        "Murphy and Koop 2005 times own fit of the isotope ratio to IAPWS R16-17, "
        "extrapolated below 277 K",
        (240.0, 332.0),
        0.006,
    ),
    density=Property(
        "density",
        "kg/m^3",
        heavy_water_density,
        "water 7.2 K colder times 1.10587 (shift of Vedamuthu et al. 1994, fitted to IAPWS R16-17)",
        (245.0, 373.0),
        0.001,
    ),
    surface_tension=Property(
        "surface tension",
        "N/m",
        partial(
            guggenheim_tension,
            scale=0.2380,
            exponent=1.25,
            correction=-0.639,
            critical_temperature=643.847,
        ),
        "IAPWS R5-85(1994), from memory, extrapolated below 277 K",
        (260.0, 643.0),
        0.007,
    ),
    latent_heat=Property(
        "latent heat", "J/mol", heavy_water_latent_heat, LATENT_SOURCE, (240.0, 332.0), 0.006
    ),
    vapour_heat_capacity=dilute_vapour(
        "vapour heat capacity",
        "J/(mol K)",
        partial(
            polynomial,
            coefficients=(4.274, -0.003465, 1.376e-5, -1.482e-8, 5.68e-12),
            scale=GAS_CONSTANT,
        ),
        "Poling et al. 2001, appendix A",
        0.005,
    ),
    liquid_heat_capacity=Property(
        "liquid heat capacity",
        "J/(mol K)",
        heavy_water_heat_capacity,
        "1.115 times water 7.2 K colder (fitted to IAPWS R16-17 between 277 and 320 K)",
        (245.0, 373.0),
        0.015,
    ),
    vapour_conductivity=dilute_vapour(
        "vapour conductivity",
        "W/(m K)",
        partial(curved_power, value=1.82410e-2, exponent=1.2520, curvature=0.1866),
        VAPOUR_FIT.format("the IAPWS formulation of heavy water"),
        0.03,
    ),
    vapour_viscosity=dilute_vapour(
        "vapour viscosity",
        "Pa s",
        partial(curved_power, value=1.02408e-5, exponent=0.8689, curvature=0.5890),
        VAPOUR_FIT.format("the IAPWS formulation of heavy water"),
        0.03,
    ),
    refractive_index=RefractiveIndex(
        partial(liquid_water_index, density=heavy_water_density, factor=ISOTOPE_INDEX_DENSITY),
        "IAPWS R9-97 at the density of water that gives n_D = 1.3283 at 20 C (from memory); "
        "absorption taken as 0",
        (250.0, 373.0),
        (0.4e-6, 0.8e-6),
        5e-4,
    ),
)
"""Heavy water."""
