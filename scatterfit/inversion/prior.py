"""How far the computed growth rate may be trusted: the prior of the growth scale."""

import numpy as np

from scatterfit import matter
from scatterfit.droplet_growth.single_droplet import growth_rate

_TEMPERATURE = 0.3
_FRACTION = 0.01
_SATURATION = 0.005
_CLOSURE = 0.015
# How far pulses of one bench stray from their common growth scale (common practice, no source).
_BETWEEN_PULSES = 5e-3


def growth_scale_sigma(setup, free=()):
    """Return the relative standard uncertainty of the computed growth rate.

    From the uncertainties of the start temperature, the vapour, the diffusivity, the conductivity
    and the vapour pressure, each by its effect on the rate at the reference radius. Where the
    chamber file states no uncertainty, 0.3 K and 1 percent of the vapour are taken (common
    practice, no source).

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    free : sequence of str
        ``"temperature"``, ``"vapour"`` and ``"diffusivity"`` where they are varied themselves: not
        counted here.

    Returns
    -------
    sigma : float
        Relative standard uncertainty [-].
    """
    sigmas = setup.apparatus.sigmas
    path, vapour = setup.path, setup.apparatus.vapour
    radius = setup.apparatus.analysis.reference_radius
    stated = [sigmas[key] for key in ("chamber.temperature_K", "growth.temperature_K")
              if key in sigmas]
    warm = 0.0 if "temperature" in free else stated[0] if stated else _TEMPERATURE
    wet = 0.0 if "vapour" in free else _vapour_sigma(sigmas, vapour)
    base, warmer, wetter = _rates(
        setup, radius, path.reference_temperature + np.array([0.0, warm, 0.0]),
        setup.vapour_fraction * np.array([
            1.0, 1.0 + setup.vapour_by_temperature * warm / path.reference_temperature, 1.0 + wet]),
    )
    floor = 0.05 * abs(base) + 1e-12
    parts = (warmer - base, wetter - base)
    diffusion = matter.diffusivity(setup.substance, setup.gas).relative_uncertainty
    diffusion = 0.0 if "diffusivity" in free else diffusion
    conduction = setup.gas.conductivity.relative_uncertainty
    relative = np.hypot(*(part / (abs(base) + floor) for part in parts))
    share = 0.5
    return float(np.clip(np.sqrt(
        relative**2 + (share * diffusion) ** 2 + (share * conduction) ** 2 + _SATURATION**2
    ), 0.02, 0.5))


def growth_scale_prior(setup, free=()):
    """Return where ln of the growth scale is expected and how surely.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    free : sequence of str
        As in :func:`growth_scale_sigma`.

    Returns
    -------
    mean, sigma : float
        From the chamber file where it states both, else none and that of the properties [-].
    """
    stated = setup.apparatus.analysis.growth_scale
    sigma = setup.apparatus.sigmas.get("analysis.growth_scale")
    if sigma is None:
        return float(np.log(stated)), growth_scale_sigma(setup, free)
    return float(np.log(stated)), float(np.hypot(sigma / stated, _BETWEEN_PULSES))


def _vapour_sigma(sigmas, vapour):
    """Return the relative uncertainty of the vapour fraction."""
    for key, field in (("mole_fraction", vapour.mole_fraction),
                       ("partial_pressure_kPa", vapour.partial_pressure),
                       ("saturation_ratio", vapour.saturation_ratio)):
        if field and f"vapour.{key}" in sigmas:
            return sigmas[f"vapour.{key}"] / field
    if "vapour.dew_point_K" in sigmas:
        return 0.07 * sigmas["vapour.dew_point_K"]
    return _FRACTION


def _rates(setup, radius, temperature, fraction):
    """Return dr/dt of one droplet in several states of the gas in the growth stage [m/s]."""
    vapour = setup.apparatus.vapour
    rate, *_ = growth_rate(
        setup.properties, np.full(temperature.size, radius),
        (temperature, setup.path.reference_pressure, fraction),
        (vapour.mass_accommodation, vapour.thermal_accommodation), temperature + 2.0, steps=6,
    )
    return rate


def depletion_sigma(setup):
    """Return the relative standard uncertainty of how strongly droplets deplete the vapour.

    What a droplet takes is known by the density of the liquid; what is left to take, the vapour
    beyond saturation, carries the uncertainty of the vapour pressure. One and a half percent
    stands for the closures: constant heat capacity, one molar volume (common practice, no source).

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    sigma : float
        Relative standard uncertainty [-].
    """
    substance = setup.substance
    excess = max(setup.growth_saturation_ratio - 1.0, 0.05)
    pressure = substance.saturation_pressure.relative_uncertainty / excess
    return float(np.clip(np.sqrt(
        _CLOSURE**2 + pressure**2 + substance.density.relative_uncertainty**2
        + substance.latent_heat.relative_uncertainty**2
    ), 0.01, 0.3))
