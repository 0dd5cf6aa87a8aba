"""Ground floor: mixtures of carrier gases."""

from functools import partial

import numpy as np

from scatterfit.errors import InvalidInputError
from scatterfit.matter_gases import gas_property, pure_gas
from scatterfit.matter_records import Gas

FRACTION_TOLERANCE = 1e-3
"""How far mole fractions may be from summing to one before they are refused [-]."""

CARRIER_COUPLING = 1.065
"""On Wilke's factor for conductivities of nonpolar gases [-], Mason and Saxena 1958."""

VAPOUR_COUPLING = 0.85
"""The same for a polar vapour in a nonpolar gas [-], Tondon and Saxena 1968."""


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
    >>> float(mixture_transport(300.0, parts=half, kind="viscosity")) * 1e6
    22.72
    """
    coupling = 1.0 if kind == "viscosity" else CARRIER_COUPLING
    viscosities = [gas.viscosity.function(temperature) for _, gas in parts]
    total = 0.0
    for i, (fraction, gas) in enumerate(parts):
        crowd = fraction
        for j, (other_fraction, other) in enumerate(parts):
            if j != i:
                ratio = viscosities[i] / viscosities[j]
                factor = interaction(ratio, gas.molar_mass / other.molar_mass)
                crowd = crowd + coupling * other_fraction * factor
        value = viscosities[i] if kind == "viscosity" else gas.conductivity.function(temperature)
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
        gas_property("heat capacity", "J/(mol K)", heat, "mean by mole fraction", 1e-3),
        gas_property(
            "conductivity",
            "W/(m K)",
            conductivity,
            "Wassiljewa's equation with the factors of Mason and Saxena 1958",
            0.04,
        ),
        gas_property("viscosity", "Pa s", viscosity, "Wilke 1950", 0.02),
    )
