"""What a background of larger particles takes between birth and detection."""

from dataclasses import dataclass

import numpy as np

from scatterfit.constants import AVOGADRO, BOLTZMANN, GAS_CONSTANT, STANDARD_PRESSURE
from scatterfit.droplet_growth.transition import transition_factor, vapour_mean_free_path
from scatterfit.matter import diffusivity, mean_molecular_speed

_STEPS = 201


@dataclass(frozen=True)
class Background:
    """Particles that were there before the expansion, one size."""

    concentration: float
    """At the gas density of the hold [1/m^3]."""
    diameter: float
    """[m]."""


@dataclass(frozen=True)
class Surroundings:
    """The gas around a growing cluster."""

    temperature: float
    """[K]."""
    pressure: float
    """[Pa]."""
    saturation_ratio: float
    """Over the liquid [-]."""
    substance: object
    """The vapour, a ``Substance``."""
    gas: object
    """The carrier, a ``Gas``."""


def condensation_sink(surroundings, background):
    r"""Return the rate constant at which vapour is lost to a background.

    .. math:: CS = 2 \pi D \, \beta_m(Kn) \, d \, N

    Parameters
    ----------
    surroundings : Surroundings
        The gas.
    background : Background
        The particles.

    Returns
    -------
    sink : float
        Part of the vapour lost per time [1/s].

    References
    ----------
    .. [1] M. Kulmala et al., "On the formation, growth and composition of nucleation mode
       particles", Tellus B 53 (2001) 479-490. doi:10.3402/tellusb.v53i4.16622

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> condensation_sink(state, Background(1e9, 100e-9))
    0.00372
    """
    diffusion = _vapour_diffusion(surroundings)
    speed = mean_molecular_speed(surroundings.temperature, surroundings.substance.molar_mass)
    knudsen = 2.0 * vapour_mean_free_path(diffusion, speed) / background.diameter
    factor = transition_factor(knudsen, 1.0)
    return float(2.0 * np.pi * diffusion * factor * background.diameter * background.concentration)


def _vapour_diffusion(surroundings):
    law = diffusivity(surroundings.substance, surroundings.gas)
    return law(surroundings.temperature) * STANDARD_PRESSURE / surroundings.pressure


def growth_rate(surroundings, diameter):
    r"""Return how fast a small droplet's diameter grows, gas and droplet equally warm.

    .. math:: \frac{dd}{dt} = \frac{4 D v_m \beta_m}{d} \frac{p_s}{k T}
        (S - e^{4 \sigma v_m / k T d})

    Parameters
    ----------
    surroundings : Surroundings
        The gas.
    diameter : array_like, shape (n,)
        Diameter, > 0 [m].

    Returns
    -------
    growth : ndarray, shape (n,)
        dd/dt [m/s]; negative below the critical size.

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> float(growth_rate(state, [10e-9])[0])
    9.74e-4
    """
    diameter = np.asarray(diameter, dtype=float)
    substance, temperature = surroundings.substance, surroundings.temperature
    diffusion = _vapour_diffusion(surroundings)
    path = vapour_mean_free_path(diffusion, mean_molecular_speed(temperature, substance.molar_mass))
    volume = substance.molar_mass / AVOGADRO / substance.density(temperature)
    thermal = BOLTZMANN * temperature
    curved = np.exp(4.0 * substance.surface_tension(temperature) * volume / (thermal * diameter))
    excess = substance.saturation_pressure(temperature) / thermal
    excess = excess * (surroundings.saturation_ratio - curved)
    factor = transition_factor(2.0 * path / diameter, 1.0)
    return 4.0 * diffusion * volume * factor * excess / diameter


def particle_diffusivity(surroundings, diameter):
    r"""Return the diffusion coefficient of a particle in the gas.

    .. math:: D = \frac{k T C_c}{3 \pi \mu d}, \quad
        C_c = 1 + Kn (1.257 + 0.4 e^{-1.1 / Kn}), \quad Kn = 2 \lambda / d

    Parameters
    ----------
    surroundings : Surroundings
        The gas.
    diameter : array_like, shape (n,)
        Diameter, > 0 [m].

    Returns
    -------
    diffusivity : ndarray, shape (n,)
        Diffusion coefficient [m^2/s].

    References
    ----------
    .. [1] J. H. Seinfeld, S. N. Pandis, Atmospheric Chemistry and Physics, 2nd ed., Wiley 2006,
       eqs. 9.6, 9.34 and 9.73.

    Examples
    --------
    Air at 293 K; the table of the reference has 6.8e-10 m2/s for 0.1 um (from memory):

    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(293.15, 101325.0, 1.0, substance("water"), carrier("air"))
    >>> round(float(particle_diffusivity(state, [100e-9])[0]) * 1e10, 1)
    6.8
    """
    diameter = np.asarray(diameter, dtype=float)
    temperature, gas = surroundings.temperature, surroundings.gas
    viscosity = gas.viscosity(temperature)
    speed = mean_molecular_speed(temperature, gas.molar_mass)
    density = gas.molar_mass * surroundings.pressure / (GAS_CONSTANT * temperature)
    knudsen = 2.0 * (2.0 * viscosity / (density * speed)) / diameter
    slip = 1.0 + knudsen * (1.257 + 0.4 * np.exp(-1.1 / knudsen))
    return BOLTZMANN * temperature * slip / (3.0 * np.pi * viscosity * diameter)


