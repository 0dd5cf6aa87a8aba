"""What a background of larger particles takes between birth and detection."""

from dataclasses import dataclass

import numpy as np

from scatterfit.constants import AVOGADRO, BOLTZMANN, GAS_CONSTANT, STANDARD_PRESSURE
from scatterfit.droplet_growth.properties import growth_properties
from scatterfit.droplet_growth.single_droplet import growth_rate as radius_rate
from scatterfit.droplet_growth.transition import transition_factor, vapour_mean_free_path
from scatterfit.matter import diffusivity, mean_molecular_speed

_FIRST = 1.05
"""Critical sizes from which on a droplet counts as born (common practice, no source)."""
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(16)
_COLDER, _WARMER = 5.0, 60.0  # droplets against the gas [K]
_WARMTH, _STEPS = 10.0, 6
_MOMENTS = 8


@dataclass(frozen=True)
class Background:
    """Particles that were there before the expansion, one size."""

    concentration: object
    """At the gas density in question, a number or shape (n,) [1/m^3]."""
    diameter: object
    """A number or shape (n,) [m]."""
    until: object = None
    """Diameter at which a droplet counts as detected, likewise [m]; ``None``: that of the
    particles, beyond which it is no smaller than what it meets."""


@dataclass(frozen=True)
class Surroundings:
    """The gas around a growing cluster; numbers, or arrays of one shape for many pulses."""

    temperature: object
    """[K]."""
    pressure: object
    """[Pa]."""
    saturation_ratio: object
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
    sink : ndarray, shape (...)
        Part of the vapour lost per time [1/s].

    References
    ----------
    .. [1] M. Kulmala et al., "On the formation, growth and composition of nucleation mode
       particles", Tellus B 53 (2001) 479-490. doi:10.3402/tellusb.v53i4.16622

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> float(condensation_sink(state, Background(1e9, 100e-9)))
    0.00372
    """
    diffusion = _vapour_diffusion(surroundings)
    speed = mean_molecular_speed(surroundings.temperature, surroundings.substance.molar_mass)
    knudsen = 2.0 * vapour_mean_free_path(diffusion, speed) / background.diameter
    factor = transition_factor(knudsen, 1.0)
    return 2.0 * np.pi * diffusion * factor * background.diameter * background.concentration


def _vapour_diffusion(surroundings):
    law = diffusivity(surroundings.substance, surroundings.gas)
    return law(surroundings.temperature) * STANDARD_PRESSURE / surroundings.pressure


def critical_diameter(surroundings):
    r"""Return the size at which a droplet neither grows nor shrinks, 4 sigma v / (k T ln S).

    Parameters
    ----------
    surroundings : Surroundings
        The gas.

    Returns
    -------
    diameter : ndarray, shape (...)
        Critical diameter [m].

    References
    ----------
    .. [1] W. Thomson, Philosophical Magazine 42 (1871) 448-452. doi:10.1080/14786447108640606

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> float(critical_diameter(state)) * 1e9
    1.19
    """
    substance, temperature = surroundings.substance, surroundings.temperature
    volume = substance.molar_mass / AVOGADRO / substance.density(temperature)
    length = 4.0 * substance.surface_tension(temperature) * volume / (BOLTZMANN * temperature)
    return length / np.log(surroundings.saturation_ratio)


def growth_rate(surroundings, diameter):
    r"""Return how fast a small droplet's diameter grows, at the temperature that it takes.

    The law of ``droplet_growth.single_droplet``: heat and vapour in balance. A droplet in the
    strongly supersaturated gas of a hold is 10 to 17 K warmer than it, and grows half as fast
    as one that is not.

    Parameters
    ----------
    surroundings : Surroundings
        The gas.
    diameter : array_like, shape (...)
        Diameter, > 0 [m].

    Returns
    -------
    growth : ndarray, shape (...)
        dd/dt [m/s]; negative below the critical size.

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> float(growth_rate(state, [10e-9])[0])
    5.83e-4
    """
    substance = surroundings.substance
    temperature = np.asarray(surroundings.temperature, dtype=float)
    pressure = np.asarray(surroundings.pressure, dtype=float)
    fraction = surroundings.saturation_ratio * substance.saturation_pressure(temperature) / pressure
    properties = growth_properties(
        substance, surroundings.gas, float(np.mean(fraction)), float(temperature.min()) - _COLDER,
        float(temperature.max()) + _WARMER, float(temperature.mean()))
    # Growth is nil at the critical size where volume over radius is that of each pulse's liquid.
    volume = substance.molar_mass / substance.density(temperature)
    radius = 0.5 * np.asarray(diameter, dtype=float) * (properties.molar_volume / volume)
    guess = temperature + np.full(radius.shape, _WARMTH)
    grown, *_ = radius_rate(properties, radius, (temperature, pressure, fraction), (1.0, 1.0),
                            guess, steps=_STEPS)
    return 2.0 * grown


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


def loss_exponent(surroundings, background):
    r"""Return how many times over a droplet is lost on its way to the size of detection.

    .. math:: \Lambda = \int \frac{K(d, d_b) \, N_b}{dd / dt} \, dd , \qquad P = e^{-\Lambda}

    from 1.05 times the critical size on, where P is the part of the droplets that survives.

    Parameters
    ----------
    surroundings : Surroundings
        The gas during the hold, arrays of shape (n,).
    background : Background
        The particles, at its density.

    Returns
    -------
    exponent : ndarray, shape (n,)
        Losses per droplet [-].

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
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> float(loss_exponent(state, Background(1e12, 100e-9))[0]) * 1e6
    4.61
    """
    temperature, pressure, ratio, number, large = (
        np.atleast_1d(np.asarray(value, dtype=float))[:, None] for value in np.broadcast_arrays(
            surroundings.temperature, surroundings.pressure, surroundings.saturation_ratio,
            background.concentration, background.diameter))
    around = Surroundings(temperature, pressure, ratio, surroundings.substance, surroundings.gas)
    critical = critical_diameter(around)
    until = large if background.until is None else np.atleast_1d(background.until)[:, None]
    # Growth starts as d - d_critical does: in its logarithm the integrand is smooth.
    low = np.log((_FIRST - 1.0) * critical)
    high = np.maximum(np.log(np.maximum(until - critical, 1e-300)), low)
    beyond = np.exp(0.5 * (low + high) + 0.5 * (high - low) * _NODES)
    sizes = critical + beyond
    met = coagulation_coefficient(around, sizes, large, around.substance.density(temperature))
    lost = met * number * beyond / growth_rate(around, sizes)
    return 0.5 * (high - low)[:, 0] * (lost @ _WEIGHTS)


def vapour_taken(surroundings, background, duration):
    r"""Return which part of the vapour the particles have taken in the course of a hold.

    They grow, so that their sink does as well: the part is what their own volume gains,

    .. math:: f(t) = N_b \frac{\pi}{6} \frac{d_b(t)^3 - d_b(0)^3}{v_m} \frac{k T}{S p_s}

    with vapour and temperature as at first, so that a part beyond some 0.2 is too large.

    Parameters
    ----------
    surroundings : Surroundings
        The gas during the hold, arrays of shape (n,).
    background : Background
        The particles, at its density; they are wettable.
    duration : array_like, shape (n,)
        Of the hold [s].

    Returns
    -------
    taken : ndarray, shape (n, 8)
        At the middles of eight equal parts of the duration [-].

    Examples
    --------
    >>> from scatterfit.matter import carrier, substance
    >>> state = Surroundings(240.0, 60e3, 12.0, substance("water"), carrier("argon"))
    >>> vapour_taken(state, Background(1e11, 100e-9), 1e-3)[0, [0, 7]] * 100
    array([0.002, 0.190])
    """
    temperature, pressure, ratio, number, size, duration = (
        np.array(values, dtype=float, ndmin=1) for values in np.broadcast_arrays(
            surroundings.temperature, surroundings.pressure, surroundings.saturation_ratio,
            background.concentration, background.diameter, duration))
    substance = surroundings.substance
    around = Surroundings(temperature, pressure, ratio, substance, surroundings.gas)
    molecule = substance.molar_mass / AVOGADRO / substance.density(temperature)
    vapour = ratio * substance.saturation_pressure(temperature) / (BOLTZMANN * temperature)
    least = np.maximum(size, _FIRST * critical_diameter(around))
    grown, step = least, duration / _MOMENTS
    taken = np.empty((temperature.size, _MOMENTS))
    for moment in range(_MOMENTS):
        length = 0.5 * step if moment == 0 else step
        first = growth_rate(around, grown)  # the midpoint rule: d(t) is nearly straight
        grown = grown + length * growth_rate(around, grown + 0.5 * length * first)
        taken[:, moment] = (grown**3 - least**3) * np.pi / 6.0 * number / (molecule * vapour)
    return taken
