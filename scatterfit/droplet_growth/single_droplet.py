"""Growth rate of one droplet: heat and vapour in balance at its own temperature."""

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.transition import transition_factor

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
    # ln of the pressure and the logarithm of what a flat surface would hold: one exponential.
    log_pressure = np.log(pressure)
    thinness = 1.0 / (pressure * radius)
    warm_thinness = thinness * temperature
    mass, thermal = accommodation
    for _ in range(steps):
        flow, conduction, path, heat_path = properties.film.at(
            0.5 * (droplet_temperature + temperature))
        flow *= transition_factor(path * thinness, mass)
        conduction *= transition_factor(heat_path * warm_thinness, thermal)
        exponent, latent, tension = properties.liquid.at(droplet_temperature)
        inverse = 1.0 / droplet_temperature
        exponent += tension * inverse / radius
        exponent -= log_pressure
        surface = np.minimum(np.exp(exponent, out=exponent), _LARGEST_SURFACE_FRACTION)
        flux = flow * (np.log1p(-surface) - far)
        surface_slope = surface / (1.0 - surface) * latent * inverse * (inverse / GAS_CONSTANT)
        loss = latent * flow * surface_slope
        change = (latent * flux - conduction * (droplet_temperature - temperature)) / (
            conduction + loss
        )
        droplet_temperature = droplet_temperature + change
    per_flux = properties.molar_volume / radius
    rate = (flux - flow * surface_slope * change) * per_flux
    by_vapour = per_flux * flow * conduction / (conduction + loss)
    return rate, droplet_temperature, by_vapour, surface_slope