def coagulation_coefficient(surroundings, small, large, density):
    r"""Return how often two sizes of particles meet, for all Knudsen numbers.

    .. math:: K = 2 \pi (D_1 + D_2)(d_1 + d_2) \frac{1 + Kn}{1 + 2 Kn (1 + Kn)}, \quad
        Kn = \frac{4 (D_1 + D_2)}{(d_1 + d_2) \sqrt{\bar c_1^2 + \bar c_2^2}}

    Parameters
    ----------
    surroundings : Surroundings
        The gas.
    small, large : array_like, shape (n,)
        Diameters, > 0 [m].
    density : float
        Of the particles [kg/m^3].

    Returns
    -------
    coefficient : ndarray, shape (n,)
        Encounters per time, volume and number density of each [m^3/s].

    References
    ----------
    .. [1] B. Dahneke, "Simple kinetic theory of Brownian diffusion in vapors and aerosols", in
       Theory of Dispersed Multiphase Flow, Academic Press 1983 (as in Seinfeld and Pandis 2006,
       table 13.1).

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> air = Surroundings(298.15, 101325.0, 1.0, substance("water"), carrier("air"))
    >>> float(coagulation_coefficient(air, [100e-9], [100e-9], 1000.0)[0]) * 1e15
    1.50
    """
    small, large = np.asarray(small, dtype=float), np.asarray(large, dtype=float)
    moving = particle_diffusivity(surroundings, small) + particle_diffusivity(surroundings, large)
    together, thermal = small + large, BOLTZMANN * surroundings.temperature
    masses = [density * np.pi / 6.0 * size**3 for size in (small, large)]
    speed = np.sqrt(sum(8.0 * thermal / (np.pi * mass) for mass in masses))
    knudsen = 4.0 * moving / (together * speed)
    return 2 * np.pi * moving * together * (1 + knudsen) / (1 + 2 * knudsen * (1 + knudsen))


def survival(diameter, sink, growth):
    r"""Return the part of new droplets that reaches the last size before the background.

    .. math:: P = \exp \left( - \int \frac{CoagS(d)}{dd / dt} \, dd \right)

    Parameters
    ----------
    diameter : ndarray, shape (n,)
        Ascending sizes from birth to detection [m].
    sink : ndarray, shape (n,)
        Rate at which droplets of each size are lost [1/s].
    growth : ndarray, shape (n,)
        dd/dt, > 0 [m/s].

    Returns
    -------
    probability : float
        Of survival, between 0 and 1 [-].

    References
    ----------
    .. [1] V.-M. Kerminen, M. Kulmala, "Analytical formulae connecting the 'real' and the
       'apparent' nucleation rate and the nuclei number concentration for atmospheric nucleation
       events", J. Aerosol Sci. 33 (2002) 609-622. doi:10.1016/S0021-8502(01)00194-X
    .. [2] K. E. J. Lehtinen, M. Dal Maso, M. Kulmala, V.-M. Kerminen, "Estimating nucleation
       rates from apparent particle formation rates and vice versa", J. Aerosol Sci. 38 (2007)
       988-994. doi:10.1016/j.jaerosci.2007.06.009

    Examples
    --------
    >>> size = np.linspace(1e-9, 3e-9, 201)
    >>> survival(size, np.full(201, 1.0), np.full(201, 1e-8))
    0.819
    """
    lost = np.asarray(sink) / np.asarray(growth)
    return float(np.exp(-np.sum(0.5 * (lost[1:] + lost[:-1]) * np.diff(diameter))))


@dataclass(frozen=True)
class Losses:
    """What a background took from one isotherm's droplets."""

    sink: float
    """Condensation sink [1/s]."""
    growth: float
    """dd/dt of a droplet of twice the critical size [m/s]."""
    survival: float
    """Part of the droplets that reaches the detected size [-]."""
    detected: float
    """That size [m]."""
    vapour: float | None = None
    """Part of the vapour that the background takes during the hold [-]."""


def losses(surroundings, background, detected=None, duration=None):
    """Return what a background takes from the droplets of a pulse.

    Parameters
    ----------
    surroundings : Surroundings
        The gas during the hold.
    background : Background
        The particles.
    detected : float, optional
        Diameter at which a droplet counts [m]; that of the background when absent, beyond which
        it is no smaller than what it meets.
    duration : float, optional
        Of the hold [s].

    Returns
    -------
    losses : Losses
        Sink, growth and survival from 1.05 times the critical size on.

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> losses(state, Background(1e12, 100e-9)).survival
    1.00
    """
    substance, temperature = surroundings.substance, surroundings.temperature
    detected = background.diameter if detected is None else detected
    density = substance.density(temperature)
    volume = substance.molar_mass / AVOGADRO / density
    critical = 4.0 * substance.surface_tension(temperature) * volume
    critical = critical / (BOLTZMANN * temperature * np.log(surroundings.saturation_ratio))
    first = 1.05 * float(critical)
    sizes = np.geomspace(first, max(detected, 1.1 * first), _STEPS)
    growing = growth_rate(surroundings, sizes)
    met = coagulation_coefficient(surroundings, sizes, background.diameter, density)
    sink = condensation_sink(surroundings, background)
    taken = None if duration is None else float(-np.expm1(-sink * duration))
    return Losses(sink,
                  float(growth_rate(surroundings, [2.0 * float(critical)])[0]),
                  survival(sizes, met * background.concentration, growing), float(sizes[-1]),
                  taken)
