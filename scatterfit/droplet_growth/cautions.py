"""What a user should know about a pulse before trusting it: pressures, ranges, freezing."""

import numpy as np

from scatterfit import matter

_FREEZING = 235.0


def freezing_warnings(substance, temperature):
    """Return a reason where droplets may freeze.

    Parameters
    ----------
    substance : matter.Substance
        The vapour and its liquid.
    temperature : float
        Of the hold [K].

    Returns
    -------
    warnings : tuple of tuple of str
        Codes and texts.
    """
    if substance.name != "water" or temperature >= _FREEZING:
        return ()
    return ((
        "may-freeze",
        f"the hold is at {temperature:.1f} K: below about 235 K water droplets may freeze; "
        "radius and number assume liquid droplets",
    ),)


def pressure_warnings(apparatus, stated, measured, noise):
    """Return a reason where the stated and the measured start pressure disagree.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    stated, measured : float
        Pressure before the expansion [Pa].
    noise : float
        Of the gauge [Pa].

    Returns
    -------
    warnings : tuple of tuple of str
        Codes and texts.
    """
    if apparatus.chamber.pressure is None:
        return ()
    sigma = np.hypot(
        apparatus.sigmas.get("chamber.pressure_kPa", 0.0),
        apparatus.sigmas.get("pressure.offset_kPa", 0.0),
    )
    allowed = 3.0 * max(sigma, 3e-4 * stated, 0.1 * noise)
    if abs(stated - measured) <= allowed:
        return ()
    return ((
        "pressure-disagrees",
        f"chamber.pressure_kPa is {stated / 1e3:.3f} kPa but the trace starts at "
        f"{measured / 1e3:.3f} kPa: check pressure.offset_kPa or the stated value",
    ),)


def range_warnings(substance, gas, used):
    """Return a reason where a property is used outside the range of its source.

    Parameters
    ----------
    substance : matter.Substance
        The vapour and its liquid.
    gas : matter.Gas
        The carrier.
    used : tuple of float
        Least and largest temperature [K].

    Returns
    -------
    warnings : tuple of tuple of str
        Codes and texts.
    """
    known = {
        "vapour pressure": substance.saturation_pressure, "density": substance.density,
        "surface tension": substance.surface_tension, "latent heat": substance.latent_heat,
        "diffusivity": matter.diffusivity(substance, gas),
        "conductivity of the gas": gas.conductivity,
    }
    outside = [name for name, prop in known.items() if prop.outside(np.array(used))]
    if not outside:
        return ()
    return ((
        "out-of-range",
        f"{', '.join(outside)} of {substance.name} between {used[0]:.1f} and {used[1]:.1f} K lie "
        "partly outside the range of their sources: state your own values in [vapour], or widen "
        "the sigmas",
    ),)
