"""The classical rate of homogeneous nucleation."""

import numpy as np

from scatterfit.constants import AVOGADRO, BOLTZMANN


def classical_log_rate(temperature, vapour_pressure, saturation_ratio, liquid):
    r"""Return ln of the classical nucleation rate.

    .. math::
        J = \frac{1}{S} \sqrt{\frac{2 \sigma}{\pi m}} v \left( \frac{p_v}{k T} \right)^2
            \exp \left( - \frac{16 \pi v^2 \sigma^3}{3 (k T)^3 (\ln S)^2} \right)

    Parameters
    ----------
    temperature : array_like, shape (...)
        Temperature [K].
    vapour_pressure : array_like, shape (...)
        Partial pressure of the vapour [Pa].
    saturation_ratio : array_like, shape (...)
        Over the flat liquid [-]; at or below one the rate is zero.
    liquid : tuple of array_like
        Surface tension [N/m], density [kg/m^3] and molar mass [kg/mol].

    Returns
    -------
    log_rate : ndarray, shape (...)
        ln(J / (1/(m^3 s))) [-], minus infinity where the vapour is not supersaturated.

    Notes
    -----
    This is the form with 1/S in the prefactor. The older form without it is larger by a
    factor S: say which is meant when a rate is compared with theory.

    References
    ----------
    .. [1] J. H. Seinfeld, S. N. Pandis, Atmospheric Chemistry and Physics, 2nd ed., Wiley 2006,
       eq. 11.47.

    Examples
    --------
    Water at 293 K and S = 5; the table of the reference has 1.57e11 per cm3 and s:

    >>> liquid = (72.75e-3, 1000.0, 0.018015)
    >>> ln_j = classical_log_rate(293.0, 5 * 2336.5, 5.0, liquid)
    >>> round(float(ln_j / np.log(10)) - 6, 1)
    11.2
    """
    tension, density, molar_mass = (np.asarray(value, dtype=float) for value in liquid)
    temperature = np.asarray(temperature, dtype=float)
    mass = molar_mass / AVOGADRO
    volume = mass / density
    thermal = BOLTZMANN * temperature
    ratio = np.maximum(np.asarray(saturation_ratio, dtype=float), 1e-300)
    log_ratio = np.log(ratio)
    supersaturated = log_ratio > 1e-6
    safe = np.where(supersaturated, log_ratio, 1.0)
    barrier = 16.0 * np.pi * volume**2 * tension**3 / (3.0 * thermal**3 * safe**2)
    monomers = np.maximum(np.asarray(vapour_pressure, dtype=float) / thermal, 1e-300)
    prefactor = 0.5 * np.log(2.0 * tension / (np.pi * mass)) + np.log(volume * monomers**2)
    return np.where(supersaturated, prefactor - safe - barrier, -np.inf)


def critical_radius(temperature, saturation_ratio, liquid):
    r"""Return the Kelvin radius of the critical cluster, 2 sigma v / (k T ln S).

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
    radius : ndarray, shape (...)
        Critical radius [m].

    Examples
    --------
    Water at 273 K, S = 4; 0.87 nm in Seinfeld and Pandis, table 11.1:

    >>> float(critical_radius(273.0, 4.0, (75.6e-3, 1000.0, 0.018))) * 1e9
    0.865
    """
    tension, density, molar_mass = liquid
    volume = molar_mass / AVOGADRO / density
    return 2.0 * tension * volume / (BOLTZMANN * temperature * np.log(saturation_ratio))
