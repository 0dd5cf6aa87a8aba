"""Ground floor: properties of vapours, liquids and carrier gases, each with source and range."""

import math
from collections.abc import Mapping
from functools import partial

import numpy as np

from scatterfit.constants import GAS_CONSTANT, ICE_POINT
from scatterfit.errors import InvalidInputError
from scatterfit.matter_diffusion import binary_diffusivity, blanc_diffusivity
from scatterfit.matter_forms import anchored
from scatterfit.matter_gases import PURE_GASES
from scatterfit.matter_heavy_water import HEAVY_WATER
from scatterfit.matter_mixtures import VAPOUR_COUPLING, build_gas, interaction
from scatterfit.matter_organics import BUTANOL, ETHANOL, NONANE, OCTANE, PROPANOL
from scatterfit.matter_records import Gas, Property, PureGas, RefractiveIndex
from scatterfit.matter_substance import OVERRIDABLE, Substance, unknown
from scatterfit.matter_water import WATER, WATER_MOLAR_MASS

__all__ = [
    "OVERRIDABLE",
    "Gas",
    "Property",
    "PureGas",
    "RefractiveIndex",
    "Substance",
    "carrier",
    "carriers",
    "diffusivity",
    "mean_molecular_speed",
    "moist_conductivity",
    "moist_heat_capacity",
    "moist_molar_mass",
    "substance",
    "substances",
]

_SUBSTANCES = (WATER, PROPANOL, ETHANOL, BUTANOL, OCTANE, NONANE, HEAVY_WATER)
_FOUND_BY = {
    key.casefold(): liquid
    for liquid in _SUBSTANCES
    for key in (liquid.name, liquid.cas, *liquid.aliases)
}


def substances() -> tuple[str, ...]:
    """Return the canonical names of the known liquids.

    Returns
    -------
    names : tuple of str
        The names, water first.

    Examples
    --------
    >>> substances()[:3]
    ('water', '1-propanol', 'ethanol')
    """
    return tuple(liquid.name for liquid in _SUBSTANCES)


def substance(name: str) -> Substance:
    """Return a liquid and its vapour by name, alias or CAS number.

    Parameters
    ----------
    name : str
        The name, in any case.

    Returns
    -------
    substance : Substance
        Its properties.

    Raises
    ------
    InvalidInputError
        If the name is unknown; the message gives the nearest known one.

    Examples
    --------
    >>> substance("H2O").name, substance("71-23-8").name
    ('water', '1-propanol')
    >>> float(substance("water").saturation_pressure(293.15))
    2339.4
    """
    found = _FOUND_BY.get(str(name).strip().casefold())
    if found is None:
        raise InvalidInputError(unknown("substance", name, substances()))
    return found


def carriers() -> tuple[str, ...]:
    """Return the canonical names of the known carrier gases.

    Returns
    -------
    names : tuple of str
        The names.

    Examples
    --------
    >>> carriers()[:4]
    ('argon', 'nitrogen', 'helium', 'air')
    """
    return tuple(gas.name for gas in PURE_GASES)


def carrier(composition: Mapping[str, float] | str) -> Gas:
    """Return the dry carrier gas of a composition.

    Parameters
    ----------
    composition : str or mapping
        One gas, or gas name to mole fraction of the dry gas [-]; names or formulas in any case.

    Returns
    -------
    gas : Gas
        Its properties.

    Raises
    ------
    InvalidInputError
        If a gas is unknown (with the nearest known one) or named twice, or the fractions do not
        sum to one within 0.001.

    Examples
    --------
    >>> float(carrier("argon").conductivity(300.0))
    0.0178
    >>> carrier({"argon": 0.7, "helium": 0.3}).molar_mass
    0.02916
    """
    return build_gas(composition)


def diffusivity(vapour: Substance, gas: Gas) -> Property:
    """Return the diffusion coefficient of a dilute vapour in a gas at 101325 Pa.

    Parameters
    ----------
    vapour : Substance
        The vapour; an override ``"diffusivity"`` [m^2/s at 273.15 K and 101325 Pa] is kept, with
        the temperature dependence of the correlation.
    gas : Gas
        The dry carrier gas.

    Returns
    -------
    diffusivity : Property
        Temperature [K] to diffusivity at 101325 Pa [m^2/s]; it goes with one over the pressure.

    Examples
    --------
    >>> float(diffusivity(substance("water"), carrier("air"))(273.15))
    2.178e-05
    """
    laws = [binary_diffusivity(vapour, part, WATER_MOLAR_MASS) for part in gas.components]
    fractions = [gas.composition[part.name] for part in gas.components]
    function = partial(
        blanc_diffusivity,
        laws=tuple(
            (fraction, value, exponent)
            for fraction, (value, exponent, _, _) in zip(fractions, laws, strict=True)
        ),
    )
    uncertainty = max(law[2] for law in laws)
    source = laws[0][3]
    if len(laws) > 1:
        parts = zip(gas.components, laws, strict=True)
        source = "Blanc's law; " + "; ".join(f"in {part.name}: {law[3]}" for part, law in parts)
    stated = vapour.overrides.get("diffusivity")
    if stated is not None:
        function = partial(anchored, function=function, value=float(stated), anchor=ICE_POINT)
        uncertainty, source = 0.01, f"chamber file at {ICE_POINT} K, elsewhere as {source}"
    return Property("diffusivity", "m^2/s", function, source, (230.0, 350.0), uncertainty)


