"""Ground floor: carrier gases, their mixtures, and how vapours diffuse in them."""

from functools import partial

import numpy as np

from scatterfit.constants import GAS_CONSTANT, ICE_POINT, STANDARD_PRESSURE
from scatterfit.errors import InvalidInputError
from scatterfit.matter_forms import curved_power, polynomial
from scatterfit.matter_records import (
    Gas,
    Property,
    PureGas,
    Refractivity,
    constant,
    unknown,
)

FRACTION_TOLERANCE = 1e-3
"""How far mole fractions may be from summing to one before they are refused [-]."""

FULLER_UNCERTAINTY = 0.05
"""Of a diffusion coefficient by Fuller's rule, standard [-]; its authors state 4 percent mean."""

FULLER_EXPONENT = 1.75
"""Of temperature in Fuller's rule [-]."""

_FIT = "own fit ({} percent) to {}"
_LEMMON = "Lemmon and Jacobsen 2004"


def _gas_property(kind, unit, function, source, uncertainty):
    """Return a property of a carrier gas."""
    return Property(kind, unit, function, source, (150.0, 340.0), uncertainty)


def _heat(coefficients, source="own fit (0.01 percent) to the reference equation of state"):
    """Return a molar heat capacity, ascending in degrees Celsius; alone, a monatomic gas."""
    if coefficients is None:
        function = partial(constant, value=2.5 * GAS_CONSTANT)
        source, uncertainty = "5/2 R, monatomic", 1e-4
    else:
        function = partial(polynomial, coefficients=coefficients, shift=ICE_POINT)
        uncertainty = 1e-3
    return _gas_property("heat capacity", "J/(mol K)", function, source, uncertainty)


def _conductivity(value, exponent, curvature, source, uncertainty):
    """Return a thermal conductivity of the ``curved_power`` form."""
    function = partial(curved_power, value=value, exponent=exponent, curvature=curvature)
    return _gas_property("conductivity", "W/(m K)", function, source, uncertainty)


def _viscosity(value, exponent, curvature, source, uncertainty):
    """Return a viscosity of the ``curved_power`` form."""
    function = partial(curved_power, value=value, exponent=exponent, curvature=curvature)
    return _gas_property("viscosity", "Pa s", function, source, uncertainty)


