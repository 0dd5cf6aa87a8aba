"""How long the gas stays adiabatic: heat from the walls, a warm layer, the core it compresses.

After an expansion the walls keep their temperature while the gas is colder. Heat diffuses in. In
the layer that it has reached droplets grow slower or evaporate; the layer swells, and in a closed
chamber that compresses the core, which stays adiabatic and warms. A measured pressure shows the
second, and growth follows it; a stated state of growth does not.
"""

import math
from dataclasses import dataclass

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT

_ALLOWED = 0.01
_REFLECTIONS = 40
FEWEST_WALLS, MOST_WALLS = 2.0, 6.0
"""Wall area over volume, times the least inner width: two walls far apart from all others, and a
cube; the sides of a long tube are 4 [-]."""


@dataclass(frozen=True)
class WallHeat:
    """What the flow of heat from the walls depends on."""

    diffusivity: float
    """Thermal diffusivity of the gas in its growth state [m^2/s]."""
    excess: float
    """Temperature of the walls less that of the gas, over that of the gas [-]."""
    heat_ratio: float
    """cp / cv of the gas [-]."""
    temperature: float
    """Of the gas in its growth state [K]."""
    width: float | None
    """Smallest inner width of the chamber [m]; ``None`` where it is not stated."""

    def layer(self, age):
        """Return the thickness [m] of the warm layer at a wall, so long [s] after the expansion."""
        return layer_thickness(self.diffusivity, age)

    def core_warming(self, age, walls=FEWEST_WALLS):
        """Return by how much the core of a closed chamber has warmed [K], see `core_part`."""
        part = core_part(self.diffusivity, self.heat_ratio, walls / self.width, age)
        return self.temperature * self.excess * part

    def compression(self, age, walls=FEWEST_WALLS):
        """Return dp/p of the core of a closed chamber, so long [s] after the expansion [-]."""
        adiabat = self.heat_ratio / (self.heat_ratio - 1.0)
        return adiabat * self.core_warming(age, walls) / self.temperature


def wall_heat(setup):
    """Return what the flow of heat from the walls depends on, for the growth stage of a pulse.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    heat : WallHeat
        The walls have the chamber's temperature before the expansion.
    """
    path = setup.path
    temperature, pressure = path.reference_temperature, path.reference_pressure
    state = (setup.gas, setup.substance, setup.vapour_fraction, temperature)
    capacity = float(matter.moist_heat_capacity(*state))
    diffusivity = thermal_diffusivity(
        float(matter.moist_conductivity(*state)), capacity, temperature, pressure
    )
    chamber = setup.apparatus.chamber
    excess = max(chamber.temperature / temperature - 1.0, 0.0)
    return WallHeat(diffusivity, excess, capacity / (capacity - GAS_CONSTANT), temperature,
                    chamber.width)


def thermal_diffusivity(conductivity, heat_capacity, temperature, pressure):
    r"""Return the thermal diffusivity of an ideal gas.

    .. math:: \alpha = K / (\rho c_p) = K R T / (p \, c_p), \quad c_p \text{ a mole}

    Parameters
    ----------
    conductivity : float
        Thermal conductivity [W/(m K)].
    heat_capacity : float
        At constant pressure [J/(mol K)].
    temperature : float
        [K].
    pressure : float
        [Pa].

    Returns
    -------
    diffusivity : float
        [m^2/s].

    Examples
    --------
    Argon at 300 K and 1 bar:

    >>> round(1e6 * thermal_diffusivity(0.01773, 20.83, 300.0, 1e5), 1)
    21.2
    """
    return conductivity * GAS_CONSTANT * temperature / (pressure * heat_capacity)


def layer_thickness(diffusivity, age):
    r"""Return how thick the layer at a wall is that heat has reached.

    .. math:: \delta = \sqrt{\pi \alpha t}

    Parameters
    ----------
    diffusivity : float
        Thermal diffusivity of the gas [m^2/s].
    age : float
        Time since the gas became colder than the wall, >= 0 [s].

    Returns
    -------
    thickness : float
        Difference of temperature over its gradient at the wall [m]. There the excess has fallen
        to 21 percent of the wall's; 90 percent of all lies within 1.09 of this thickness.

    Notes
    -----
    Half a space whose surface is kept at another temperature from a moment on: the excess is
    that of the wall times erfc(y / (2 sqrt(alpha t))), the flux K dT / sqrt(pi alpha t). For a gas
    at even pressure the same holds to the letter in the coordinate of mass, y = m / rho of the
    core, as long as rho K does not depend on temperature (it falls by 3 percent over 30 K).

    References
    ----------
    .. [1] H. S. Carslaw, J. C. Jaeger, "Conduction of Heat in Solids", 2nd ed., Oxford 1959,
       sections 2.4 and 2.5.

    Examples
    --------
    >>> round(1e3 * layer_thickness(2.5e-5, 0.1), 2)
    2.8
    """
    return math.sqrt(math.pi * diffusivity * age)


