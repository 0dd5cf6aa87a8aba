"""Fluxes between the continuum and free molecular flow."""

import numpy as np


def transition_factor(knudsen, accommodation):
    r"""Return the factor by which a flux falls below its continuum value.

    .. math:: \beta = \frac{1 + Kn}{1 + (4 / 3 \alpha + 0.377) Kn + (4 / 3 \alpha) Kn^2}

    Parameters
    ----------
    knudsen : array_like, shape (...)
        Mean free path over droplet radius, >= 0 [-].
    accommodation : array_like, shape (...)
        Accommodation coefficient, in (0, 1] [-].

    Returns
    -------
    factor : ndarray, shape (...)
        Flux over continuum flux, in (0, 1] [-].

    Notes
    -----
    The mean free path that belongs to it is :math:`3 D / \bar c` (see
    :func:`vapour_mean_free_path`); then the free molecular limit
    :math:`0.75 \alpha / Kn` is exact.

    References
    ----------
    .. [1] N. A. Fuchs, A. G. Sutugin, "High-dispersed aerosols", in Topics in Current Aerosol
       Research, vol. 2, Pergamon 1971.

    Examples
    --------
    The textbook value at Kn = 1 and alpha = 1 is 0.494:

    >>> round(float(transition_factor(1.0, 1.0)), 4)
    0.4946
    """
    knudsen = np.asarray(knudsen, dtype=float)
    resistance = (4.0 / 3.0) / np.asarray(accommodation, dtype=float)
    return (1.0 + knudsen) / (1.0 + knudsen * (resistance + 0.377 + resistance * knudsen))


def vapour_mean_free_path(diffusivity, mean_speed):
    r"""Return the mean free path of vapour, :math:`\lambda = 3 D / \bar c`.

    Parameters
    ----------
    diffusivity : array_like, shape (...)
        Binary diffusion coefficient at the pressure of the gas [m^2/s].
    mean_speed : array_like, shape (...)
        Mean speed of the vapour molecules [m/s].

    Returns
    -------
    path : ndarray, shape (...)
        Mean free path [m].

    Examples
    --------
    >>> float(vapour_mean_free_path(2.5e-5, 587.0)) * 1e9
    127.8
    """
    return 3.0 * np.asarray(diffusivity, dtype=float) / mean_speed


def heat_mean_free_path(conductivity, molar_density, mean_speed, molar_heat_capacity, gas_constant):
    r"""Return the length that pins the heat flux to its free molecular limit.

    .. math:: \lambda_T = \frac{3 K}{n \bar c (c_p - R / 2)}

    A monatomic gas carries 2 k T per molecule through a plane, a polyatomic one
    :math:`c_v + R/2` per mole and kelvin, which is :math:`c_p - R/2`.

    Parameters
    ----------
    conductivity : array_like, shape (...)
        Thermal conductivity of the gas [W/(m K)].
    molar_density : array_like, shape (...)
        Moles of gas per volume [mol/m^3].
    mean_speed : array_like, shape (...)
        Mean speed of the gas molecules [m/s].
    molar_heat_capacity : array_like, shape (...)
        At constant pressure [J/(mol K)].
    gas_constant : float
        Molar gas constant [J/(mol K)].

    Returns
    -------
    path : ndarray, shape (...)
        Length [m].

    References
    ----------
    .. [1] E. H. Kennard, Kinetic Theory of Gases, McGraw-Hill 1938, section on the conduction
       of heat at low pressure (cited from memory).

    Examples
    --------
    >>> float(heat_mean_free_path(0.0177, 40.6, 398.0, 20.786, 8.314)) * 1e9
    197.6
    """
    carried = molar_density * mean_speed * (molar_heat_capacity - 0.5 * gas_constant)
    return 3.0 * np.asarray(conductivity, dtype=float) / carried