PURE_GASES = (
    PureGas(
        name="argon",
        aliases=("Ar",),
        molar_mass=39.948e-3,
        diffusion_volume=16.2,
        heat_capacity=_heat(None),
        conductivity=_conductivity(1.78049e-2, 0.8370, -0.0906, _FIT.format(0.01, _LEMMON), 0.005),
        viscosity=_viscosity(2.27246e-5, 0.8344, -0.0867, _FIT.format(0.01, _LEMMON), 0.005),
        refractivity=Refractivity(
            6.432135e-5, ((2.8606021e-2, 144.0),), 288.15, "Peck and Fisher 1964"
        ),
    ),
    PureGas(
        name="nitrogen",
        aliases=("N2",),
        molar_mass=28.0134e-3,
        diffusion_volume=18.5,
        heat_capacity=_heat((29.1162514, 2.82392553e-4, 3.37694071e-6, 1.50123744e-8)),
        conductivity=_conductivity(2.59389e-2, 0.8340, -0.0887, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(1.78781e-5, 0.7735, -0.0830, _FIT.format(0.02, _LEMMON), 0.005),
        refractivity=Refractivity(
            6.497378e-5, ((3.0738649e-2, 144.0),), 288.15, "Peck and Khanna 1966"
        ),
    ),
    PureGas(
        name="helium",
        aliases=("He", "helium-4"),
        molar_mass=4.002602e-3,
        diffusion_volume=2.67,
        heat_capacity=_heat(None),
        conductivity=_conductivity(
            1.55894e-1, 0.6918, 0.0073, _FIT.format(0.01, "Hands and Arp 1981"), 0.005
        ),
        viscosity=_viscosity(
            1.99260e-5, 0.6846, 0.0157, _FIT.format(0.01, "Arp, McCarty and Friend 1998"), 0.005
        ),
        refractivity=Refractivity(0.0, ((0.01470091, 423.98),), 273.15, "Mansfield and Peck 1969"),
    ),
    PureGas(
        name="air",
        aliases=("dry air",),
        molar_mass=28.9655e-3,
        diffusion_volume=19.7,
        heat_capacity=_heat((29.0721992, 9.5249e-4, 7.68772e-6, 2.19965e-8)),
        conductivity=_conductivity(2.63557e-2, 0.8453, -0.0841, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(1.85240e-5, 0.7803, -0.0838, _FIT.format(0.02, _LEMMON), 0.005),
        refractivity=Refractivity(
            0.0,
            ((0.05792105, 238.0185), (0.00167917, 57.362)),
            288.15,
            "Ciddor 1996, standard air",
        ),
    ),
    PureGas(
        name="oxygen",
        aliases=("O2",),
        molar_mass=31.9988e-3,
        diffusion_volume=16.3,
        heat_capacity=_heat((29.2711643, 3.49187e-3, 2.40710e-5, 4.88939e-8)),
        conductivity=_conductivity(2.64429e-2, 0.8922, -0.0823, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(2.06316e-5, 0.8025, -0.0855, _FIT.format(0.01, _LEMMON), 0.01),
        refractivity=Refractivity(
            1.181494e-4, ((9.708931e-3, 75.4),), 293.15, "Zhang, Lu and Wang 2008"
        ),
    ),
    PureGas(
        name="carbon dioxide",
        aliases=("CO2",),
        molar_mass=44.0095e-3,
        diffusion_volume=26.9,
        heat_capacity=_heat((35.9651301, 4.79451e-2, -3.34149e-5, -1.46075e-7)),
        conductivity=_conductivity(
            1.67132e-2,
            1.3788,
            -0.0088,
            _FIT.format(0.1, "the reference correlation in CoolProp"),
            0.02,
        ),
        viscosity=_viscosity(
            1.49914e-5,
            0.9548,
            -0.0313,
            _FIT.format(0.1, "the reference correlation in CoolProp"),
            0.01,
        ),
        refractivity=Refractivity(
            1.54489e-6 / 0.0584738,
            ((8.309193e-2, 210.9241), (2.8764190e-3, 60.122959)),
            273.15,
            "Old, Gentili and Peck 1971",
        ),
    ),
    PureGas(
        name="neon",
        aliases=("Ne",),
        molar_mass=20.1797e-3,
        diffusion_volume=5.98,
        heat_capacity=_heat(None),
        conductivity=_conductivity(
            4.90037e-2,
            0.6921,
            -0.0179,
            _FIT.format(0.02, "Perry's Handbook, 8th ed. 2008, table 2-314"),
            0.02,
        ),
        viscosity=_viscosity(
            3.15246e-5,
            0.6828,
            -0.0112,
            _FIT.format(0.02, "Perry's Handbook, 8th ed. 2008, table 2-312"),
            0.02,
        ),
        refractivity=Refractivity(
            0.0, ((2.9073879e-2, 435.71375),), 273.15, "Cuthbertson and Cuthbertson 1932"
        ),
    ),
)
"""The carriers, in the order in which they are listed."""

_FOUND_BY = {key.casefold(): gas for gas in PURE_GASES for key in (gas.name, *gas.aliases)}

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
    ): (0.735e-4, 1.75, 0.04, "0.902 cm2/s at 307.1 K, Schwertz and Brow 1951, from memory"),
}
"""Diffusivity at 273.15 K and 101325 Pa [m^2/s], exponent, uncertainty [-], source."""


def pure_gas(name):
    """Return a carrier gas by name or formula.

    Parameters
    ----------
    name : str
        Name, in any case.

    Returns
    -------
    gas : PureGas
        The gas.

    Raises
    ------
    InvalidInputError
        If the name is unknown; the message gives the nearest known one.

    Examples
    --------
    >>> pure_gas("Ar").name
    'argon'
    """
    gas = _FOUND_BY.get(str(name).strip().casefold())
    if gas is None:
        raise InvalidInputError(unknown("gas", name, [gas.name for gas in PURE_GASES]))
    return gas


def checked_composition(composition):
    """Return canonical gas names and mole fractions that sum to one.

    Parameters
    ----------
    composition : str or mapping
        One gas, or gas name to mole fraction of the dry gas [-].

    Returns
    -------
    composition : dict
        Canonical name to mole fraction [-].

    Raises
    ------
    InvalidInputError
        If a gas is unknown or named twice, a fraction is not positive, or their sum is off by
        more than 0.001.

    Examples
    --------
    >>> checked_composition({"Ar": 0.7, "He": 0.3})
    {'argon': 0.7, 'helium': 0.3}
    """
    if isinstance(composition, str):
        composition = {composition: 1.0}
    fractions = {}
    for name, fraction in composition.items():
        gas = pure_gas(name).name
        if gas in fractions:
            message = f"carrier gas {gas!r} is named twice: add its mole fractions"
            raise InvalidInputError(message)
        if not 0 < fraction <= 1 + FRACTION_TOLERANCE:
            message = f"mole fraction of {gas} must lie in 0 to 1, but it is {fraction!r}"
            raise InvalidInputError(message)
        fractions[gas] = float(fraction)
    total = sum(fractions.values())
    if not abs(total - 1) <= FRACTION_TOLERANCE:
        message = f"mole fractions of the carrier gas must sum to 1, but they sum to {total:g}"
        raise InvalidInputError(message)
    return {gas: fraction / total for gas, fraction in fractions.items()}


def weighted_sum(temperature, *, terms):
    """Return a mole-fraction average.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    terms : tuple
        Pairs of mole fraction [-] and callable of temperature.

    Returns
    -------
    mean : ndarray, shape (...)
        The average, in the unit of the callables [-].

    Examples
    --------
    >>> float(weighted_sum(4.0, terms=((0.25, np.sqrt), (0.75, np.sqrt))))
    2.0
    """
    return sum(fraction * function(temperature) for fraction, function in terms)


def interaction(viscosity_ratio, mass_ratio):
    """Return Wilke's factor for how gas j gets in the way of gas i.

    Parameters
    ----------
    viscosity_ratio : array_like, shape (...)
        Viscosity of i over that of j [-].
    mass_ratio : float
        Molar mass of i over that of j [-].

    Returns
    -------
    factor : ndarray, shape (...)
        Factor on the mole fraction of j in the mixture formula for i [-].

    References
    ----------
    .. [1] E. A. Mason, S. C. Saxena, "Approximate formula for the thermal conductivity of gas
       mixtures", Phys. Fluids 1 (1958) 361-369 (the same factor, for conductivities).
       doi:10.1063/1.1724352

    Examples
    --------
    >>> float(interaction(1.0, 1.0))
    1.0
    """
    root = 1.0 + np.sqrt(viscosity_ratio) * mass_ratio**-0.25
    return root * root / np.sqrt(8.0 * (1.0 + mass_ratio))


def mixture_transport(temperature, *, parts, kind):
    """Return the conductivity (Wassiljewa, Mason-Saxena) or viscosity (Wilke) of a gas mixture.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    parts : tuple
        Pairs of mole fraction [-] and ``PureGas``.
    kind : str
        ``"conductivity"`` or ``"viscosity"``.

    Returns
    -------
    value : ndarray, shape (...)
        Conductivity [W/(m K)] or viscosity [Pa s].

    Examples
    --------
    >>> half = ((0.5, pure_gas("argon")), (0.5, pure_gas("argon")))
    >>> float(mixture_transport(300.0, parts=half, kind="conductivity"))
    0.0178
    """
    viscosities = [gas.viscosity.function(temperature) for _, gas in parts]
    total = 0.0
    for (fraction, gas), viscosity in zip(parts, viscosities, strict=True):
        crowd = sum(
            other_fraction
            * interaction(viscosity / other_viscosity, gas.molar_mass / other.molar_mass)
            for (other_fraction, other), other_viscosity in zip(parts, viscosities, strict=True)
        )
        value = viscosity if kind == "viscosity" else gas.conductivity.function(temperature)
        total = total + fraction * value / crowd
    return total


def build_gas(composition):
    """Return the dry carrier gas of a composition.

    Parameters
    ----------
    composition : str or mapping
        One gas, or gas name to mole fraction of the dry gas [-].

    Returns
    -------
    gas : Gas
        The gas.

    Raises
    ------
    InvalidInputError
        If the composition does not describe a gas.

    Examples
    --------
    >>> build_gas("helium").molar_mass
    0.0040026
    """
    fractions = checked_composition(composition)
    components = tuple(pure_gas(name) for name in fractions)
    parts = tuple(zip(fractions.values(), components, strict=True))
    molar_mass = sum(fraction * gas.molar_mass for fraction, gas in parts)
    if len(parts) == 1:
        (gas,) = components
        return Gas(
            fractions, components, molar_mass, gas.heat_capacity, gas.conductivity, gas.viscosity
        )
    heat = partial(
        weighted_sum, terms=tuple((part, gas.heat_capacity.function) for part, gas in parts)
    )
    conductivity = partial(mixture_transport, parts=parts, kind="conductivity")
    viscosity = partial(mixture_transport, parts=parts, kind="viscosity")
    return Gas(
        fractions,
        components,
        molar_mass,
        _gas_property("heat capacity", "J/(mol K)", heat, "mean by mole fraction", 1e-3),
        _gas_property(
            "conductivity",
            "W/(m K)",
            conductivity,
            "Wassiljewa's equation with the factors of Mason and Saxena 1958",
            0.03,
        ),
        _gas_property("viscosity", "Pa s", viscosity, "Wilke 1950", 0.02),
    )


def reduced_mass(first, second):
    """Return the harmonic mean of two molar masses, as Fuller's rule takes it.

    Parameters
    ----------
    first, second : float
        Molar masses [kg/mol].

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
    >>> blanc_diffusivity(273.15, laws=((0.5, 1e-5, 1.8), (0.5, 3e-5, 1.8))) * 1e5
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
