"""The properties that growth asks for thousands of times, as polynomials over one pulse's range."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.transition import heat_mean_free_path, vapour_mean_free_path

_NODES = 16
_DEGREE_PRESSURE = 9
_DEGREE_LATENT = 7
_DEGREE_OTHER = 3
_CELLS = 4096
_REACH = 1.25


@dataclass(frozen=True)
class GrowthProperties:
    """Properties of one vapour in one gas between two temperatures.

    The correlations of ``matter`` are smooth; a polynomial through Chebyshev points follows them
    to a few parts in a million over 90 K (the latent heat of supercooled water, which turns
    within a few kelvin, to 3e-5) and costs a tenth of their time.
    """

    middle: float
    """Centre of the range [K]."""
    half_width: float
    """Half of the range [K]."""
    log_pressure: np.ndarray
    """Coefficients of ln(saturation pressure / Pa), highest power first, shape (10,)."""
    conductivity_of: np.ndarray
    """Coefficients of the conductivity of the moist gas [W/(m K)], shape (4,)."""
    diffusivity_of: np.ndarray
    """Coefficients of D p / T, the diffusivity times molar density and R [Pa m^2/(s K)], (4,)."""
    latent_heat_of: np.ndarray
    """Coefficients of the latent heat [J/mol], shape (8,)."""
    tension_of: np.ndarray
    """Coefficients of the surface tension [N/m], shape (4,)."""
    molar_volume: float
    """Of the liquid at the droplet's typical temperature [m^3/mol]."""
    heat_capacity: float
    """Of the moist gas at constant pressure [J/(mol K)]."""
    vapour_molar_mass: float
    """[kg/mol]."""
    gas_molar_mass: float
    """Mean of the moist gas [kg/mol]."""

    def scaled(self, temperature):
        """Return the temperature [K] on the polynomials' own scale, -1 to 1 [-]."""
        return (temperature - self.middle) * (1.0 / self.half_width)

    @cached_property
    def liquid(self):
        """Return a table of ln p_s [-], latent heat [J/mol] and 2 sigma v_l / R [K m]."""
        _, scaled = self._grid()
        twice = 2.0 * self.molar_volume / GAS_CONSTANT
        return self._table([
            horner(self.log_pressure, scaled), horner(self.latent_heat_of, scaled),
            twice * horner(self.tension_of, scaled),
        ])

    @cached_property
    def film(self):
        """Return a table of what the fluxes ask of the gas about a droplet.

        D p / (R T) [mol/(m s)] and the conductivity [W/(m K)]; then the mean free paths that pin
        each flux, that of vapour times the pressure [Pa m] and that of heat times the pressure
        over the gas's temperature [Pa m/K].
        """
        temperature, scaled = self._grid()
        flow = horner(self.diffusivity_of, scaled) / GAS_CONSTANT
        conductivity = horner(self.conductivity_of, scaled)
        diffusivity = flow * (GAS_CONSTANT * temperature)
        # One pascal and one kelvin: the pressure and the gas's temperature are put in later.
        return self._table([
            flow, conductivity,
            vapour_mean_free_path(diffusivity, mean_speed(temperature, self.vapour_molar_mass)),
            heat_mean_free_path(conductivity, 1.0 / GAS_CONSTANT,
                                mean_speed(temperature, self.gas_molar_mass),
                                self.heat_capacity, GAS_CONSTANT),
        ])

    @cached_property
    def latent(self):
        """Return a table of the latent heat alone [J/mol]."""
        return self.liquid.row(1)

    def _grid(self):
        """Return the table's temperatures [K] and where they lie on the polynomials' scale [-]."""
        scaled = np.linspace(-_REACH, _REACH, _CELLS + 1)
        return self.middle + self.half_width * scaled, scaled

    def _table(self, rows):
        """Return rows of values on the grid as a table."""
        step = 2.0 * _REACH * self.half_width / _CELLS
        return _Table(self.middle - _REACH * self.half_width, 1.0 / step, np.array(rows))


