"""Growth rate of one droplet: heat and vapour in balance at its own temperature."""

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.properties import horner, mean_speed
from scatterfit.droplet_growth.transition import (
    heat_mean_free_path,
    transition_factor,
    vapour_mean_free_path,
)

_LARGEST_SURFACE_FRACTION = 0.9


def growth_rate(properties, radius, gas, accommodation, droplet_temperature, steps=1):
    r"""Return dr/dt of droplets and their temperature.

    Vapour flows in with Stefan flow, heat flows out by conduction, both in the transition
    regime, and the droplet's temperature makes them balance:

    .. math::
        r \frac{dr}{dt} = v_l \, \beta_m \frac{p D}{R T_f} \ln \frac{1 - y_s}{1 - y} , \qquad
        L \frac{r}{v_l} \frac{dr}{dt} = \beta_T K (T_d - T) , \qquad
        y_s = \frac{p_s(T_d)}{p} \exp \frac{2 \sigma v_l}{R T_d r}

    with transport coefficients at the film temperature :math:`T_f = (T_d + T)/2`. The
    temperature is improved by Newton steps from the one given, so that a caller who iterates
    anyway pays for one step a call.

    Parameters
    ----------
    properties : GrowthProperties
        Of the pulse.
    radius : ndarray, shape (...)
        Droplet radius, > 0 [m].
    gas : tuple of ndarray
        Temperature [K], pressure [Pa] and vapour mole fraction [-] far from the droplet;
        they broadcast against the radius.
    accommodation : tuple of float or ndarray
        Mass and thermal accommodation coefficients [-].
    droplet_temperature : ndarray, shape (...)
        First guess [K].
    steps : int
        Newton steps.

    Returns
    -------
    rate : ndarray, shape (...)
        dr/dt [m/s].
    droplet_temperature : ndarray, shape (...)
        Balanced temperature [K].
    by_vapour : ndarray, shape (...)
        d(rate)/d(vapour fraction) at fixed gas temperature, >= 0 [m/s].
    surface_slope : ndarray, shape (...)
        d(y_s)/dT of the vapour fraction at the surface: a warmer gas acts like a drier one [1/K].

    References
    ----------
    .. [1] N. A. Fuchs, Evaporation and Droplet Growth in Gaseous Media, Pergamon 1959.
    .. [2] P. E. Wagner, "Aerosol growth by condensation", in Aerosol Microphysics II, ed.
       W. H. Marlow, Springer 1982 (cited from memory).
    """
    temperature, pressure, fraction = gas
    far = np.log1p(-fraction)
    inverse_pressure = 1.0 / pressure
    for _ in range(steps):
        film = properties.scaled(0.5 * (droplet_temperature + temperature))
        film_temperature = properties.middle + properties.half_width * film
        flow, conduction = _conductances(
            properties, radius, (temperature, pressure), accommodation, (film, film_temperature)
        )
        own = properties.scaled(droplet_temperature)
        latent = horner(properties.latent_heat_of, own)
        inverse_thermal = 1.0 / (GAS_CONSTANT * droplet_temperature)
        curvature = (
            (2.0 * properties.molar_volume) * horner(properties.tension_of, own)
            * inverse_thermal / radius
        )
        surface = np.exp(horner(properties.log_pressure, own) + curvature) * inverse_pressure
        surface = np.minimum(surface, _LARGEST_SURFACE_FRACTION)
        flux = flow * (np.log1p(-surface) - far)
        slope = -flow * surface / (1.0 - surface) * latent * inverse_thermal / droplet_temperature
        change = (latent * flux - conduction * (droplet_temperature - temperature)) / (
            conduction - latent * slope
        )
        droplet_temperature = droplet_temperature + change
    per_flux = properties.molar_volume / radius
    rate = (flux + slope * change) * per_flux
    surface_slope = -slope / flow
    by_vapour = per_flux * flow / (1.0 - latent * slope / conduction)
    return rate, droplet_temperature, by_vapour, surface_slope


def _conductances(properties, radius, gas, accommodation, film):
    """Return what the vapour flux [mol/(m s)] and the heat flux [W/(m K)] are multiples of."""
    temperature, pressure = gas
    scaled, film_temperature = film
    density_diffusivity = horner(properties.diffusivity_of, scaled) / GAS_CONSTANT
    conductivity = horner(properties.conductivity_of, scaled)
    vapour_speed = mean_speed(film_temperature, properties.vapour_molar_mass)
    gas_speed = vapour_speed * np.sqrt(properties.vapour_molar_mass / properties.gas_molar_mass)
    molar_density = pressure / (GAS_CONSTANT * temperature)
    vapour_path = vapour_mean_free_path(
        density_diffusivity * (GAS_CONSTANT * film_temperature) / pressure, vapour_speed
    )
    heat_path = heat_mean_free_path(
        conductivity, molar_density, gas_speed, properties.heat_capacity, GAS_CONSTANT
    )
    mass, thermal = accommodation
    flow = density_diffusivity * transition_factor(vapour_path / radius, mass)
    conduction = conductivity * transition_factor(heat_path / radius, thermal)
    return flow, conduction