def core_part(diffusivity, heat_ratio, area, age):
    r"""Return which part of the walls' excess a closed chamber's core has gained, compressed.

    .. math:: 1 - \exp(b^2 t) \operatorname{erfc}(b \sqrt t), \quad b = (\gamma - 1)
        \frac{A}{V} \sqrt{\alpha} \qquad \bigl(\approx (\gamma - 1) \frac{A}{V} 2
        \sqrt{\alpha t / \pi}\bigr)

    Parameters
    ----------
    diffusivity : float
        Thermal diffusivity of the gas [m^2/s].
    heat_ratio : float
        cp / cv of the gas [-].
    area : float
        Area of the walls over the volume of the chamber [1/m].
    age : float
        Time since the gas became colder than the walls [s].

    Returns
    -------
    part : float
        Rise of the core's temperature over the walls' excess at the start [-].

    Notes
    -----
    Volume goes with temperature: where the excess is erfc(y / (2 sqrt(alpha t))) the layer has
    swollen by (dT / T) 2 sqrt(alpha t / pi) per area, and the core, which gives that room, is
    compressed by A/V times it: dT/T = (gamma - 1) dV/V, dp/p = gamma dV/V. As the core warms, the
    excess falls; with that the balance is, in Laplace transforms with u the part sought,
    u = (b / sqrt(s)) (1/s - u), whose original stands above. To first order in the excess over
    the temperature, for layers that have not met. It is the balance of energy as well: the heat
    that came in is V dp / (gamma - 1).

    References
    ----------
    .. [1] H. S. Carslaw, J. C. Jaeger, "Conduction of Heat in Solids", 2nd ed., Oxford 1959,
       appendix V (table of Laplace transforms).

    Examples
    --------
    Argon between walls 50 mm apart, for a tenth of a second:

    >>> round(core_part(2.5e-5, 5 / 3, 40.0, 0.1), 4)
    0.0459
    """
    reach = (heat_ratio - 1.0) * area * math.sqrt(diffusivity * age)
    return 1.0 - math.exp(reach**2) * math.erfc(reach)


def centre_warming(diffusivity, width, age):
    r"""Return which part of the walls' excess has come to the middle between two of them.

    .. math:: 2 \sum_{n \ge 0} (-1)^n \operatorname{erfc} \frac{(2 n + 1) w}{4 \sqrt{\alpha t}}

    Parameters
    ----------
    diffusivity : float
        Thermal diffusivity of the gas [m^2/s].
    width : float
        Distance between the walls [m].
    age : float
        Time since the gas became colder than the walls, > 0 [s].

    Returns
    -------
    part : float
        By conduction alone, 0 to 1 [-].

    References
    ----------
    .. [1] H. S. Carslaw, J. C. Jaeger, "Conduction of Heat in Solids", 2nd ed., Oxford 1959,
       section 3.3 (a slab with both surfaces at one temperature).

    Examples
    --------
    >>> round(centre_warming(1.0, 1.0, 0.05), 4)
    0.2277
    """
    reach = width / (4.0 * math.sqrt(diffusivity * age))
    terms = ((-1) ** n * math.erfc((2 * n + 1) * reach) for n in range(_REFLECTIONS))
    return min(2.0 * sum(terms), 1.0)


def adiabatic_lifetime(diffusivity, width):
    """Return how long the middle of a chamber stays adiabatic.

    Parameters
    ----------
    diffusivity : float
        Thermal diffusivity of the gas [m^2/s].
    width : float
        Smallest inner width of the chamber [m].

    Returns
    -------
    lifetime : float
        Until conduction has brought one percent of the walls' excess to the middle between them,
        about width^2 / (63 diffusivity) [s]. The layers then fill 45 percent of the width.

    Examples
    --------
    >>> round(adiabatic_lifetime(2.5e-5, 0.05), 2)
    1.59
    """
    low, high = 1e-4, 1.0
    for _ in range(60):
        middle = math.sqrt(low * high)
        if centre_warming(1.0, 1.0, middle) < _ALLOWED:
            low = middle
        else:
            high = middle
    return low * width**2 / diffusivity