class _Table:
    """Several properties between temperatures a few hundredths of a kelvin apart, straight between.

    One lookup gives them all, for a fifth of what the polynomials cost, and right to 1e-7. Beyond
    its ends, a quarter outside the pulse's range, the end values hold.
    """

    def __init__(self, start, cells_per_kelvin, values):
        self.start, self.cells_per_kelvin = start, cells_per_kelvin
        self.values, self.rises = values[..., :-1], np.diff(values)
        self.last = self.values.shape[-1] - 1e-9

    @cached_property
    def interleaved(self):
        """Return the table as compiled loops read it.

        Its first temperature [K], cells per kelvin [1/K], and value and rise of each property side
        by side, shape (cells, 2 rows).
        """
        pairs = np.stack([self.values, self.rises], axis=1).reshape(-1, self.values.shape[-1])
        return float(self.start), float(self.cells_per_kelvin), np.ascontiguousarray(pairs.T)

    def row(self, index):
        """Return a table of one property alone."""
        return _Table(self.start, self.cells_per_kelvin,
                      np.append(self.values[index], self.values[index, -1] + self.rises[index, -1]))

    def at(self, temperature):
        """Return the properties at temperatures of shape (...) [K], shape (rows, ...)."""
        place = (temperature - self.start) * self.cells_per_kelvin
        np.minimum(np.maximum(place, 0.0, out=place), self.last, out=place)
        cell = place.astype(np.intp)
        place -= cell
        values = self.rises.take(cell, axis=-1)
        values *= place
        values += self.values.take(cell, axis=-1)
        return values


def horner(coefficients, argument):
    """Return a polynomial's values.

    Parameters
    ----------
    coefficients : ndarray, shape (k,)
        Highest power first [any].
    argument : ndarray, shape (...)
        Where to evaluate it [-].

    Returns
    -------
    value : ndarray, shape (...)
        Values [any].

    Examples
    --------
    >>> horner(np.array([1.0, 0.0, -1.0]), np.array([2.0, 3.0]))
    array([3., 8.])
    """
    value = argument * coefficients[0]
    value += coefficients[1]
    for c in coefficients[2:]:
        value *= argument
        value += c
    return value


def growth_properties(substance, gas, vapour_fraction, low, high, droplet_temperature):
    """Return the properties of a vapour in a gas, ready for growth.

    Parameters
    ----------
    substance : matter.Substance
        The vapour and its liquid.
    gas : matter.Gas
        The dry carrier.
    vapour_fraction : float
        Mole fraction of vapour in the moist gas [-].
    low, high : float
        Range of temperature [K].
    droplet_temperature : float
        Where the liquid's density is taken [K].

    Returns
    -------
    properties : GrowthProperties
        Polynomials and constants.
    """
    middle, half_width = 0.5 * (low + high), 0.5 * (high - low)
    scaled = np.cos(np.pi * (np.arange(_NODES) + 0.5) / _NODES)
    temperature = middle + half_width * scaled

    def coefficients(values, degree=_DEGREE_OTHER):
        return np.polyfit(scaled, values, degree)

    diffusivity = matter.diffusivity(substance, gas)(temperature) * 101325.0 / temperature
    conductivity = matter.moist_conductivity(gas, substance, vapour_fraction, temperature)
    heat_capacity = matter.moist_heat_capacity(gas, substance, vapour_fraction, temperature)
    density = float(substance.density(droplet_temperature))
    dry = 1.0 - vapour_fraction
    return GrowthProperties(
        middle=middle,
        half_width=half_width,
        log_pressure=coefficients(
            np.log(substance.saturation_pressure(temperature)), _DEGREE_PRESSURE
        ),
        conductivity_of=coefficients(conductivity),
        diffusivity_of=coefficients(diffusivity),
        latent_heat_of=coefficients(substance.latent_heat(temperature), _DEGREE_LATENT),
        tension_of=coefficients(substance.surface_tension(temperature)),
        molar_volume=substance.molar_mass / density,
        heat_capacity=float(np.mean(heat_capacity)),
        vapour_molar_mass=substance.molar_mass,
        gas_molar_mass=dry * gas.molar_mass + vapour_fraction * substance.molar_mass,
    )


def saturation_pressure(properties, temperature):
    """Return the saturation pressure over a flat liquid.

    Parameters
    ----------
    properties : GrowthProperties
        Of the pulse.
    temperature : ndarray, shape (...)
        Temperature [K].

    Returns
    -------
    pressure : ndarray, shape (...)
        Saturation pressure [Pa].
    """
    return np.exp(horner(properties.log_pressure, properties.scaled(temperature)))


def mean_speed(temperature, molar_mass):
    """Return the mean speed of molecules, sqrt(8 R T / (pi M)).

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    molar_mass : float
        Molar mass [kg/mol].

    Returns
    -------
    speed : ndarray, shape (...)
        Mean speed [m/s].

    Examples
    --------
    >>> float(mean_speed(300.0, 0.039948))
    398.8
    """
    return np.sqrt((8.0 * GAS_CONSTANT / (np.pi * molar_mass)) * temperature)
