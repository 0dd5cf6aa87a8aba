"""Ground floor: what a property, a refractive index, a liquid and a gas are as frozen records."""

import difflib
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

import numpy as np

from scatterfit.constants import GAS_CONSTANT, STANDARD_PRESSURE
from scatterfit.errors import InvalidInputError

PRESSURE_ANCHOR = 298.15
"""Where a stated saturation pressure holds [K]."""

OVERRIDABLE: Mapping[str, str] = {
    "density": "kg/m^3",
    "surface_tension": "N/m",
    "latent_heat": "J/mol",
    "vapour_heat_capacity": "J/(mol K)",
    "liquid_heat_capacity": "J/(mol K)",
    "vapour_conductivity": "W/(m K)",
    "vapour_viscosity": "Pa s",
    "saturation_pressure": f"Pa at {PRESSURE_ANCHOR:g} K",
    "diffusivity": "m^2/s at 273.15 K and 101325 Pa",
    "molar_mass": "kg/mol",
    "refractive_index": "-",
}
"""Names that ``Substance.with_overrides`` takes, with their units."""


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


@dataclass(frozen=True)
class Property:
    """A property against temperature, with where it comes from and how far it holds.

    Examples
    --------
    >>> density = Property(
    ...     "density", "kg/m^3", partial(constant, value=998.0), "stated", (270.0, 300.0), 0.001
    ... )
    >>> float(density(280.0)), density.outside([280.0, 310.0])
    (998.0, True)
    """

    name: str
    """What it is."""
    unit: str
    """SI unit."""
    function: Callable[..., Any]
    """Vectorised, temperature [K] to value."""
    source: str
    """Where the correlation is from."""
    range: tuple[float, float]
    """Where it holds [K]; outside it still gives finite, smooth values."""
    relative_uncertainty: float
    """Standard uncertainty over the value, within the range [-]."""

    def __call__(self, temperature):
        """Return the property at a temperature [K], of the same shape, in ``unit``."""
        return self.function(np.asarray(temperature, dtype=float)[()])

    def outside(self, temperature) -> bool:
        """Return whether any temperature [K] lies outside the range (or is not a number)."""
        temperature = np.asarray(temperature, dtype=float)
        low, high = self.range
        return not bool(np.all((temperature >= low) & (temperature <= high)))


@dataclass(frozen=True)
class RefractiveIndex:
    """The refractive index of a liquid against vacuum, n + ik.

    Examples
    --------
    >>> index = RefractiveIndex(
    ...     partial(constant_index, value=1.39), "stated", (240, 300), (4e-7, 7e-7), 1e-3
    ... )
    >>> float(index(532e-9, 280.0)), index.outside(1064e-9, 280.0)
    (1.39, True)
    """

    function: Callable[..., Any]
    """Vectorised, vacuum wavelength [m] and temperature [K] to index [-]."""
    source: str
    """Where the correlation is from."""
    range: tuple[float, float]
    """Where it holds [K]."""
    wavelength_range: tuple[float, float]
    """Where it holds [m]."""
    uncertainty: float
    """Standard uncertainty within both ranges, absolute [-]."""

    def __call__(self, wavelength, temperature):
        """Return the index [-] at a vacuum wavelength [m] and a temperature [K], broadcast."""
        wavelength = np.asarray(wavelength, dtype=float)[()]
        return self.function(wavelength, np.asarray(temperature, dtype=float)[()])

    def outside(self, wavelength, temperature) -> bool:
        """Return whether any wavelength [m] or temperature [K] lies outside the ranges."""
        wavelength = np.asarray(wavelength, dtype=float)
        temperature = np.asarray(temperature, dtype=float)
        (cold, hot), (short, long) = self.range, self.wavelength_range
        inside = np.all((wavelength >= short) & (wavelength <= long))
        return not bool(inside and np.all((temperature >= cold) & (temperature <= hot)))


@dataclass(frozen=True)
class Substance:
    """A liquid and its vapour; the vapour is an ideal gas."""

    name: str
    """Canonical name."""
    cas: str
    """CAS registry number."""
    aliases: tuple[str, ...]
    """Other names it is found by."""
    molar_mass: float
    """[kg/mol]."""
    critical_temperature: float
    """[K]."""
    diffusion_volume: float
    """Fuller's diffusion volume of the vapour [cm^3/mol], as in the published tables."""
    saturation_pressure: Property
    """Over the flat (supercooled) liquid [Pa]."""
    density: Property
    """Of the liquid [kg/m^3]."""
    surface_tension: Property
    """[N/m]."""
    latent_heat: Property
    """Of vaporization, R T^2 d(ln p)/dT of ``saturation_pressure`` [J/mol]."""
    vapour_heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    liquid_heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    vapour_conductivity: Property
    """Thermal conductivity of the dilute vapour [W/(m K)]."""
    vapour_viscosity: Property
    """Of the dilute vapour [Pa s]."""
    refractive_index: RefractiveIndex
    """Of the liquid against vacuum [-]."""
    overrides: Mapping[str, float] = field(default_factory=dict, hash=False)
    """Constants of the chamber file that replaced correlations, in SI."""

    def with_overrides(self, overrides: Mapping[str, float]) -> "Substance":
        """Return the substance with constants in place of correlations.

        Parameters
        ----------
        overrides : mapping
            Name as in ``OVERRIDABLE`` to a value in its unit. A saturation pressure holds at
            298.15 K and a diffusivity at 273.15 K; both keep the temperature dependence of the
            correlation. A refractive index may be complex, n + ik.

        Returns
        -------
        substance : Substance
            A new record; the source of every replaced property reads ``chamber file``.

        Raises
        ------
        InvalidInputError
            If a name is unknown or a value is not a positive finite number.

        Examples
        --------
        >>> from scatterfit.matter import substance
        >>> water = substance("water").with_overrides({"density": 990.0})
        >>> float(water.density(280.0)), water.density.source
        (990.0, 'chamber file')
        """
        for name, value in overrides.items():
            check_override(name, value)
        changes = {
            name: self._replacement(name, value)
            for name, value in overrides.items()
            if name != "diffusivity"
        }
        return replace(self, **changes, overrides={**self.overrides, **overrides})

    def _replacement(self, name, value):
        """Return the field that takes the place of a correlation."""
        if name == "molar_mass":
            return float(value)
        old = getattr(self, name)
        if name == "refractive_index":
            index = complex(value) if complex(value).imag else float(complex(value).real)
            function = partial(constant_index, value=index)
            return RefractiveIndex(function, "chamber file", (0.0, math.inf), (0.0, math.inf), 0.0)
        if name == "saturation_pressure":
            function = partial(
                anchored, function=old.function, value=float(value), anchor=PRESSURE_ANCHOR
            )
            source = f"chamber file at {PRESSURE_ANCHOR:g} K, elsewhere as {old.source}"
            return replace(old, function=function, source=source)
        return replace(
            old,
            function=partial(constant, value=float(value)),
            source="chamber file",
            range=(0.0, math.inf),
            relative_uncertainty=0.0,
        )


