"""Ground floor: what a property, a refractive index and a gas are as frozen records."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from scatterfit.constants import GAS_CONSTANT, STANDARD_PRESSURE


@dataclass(frozen=True)
class Property:
    """A property against temperature, with where it comes from and how far it holds.

    Examples
    --------
    >>> root = Property("root", "K^0.5", np.sqrt, "arithmetic", (200.0, 300.0), 0.0)
    >>> float(root(256.0)), root.outside([256.0, 310.0])
    (16.0, True)
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


def properties_over(low, high):
    """Return a maker of properties that all hold in one range of temperature.

    Parameters
    ----------
    low, high : float
        The range [K].

    Returns
    -------
    make : callable
        Name, unit, function, source and relative uncertainty, as :class:`Property` has them, to
        the record.

    Examples
    --------
    >>> properties_over(150.0, 340.0)("root", "K^0.5", np.sqrt, "arithmetic", 0.0).range
    (150.0, 340.0)
    """

    def make(name, unit, function, source, relative_uncertainty):
        return Property(name, unit, function, source, (low, high), relative_uncertainty)

    return make


@dataclass(frozen=True)
class RefractiveIndex:
    """The refractive index of a liquid against vacuum, n + ik.

    Examples
    --------
    >>> from scatterfit.matter import substance
    >>> index = substance("1-propanol").refractive_index
    >>> float(index(589.3e-9, 293.15)), index.outside(1064e-9, 280.0)
    (1.385, True)
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