def moist_heat_capacity(gas: Gas, vapour: Substance, mole_fraction, temperature):
    """Return the molar heat capacity of carrier gas and vapour together.

    Parameters
    ----------
    gas : Gas
        The dry carrier gas.
    vapour : Substance
        The vapour.
    mole_fraction : array_like, shape (...)
        Mole fraction of the vapour in the moist gas [-].
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    heat_capacity : ndarray, shape (...)
        At constant pressure, of ideal gases [J/(mol K)].

    Examples
    --------
    >>> float(moist_heat_capacity(carrier("argon"), substance("water"), 0.02, 280.0))
    21.0
    """
    dry = gas.heat_capacity(temperature)
    return dry + np.asarray(mole_fraction)[()] * (vapour.vapour_heat_capacity(temperature) - dry)


def moist_molar_mass(gas: Gas, vapour: Substance, mole_fraction):
    """Return the mean molar mass of carrier gas and vapour together.

    Parameters
    ----------
    gas : Gas
        The dry carrier gas.
    vapour : Substance
        The vapour.
    mole_fraction : array_like, shape (...)
        Mole fraction of the vapour in the moist gas [-].

    Returns
    -------
    molar_mass : ndarray, shape (...)
        Mean molar mass [kg/mol].

    Examples
    --------
    >>> float(moist_molar_mass(carrier("argon"), substance("water"), 0.02))
    0.03951
    """
    return gas.molar_mass + np.asarray(mole_fraction)[()] * (vapour.molar_mass - gas.molar_mass)


def moist_conductivity(gas: Gas, vapour: Substance, mole_fraction, temperature):
    """Return the thermal conductivity of carrier gas and vapour together.

    Parameters
    ----------
    gas : Gas
        The dry carrier gas, a mixture counts as one gas of mean molar mass.
    vapour : Substance
        The vapour.
    mole_fraction : array_like, shape (...)
        Mole fraction of the vapour in the moist gas, small (up to about 0.05) [-].
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    conductivity : ndarray, shape (...)
        Thermal conductivity [W/(m K)].

    References
    ----------
    .. [1] E. A. Mason, S. C. Saxena, "Approximate formula for the thermal conductivity of gas
       mixtures", Phys. Fluids 1 (1958) 361-369. doi:10.1063/1.1724352
    .. [2] P. K. Tondon, S. C. Saxena, "Calculation of thermal conductivity of polar-nonpolar gas
       mixtures", Appl. Sci. Res. 19 (1968) 163-170 (the factor 0.85; cited from memory).

    Examples
    --------
    >>> float(moist_conductivity(carrier("argon"), substance("water"), 0.02, 280.0))
    0.0169
    """
    vapour_part = np.asarray(mole_fraction)[()]
    gas_part = 1.0 - vapour_part
    ratio = gas.viscosity(temperature) / vapour.vapour_viscosity(temperature)
    mass_ratio = gas.molar_mass / vapour.molar_mass
    of_gas = gas.conductivity(temperature) * gas_part
    of_vapour = vapour.vapour_conductivity(temperature) * vapour_part
    in_gas = VAPOUR_COUPLING * interaction(ratio, mass_ratio)
    in_vapour = in_gas * (mass_ratio / ratio)  # Wilke's factors of a pair are tied so
    return of_gas / (gas_part + vapour_part * in_gas) + of_vapour / (
        vapour_part + gas_part * in_vapour
    )


def mean_molecular_speed(temperature, molar_mass):
    r"""Return the mean speed of gas molecules.

    .. math:: \bar c = \sqrt{8 R T / (\pi M)}

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    molar_mass : array_like, shape (...)
        Molar mass [kg/mol].

    Returns
    -------
    speed : ndarray, shape (...)
        Mean speed [m/s].

    Examples
    --------
    Nitrogen at 300 K:

    >>> float(mean_molecular_speed(300.0, 0.0280134))
    476.2
    """
    return np.sqrt((8.0 * GAS_CONSTANT / math.pi) * (temperature / np.asarray(molar_mass)[()]))
