"""What heat from the walls, and a pressure that comes back, say about a pulse."""

import numpy as np

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.walls import MOST_WALLS, wall_heat
from scatterfit.inversion.verdict import Finding

# Of the width, both layers together; kelvin, where no sigma is stated (both common practice).
_THIN = 0.1
_UNSTATED = 0.3
# When the gas has settled after the births, and over how much it is averaged, of the growth.
_SETTLED = 0.1
_AVERAGED = 0.05
# A rise worth a word, relative, beyond so many times what heat explains (common practice).
_RISE = 2e-3
_DOUBT = 1.5


def heat_findings(setup, end, growth=None):
    """Return whether the gas was still adiabatic at the end of growth.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    end : float
        Last moment that is fitted, on the clock of the pressure [s].
    growth : CloudGrowth, optional
        The cloud found, for its heat of condensation.

    Returns
    -------
    findings : list of Finding
        Reasons.
    """
    heat = wall_heat(setup)
    age = max(end - setup.births.times[0], 0.0)
    found = [] if heat.width is None else _walls(setup, heat, age)
    return found + (_recovery(setup, heat, end, growth) if setup.clock_known else [])


def _walls(setup, heat, age):
    """Return the reason of a layer at the walls that is no longer thin, or warms a stated core."""
    share = 2.0 * heat.layer(age) / heat.width
    warmer = 0.0 if setup.clock_known else heat.core_warming(age)
    known = setup.apparatus.sigmas.get("growth.temperature_K", _UNSTATED)
    parts = []
    if share > _THIN and heat.excess > 0.0:
        parts.append(
            f"the layer that the walls have warmed is {1e3 * heat.layer(age):.2g} mm thick at the "
            f"end of growth and takes {100 * min(share, 1.0):.0f} percent of chamber.width_mm from "
            "both sides: light that crosses it meets fewer and smaller droplets")
    if warmer > known:
        parts.append(
            f"in a closed chamber its swelling warms the core by {warmer:.2g} K or more, which the "
            "stated [growth] does not hold: a [pressure] trace would show it")
    return [Finding("warm-walls", "; ".join(parts) + ". A shorter window would help")] * bool(parts)


def _recovery(setup, heat, end, growth):
    """Return the reason of a pressure that rises by more than heat explains."""
    births = setup.births.times
    span = end - births[-1]
    if span <= 0.0:
        return []
    ends = births[-1] + _SETTLED * span, end - _AVERAGED * span
    early, late = (_mean_near(setup.path.time, setup.path.pressure, moment, span)
                   for moment in ends)
    rise, explained = late / early - 1.0, 0.0
    words = "heat of condensation explains"
    if growth is not None:
        explained += _condensation(setup, heat, growth, (ends, span))
    if heat.width is not None:
        words = "heat of condensation and of the walls explain"
        before, after = (heat.compression(moment - births[0], MOST_WALLS) for moment in ends)
        explained += after - before
    if rise < _RISE + _DOUBT * explained:
        return []
    warmer = heat.temperature * rise * (heat.heat_ratio - 1.0) / heat.heat_ratio
    return [Finding("pressure-recovers", (
        f"the pressure rises by {100 * rise:.2g} percent during growth, of which {words} "
        f"{100 * explained:.2g} at the most: look for a leak, a valve or a gauge that drifts; the "
        f"gas is taken to warm with it, by {warmer:.2g} K"
    ))]


def _condensation(setup, heat, growth, when):
    """Return dp/p of a closed chamber by what condenses between two moments [-].

    At constant volume cv dT = L dq, and dq moles a mole of gas are gone.
    """
    ends, span = when
    first, last = (_mean_near(growth.time, growth.condensed[0], moment, span) for moment in ends)
    latent = float(setup.substance.latent_heat(heat.temperature))
    capacity = float(matter.moist_heat_capacity(
        setup.gas, setup.substance, setup.vapour_fraction, heat.temperature)) - GAS_CONSTANT
    return max(last - first, 0.0) * (latent / (capacity * heat.temperature) - 1.0)


def _mean_near(time, values, moment, span):
    """Return the mean of values about a moment."""
    near = moment + _AVERAGED * span * np.linspace(-1.0, 1.0, 9)
    return float(np.mean(np.interp(near, time, values)))
