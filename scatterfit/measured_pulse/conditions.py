"""The gas during growth and during the hold: state, saturation, nucleation rate, sources."""

import numpy as np

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.properties import saturation_pressure
from scatterfit.matter_substance import PRESSURE_ANCHOR
from scatterfit.measured_pulse.bench_inputs import (
    temperature_relative_sigma,
    vapour_relative_sigma,
)
from scatterfit.measured_pulse.record import NucleationConditions, Quantity

_SAMPLING = 0.22
"""Part of a sample by which sampling alone puts the effective duration off (measured)."""
_PRESSURE = 2e-4


def state_derivatives(setup, temperature, pressure):
    """Return the relative derivatives of the saturation ratio at a state of the undisturbed gas.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    temperature : float
        [K].
    pressure : float
        [Pa].

    Returns
    -------
    ratio : float
        Saturation ratio over the liquid [-].
    by : dict of str to float
        d ln S by ``"temperature"`` (relative) and ``"vapour"`` (relative) [-].
    """
    saturated = float(saturation_pressure(setup.properties, np.asarray(temperature)))
    latent = float(setup.substance.latent_heat(temperature))
    steepness = latent / (GAS_CONSTANT * temperature)
    return setup.vapour_fraction * pressure / saturated, {
        "temperature": setup.vapour_by_temperature - steepness, "vapour": 1.0,
    }


def relative_sigmas(setup):
    """Return the stated relative uncertainties of start temperature, vapour and vapour pressure.

    That of the vapour pressure is its correlation's where the chamber file states none.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    sigmas : dict of str to float
        Relative standard uncertainties [-].
    """
    apparatus = setup.apparatus
    saturation = setup.substance.saturation_pressure
    stated = apparatus.sigmas.get("vapour.saturation_pressure_kPa")
    return {
        "temperature": temperature_relative_sigma(apparatus),
        "vapour": vapour_relative_sigma(apparatus),
        "saturation": float(saturation.relative_uncertainty if stated is None
                            else stated / saturation(PRESSURE_ANCHOR)),
    }


def gas_quantities(setup):
    """Return temperature [K] and saturation ratio of the growth stage, with their sigmas.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    temperature, saturation : Quantity
        Undisturbed, at the reference pressure.
    """
    path, sigmas = setup.path, relative_sigmas(setup)
    ratio, by = state_derivatives(setup, path.reference_temperature, path.reference_pressure)
    spread = np.sqrt((by["temperature"] * sigmas["temperature"]) ** 2 + sigmas["vapour"] ** 2
                     + sigmas["saturation"] ** 2)
    return (
        Quantity(path.reference_temperature, path.reference_temperature * sigmas["temperature"]),
        Quantity(ratio, ratio * float(spread)),
    )


def nucleation_conditions(setup, concentration, stretch=None):
    """Return the conditions of the hold and the nucleation rate.

    The number is taken back from the reference state to the density of the hold's gas; the rate
    is that number over the effective duration.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    concentration : Quantity or None
        Droplets per volume at the reference state [1/m^3].
    stretch : Quantity, optional
        Duration of the births over the setup's, from the fit [-].

    Returns
    -------
    conditions : NucleationConditions
        With ``None`` where nothing is known.
    """
    hold = setup.hold
    if hold is None:
        return NucleationConditions()
    sigmas = _hold_sigmas(setup)
    _, by = state_derivatives(setup, hold.temperature, hold.pressure)
    steep = by["temperature"] - setup.vapour_by_temperature
    # A stated hold knows nothing of the chamber's temperature; behind a gauge both follow from it.
    coupling = by["temperature"] if setup.clock_known else steep
    cooling = GAS_CONSTANT / setup.properties.heat_capacity if setup.clock_known else 0.0
    # Vapour stated otherwise than by its mole fraction is diluted by the start pressure.
    diluted = 0.0 if setup.apparatus.vapour.mole_fraction is not None else 1.0
    warm = np.array([
        sigmas["temperature"], -cooling * sigmas["start"], cooling * sigmas["pressure"],
    ])
    wet = np.array([
        coupling * sigmas["temperature"], -(cooling * steep + diluted) * sigmas["start"],
        (1.0 + cooling * steep) * sigmas["pressure"], sigmas["vapour"], sigmas["saturation"],
    ])
    sigma_t = hold.temperature * float(np.hypot.reduce(warm))
    ratio = hold.saturation_ratio
    saturation = Quantity(ratio, ratio * float(np.hypot.reduce(wet)))
    covariance = float(hold.temperature * hold.saturation_ratio * (warm @ wet[:3]))
    effective, rate = None, None
    if hold.effective and setup.threshold is None:
        # A duration that the fit was free to change knows what the samples leave open.
        unseen = _SAMPLING / max(hold.samples, 1.0)
        duration = hold.effective
        if stretch is not None:
            unseen = stretch.sigma / stretch.value
            duration *= stretch.value * np.exp(-setup.births.lengthening)
        spread = float(np.hypot(sigmas["effective"], unseen))
        effective = Quantity(duration, duration * spread)
        if concentration is not None:
            path = setup.path
            denser = (hold.pressure / hold.temperature) / (
                path.reference_pressure / path.reference_temperature
            )
            value = concentration.value * denser / duration
            relative = np.hypot(concentration.sigma / concentration.value, spread)
            rate = Quantity(value, value * float(relative))
    return NucleationConditions(
        Quantity(hold.temperature, sigma_t),
        Quantity(hold.pressure, sigmas["pressure"] * hold.pressure),
        saturation, effective, rate, covariance,
    )


def _hold_sigmas(setup):
    """Return relative standard uncertainties of what the hold's state rests on [-]."""
    apparatus = setup.apparatus
    known, hold = apparatus.sigmas, setup.hold
    sigmas = relative_sigmas(setup)
    if setup.clock_known:
        offset = known.get("pressure.offset_kPa", 0.0)
        start = np.hypot(known.get("chamber.pressure_kPa", 0.0), offset) / setup.start_pressure
        return {**sigmas, "start": float(start), "effective": hold.effective_sigma,
                "pressure": float(np.hypot(_PRESSURE, offset / hold.pressure))}
    effective = known.get("pulse.hold_ms", 0.0) / hold.effective if hold.effective else 0.0
    return {
        **sigmas, "temperature": known.get("pulse.temperature_K", 0.0) / hold.temperature,
        "start": 0.0, "effective": float(np.hypot(hold.effective_sigma, effective)),
        "pressure": float(np.hypot(
            _PRESSURE, known.get("pulse.pressure_kPa", 0.0) / hold.pressure)),
    }


def property_sources(setup):
    """Return where each property came from.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    sources : dict of str to str
        Property name to source.
    """
    s = setup.substance
    sources = {
        name: getattr(s, name).source
        for name in ("saturation_pressure", "density", "surface_tension", "latent_heat",
                     "vapour_heat_capacity")
    }
    bench = setup.apparatus
    known = [bench.vapour.refractive_index or beam.refractive_index for beam in bench.beams]
    sources["refractive_index"] = "; ".join(dict.fromkeys(
        s.refractive_index.source if index is None else "chamber file" for index in known))
    sources["diffusivity"] = matter.diffusivity(s, setup.gas).source
    sources["conductivity"] = setup.gas.conductivity.source
    sources["heat_capacity"] = setup.gas.heat_capacity.source
    return sources