def check_override(name, value):
    """Refuse an override that no property could take.

    Parameters
    ----------
    name : str
        Name of the property.
    value : complex
        Its value, in the unit that ``OVERRIDABLE`` gives [-].

    Raises
    ------
    InvalidInputError
        If the name is unknown, with the nearest known one, or the value is not positive.

    Examples
    --------
    >>> check_override("density", 998.0)
    """
    if name not in OVERRIDABLE:
        raise InvalidInputError(unknown("property", name, OVERRIDABLE))
    number = complex(value)
    real_only = name != "refractive_index" and number.imag
    if real_only or not (0 < number.real < math.inf and 0 <= number.imag < math.inf):
        message = f"{name} must be a positive number [{OVERRIDABLE[name]}], but it is {value!r}"
        raise InvalidInputError(message)


def unknown(kind, name, known):
    """Return the one line that says a name is unknown, and which known one is nearest.

    Parameters
    ----------
    kind : str
        What the name should name.
    name : str
        The name that is not known.
    known : iterable of str
        The names that are.

    Returns
    -------
    message : str
        The line.

    Examples
    --------
    >>> unknown("gas", "argonn", ["argon", "helium"])
    "unknown gas 'argonn': did you mean 'argon'? Known: argon, helium"
    """
    known = list(known)
    near = difflib.get_close_matches(str(name).strip().casefold(), known, n=1, cutoff=0.5)
    hint = f" did you mean {near[0]!r}?" if near else ""
    return f"unknown {kind} {name!r}:{hint} Known: {', '.join(known)}"


@dataclass(frozen=True)
class Refractivity:
    """n - 1 of a gas: a constant and terms b/(c - 1/wavelength^2), at one density."""

    constant: float
    """[-]."""
    terms: tuple[tuple[float, float], ...]
    """Pairs b, c [1/um^2]."""
    temperature: float
    """Temperature of the stated density [K], at 101325 Pa."""
    source: str
    """Where the formula is from."""

    def __call__(self, wavelength):
        """Return n - 1 [-] at the stated density for a vacuum wavelength [m]."""
        wavenumber = (1e-6 / np.asarray(wavelength, dtype=float)[()]) ** 2
        return self.constant + sum(b / (c - wavenumber) for b, c in self.terms)


@dataclass(frozen=True)
class PureGas:
    """One carrier gas (air counts as one)."""

    name: str
    """Canonical name."""
    aliases: tuple[str, ...]
    """Other names it is found by."""
    molar_mass: float
    """[kg/mol]."""
    diffusion_volume: float
    """Fuller's diffusion volume [cm^3/mol], as in the published tables."""
    heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    conductivity: Property
    """Thermal conductivity [W/(m K)]."""
    viscosity: Property
    """[Pa s]."""
    refractivity: Refractivity
    """n - 1 against wavelength."""


@dataclass(frozen=True)
class Gas:
    """The dry carrier gas, pure or a mixture; an ideal gas."""

    composition: Mapping[str, float] = field(hash=False)
    """Canonical gas name to mole fraction [-], sums to one."""
    components: tuple[PureGas, ...]
    """The gases, in the order of the composition."""
    molar_mass: float
    """Mean [kg/mol]."""
    heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    conductivity: Property
    """Thermal conductivity [W/(m K)]."""
    viscosity: Property
    """[Pa s]."""

    def refractive_index(self, wavelength, temperature, pressure):
        """Return the refractive index of the gas, n - 1 in proportion to its density.

        Parameters
        ----------
        wavelength : array_like, shape (...)
            Vacuum wavelength [m].
        temperature : array_like, shape (...)
            Temperature [K].
        pressure : array_like, shape (...)
            Pressure [Pa].

        Returns
        -------
        refractive_index : ndarray, shape (...)
            Refractive index [-].

        Examples
        --------
        >>> from scatterfit.matter import carrier
        >>> float(carrier("argon").refractive_index(589.3e-9, 288.15, 101325.0))
        1.000267
        """
        molar_density = np.asarray(pressure, dtype=float) / (
            GAS_CONSTANT * np.asarray(temperature, dtype=float)
        )
        molar_refractivity = sum(
            self.composition[gas.name]
            * gas.refractivity(wavelength)
            * (GAS_CONSTANT * gas.refractivity.temperature / STANDARD_PRESSURE)
            for gas in self.components
        )
        return 1.0 + molar_refractivity * molar_density
