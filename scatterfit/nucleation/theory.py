"""Nucleation rates that a measurement is held against: classical theory, published fits for water.

Every theory gives ln(J / (1/(m^3 s))) at a temperature and a saturation ratio over the liquid.
The saturation ratio is taken as it is given: a published fit has a saturation pressure of its own,
and one percent of difference in it is 20 to 30 percent in J.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from scatterfit.constants import AVOGADRO, BOLTZMANN
from scatterfit.droplet_growth.classical_rate import classical_log_rate
from scatterfit.matter import Substance

WITH_1_OVER_S = "classical_with_1_over_S"
WITHOUT_1_OVER_S = "classical_without_1_over_S"
_PER_CM3 = np.log(1e6)
_WATER_MOLAR_MASS = 0.01801528  # kg/mol, as in the IAPWS releases


@dataclass(frozen=True)
class Theory:
    """One way to compute a nucleation rate."""

    name: str
    """Key in a result."""
    label: str
    """For figures and text."""
    log_rate: Callable
    """Temperature [K] and saturation ratio [-] to ln(J / (1/(m^3 s))), broadcast."""
    range: tuple[float, float]
    """Temperatures it holds for [K]."""
    source: str
    """Where it is from, and its prefactor."""

    def outside(self, temperature):
        """Return whether any temperature [K] lies outside the range."""
        temperature = np.asarray(temperature)
        return bool(np.any((temperature < self.range[0]) | (temperature > self.range[1])))


def theories(substance):
    """Return the theories there are for a substance.

    Parameters
    ----------
    substance : Substance
        The nucleating vapour.

    Returns
    -------
    known : tuple of Theory
        Classical theory with both common prefactors; for water the published fits too.

    Examples
    --------
    >>> from scatterfit.matter import substance
    >>> [theory.name for theory in theories(substance("ethanol"))]
    ['classical_with_1_over_S', 'classical_without_1_over_S']
    >>> [theory.name for theory in theories(substance("water"))][2:]
    ['woelk_strey_2001', 'holten_2005', 'miller_1983']
    """
    known = _classical(substance)
    return known + _WATER if substance.name == "water" else known


def reference_theory(substance):
    """Return the theory used to bring pulses to a common temperature.

    Parameters
    ----------
    substance : Substance
        The nucleating vapour.

    Returns
    -------
    theory : Theory
        The fit of Woelk and Strey for water, whose dependence on temperature is that of
        measurements; classical theory with 1/S for the others.
    """
    return _WATER[0] if substance.name == "water" else _classical(substance)[0]


def liquid_of(substance: Substance, temperature):
    """Return what classical theory needs to know of a liquid.

    Parameters
    ----------
    substance : Substance
        The liquid.
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    liquid : tuple of ndarray
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol], shape (...).
    """
    tension, density = substance.surface_tension(temperature), substance.density(temperature)
    return tension, density, substance.molar_mass


def critical_molecules(temperature, saturation_ratio, liquid):
    r"""Return the number of molecules in the critical cluster of classical theory.

    .. math:: n^* = \frac{32 \pi v^2 \sigma^3}{3 (k T)^3 (\ln S)^3}

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    saturation_ratio : array_like, shape (...)
        Over the flat liquid, > 1 [-].
    liquid : tuple of array_like
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol].

    Returns
    -------
    molecules : ndarray, shape (...)
        Size of the critical cluster [-].

    References
    ----------
    .. [1] J. H. Seinfeld, S. N. Pandis, Atmospheric Chemistry and Physics, 2nd ed., Wiley 2006,
       section 11.2.

    Examples
    --------
    Water at 273 K and S = 5; table 11.1 of the reference has 58:

    >>> float(critical_molecules(273.0, 5.0, (75.6e-3, 1000.0, 0.018006)))
    58.0
    """
    tension, density, molar_mass = liquid
    volume = molar_mass / AVOGADRO / density
    thermal = BOLTZMANN * np.asarray(temperature, dtype=float)
    return 32.0 * np.pi * volume**2 * tension**3 / (3.0 * (thermal * np.log(saturation_ratio)) ** 3)


def log_rate_slope(theory, temperature, saturation_ratio):
    """Return d ln J / d ln S at constant temperature, and d ln J / dT at constant S.

    Parameters
    ----------
    theory : Theory
        The theory.
    temperature : array_like, shape (...)
        Temperature [K].
    saturation_ratio : array_like, shape (...)
        Over the liquid, > 1 [-].

    Returns
    -------
    by_saturation : ndarray, shape (...)
        d ln J / d ln S [-].
    by_temperature : ndarray, shape (...)
        d ln J / dT [1/K].

    Examples
    --------
    >>> from scatterfit.matter import substance
    >>> fit = reference_theory(substance("water"))
    >>> by_saturation, by_temperature = log_rate_slope(fit, 240.0, 12.0)
    >>> float(by_saturation), float(by_temperature)
    (30.6, 0.754)
    """
    ratio, step = np.asarray(saturation_ratio, dtype=float), 1e-5
    up, down = (theory.log_rate(temperature, ratio * np.exp(sign * step)) for sign in (1, -1))
    kelvin = 1e-3
    warm, cold = (theory.log_rate(temperature + sign * kelvin, ratio) for sign in (1, -1))
    return (up - down) / (2 * step), (warm - cold) / (2 * kelvin)


def _classical(substance):
    def with_1_over_s(temperature, ratio):
        pressure = ratio * substance.saturation_pressure(temperature)
        return classical_log_rate(temperature, pressure, ratio, liquid_of(substance, temperature))

    def without_1_over_s(temperature, ratio):
        return with_1_over_s(temperature, ratio) + np.log(np.maximum(ratio, 1e-300))

    parts = (substance.surface_tension, substance.density, substance.saturation_pressure)
    low = max(part.range[0] for part in parts)
    high = min(part.range[1] for part in parts)
    sources = "; ".join(f"{part.name}: {part.source}" for part in parts)
    book = "Seinfeld and Pandis 2006, eq. 11.47"
    return (
        Theory(WITH_1_OVER_S, "classical, with 1/S", with_1_over_s, (low, high),
               f"{book}, prefactor with 1/S (slope n* + 1); {sources}"),
        Theory(WITHOUT_1_OVER_S, "classical, without 1/S", without_1_over_s, (low, high),
               f"Becker and Doering 1935, prefactor without 1/S (slope n* + 2); {sources}"),
    )


def woelk_strey_liquid(temperature):
    """Return the properties of water that belong to the fit of Woelk and Strey.

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].

    Returns
    -------
    liquid : tuple of ndarray
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol], shape (...).
    pressure : ndarray, shape (...)
        Saturation pressure over the liquid [Pa].

    References
    ----------
    .. [1] J. Woelk, R. Strey, "Homogeneous nucleation of H2O and D2O in comparison: the isotope
       effect", J. Phys. Chem. B 105 (2001) 11683-11701. doi:10.1021/jp0115805

    Examples
    --------
    >>> liquid, pressure = woelk_strey_liquid(240.0)
    >>> float(liquid[0]), float(liquid[1]), float(pressure)
    (0.080015, 981.45, 37.592)
    """
    temperature = np.asarray(temperature, dtype=float)
    tension = 1e-3 * (93.6635 + 0.009133 * temperature - 0.000275 * temperature**2)
    reduced = np.maximum((647.15 - temperature) / 647.15, 0.0)
    density = 0.08 * np.tanh((temperature - 225.0) / 46.2) + 0.7415 * reduced**0.33 + 0.32
    pressure = np.exp(77.34491 - 7235.42465 / temperature - 8.2 * np.log(temperature)
                      + 0.0057113 * temperature)
    return (tension, 1e3 * density, _WATER_MOLAR_MASS), pressure


def _woelk_strey(temperature, ratio):
    liquid, pressure = woelk_strey_liquid(temperature)
    classical = classical_log_rate(temperature, ratio * pressure, ratio, liquid)
    return classical + np.log(np.maximum(ratio, 1e-300)) - 27.56 + 6500.0 / temperature


def _inverse_square(ratio):
    """Return 1 / (ln S)^2, infinite where the vapour is not supersaturated."""
    logarithm = np.log(np.maximum(ratio, 1e-300))
    with np.errstate(divide="ignore"):
        return np.where(logarithm > 1e-6, 1.0 / np.maximum(logarithm, 0.0) ** 2, np.inf)


def _holten(temperature, ratio):
    barrier = (906.8 - 2.914 * temperature) * _inverse_square(ratio)
    return np.log(np.maximum(ratio, 1e-300)) + 4.6 + 0.244 * temperature - barrier


def _miller(temperature, ratio):
    kelvin = np.asarray(temperature, dtype=float)
    front = 328.124 - 5.58243 * kelvin + 0.030365 * kelvin**2 - 5.0319e-5 * kelvin**3
    barrier = (999.814 - 4.10087 * kelvin + 3.01084e-3 * kelvin**2) * _inverse_square(ratio)
    return 2.0 * np.log(np.maximum(ratio, 1e-300)) + front - barrier + _PER_CM3


_WATER = (
    Theory("woelk_strey_2001", "Woelk and Strey 2001", _woelk_strey, (215.0, 265.0),
           "Woelk and Strey, J. Phys. Chem. B 105 (2001) 11683: classical without 1/S times "
           "exp(-27.56 + 6500 K / T), with its own water (range: that of its measurements)"),
    Theory("holten_2005", "Holten et al. 2005", _holten, (200.0, 240.0),
           "Holten, Labetski and van Dongen, J. Chem. Phys. 123 (2005) 104505"),
    Theory("miller_1983", "Miller et al. 1983", _miller, (230.0, 290.0),
           "Miller, Anderson, Kassner and Hagen, J. Chem. Phys. 78 (1983) 3204"),
)
