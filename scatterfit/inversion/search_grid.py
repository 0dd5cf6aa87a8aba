"""Where the search looks: growth scales and numbers that stand closer than the lobes."""

from itertools import pairwise

import numpy as np

from scatterfit.constants import GAS_CONSTANT

_DEPLETION = (0.003, 0.12, 0.25, 0.42, 0.62, 0.9, 1.4, 2.2, 3.4, 5.0, 7.0, 10.0, 14.0, 20.0, 28.0)
_PHASE = 0.35
_DENSE_PHASE = 0.7
_ENOUGH = 0.6
_LARGE = 4e-6


def scale_count(bench, widest):
    """Return how many growth scales resolve the lobes at the largest radius.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    widest : float
        Largest |ln growth scale| [-].

    Returns
    -------
    count : int
        Odd, 25 to 91.
    """
    # The radius goes with the root of the scale.
    phase = _lobe_phase(bench, _LARGE) * widest
    return int(np.clip(np.ceil(phase / _PHASE), 25, 90)) | 1


def number_levels(setup, free, *, dense=False):
    """Return numbers of droplets from no depletion to far more than there is vapour for.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    free : float
        Radius that a lone droplet reaches [m].
    dense : bool
        Whether they stand so close that the radius at which the vapour is used up moves by a part
        of a lobe from one to the next.

    Returns
    -------
    levels : ndarray, shape (l,)
        ln of droplets per volume at the reference state [1/m^3].
    """
    path = setup.path
    saturated = float(setup.substance.saturation_pressure(path.reference_temperature))
    excess = max(setup.vapour_fraction - saturated / path.reference_pressure,
                 0.1 * setup.vapour_fraction)
    moles = path.reference_pressure / (GAS_CONSTANT * path.reference_temperature)
    # As many droplets of the radius that free growth would reach as use up the share.
    volume = 4.0 / 3.0 * np.pi * free**3 / setup.properties.molar_volume
    depletion = _between(setup.apparatus, free) if dense else np.array(_DEPLETION)
    return np.log(depletion * _ENOUGH * excess * moles / volume)


def _between(bench, free):
    """Return the depletions with so many between them that no lobe of used-up clouds is missed."""
    found = [_DEPLETION[0]]
    for low, high in pairwise(_DEPLETION):
        radius = free * min(1.0 / high, 1.0) ** (1.0 / 3.0)
        turn = _lobe_phase(bench, radius) * np.log(high / low) / 3.0
        # Clouds that take little vapour keep their radius.
        turn *= high / (high + _ENOUGH)
        found += list(np.geomspace(low, high, int(np.ceil(turn / _DENSE_PHASE)) + 1)[1:])
    return np.array(found)


def _lobe_phase(bench, radius):
    """Return by how much lobes turn from no size to a radius, in the finest channel [rad]."""
    finest = [np.sin(0.5 * detector.angle) / bench.beams[bench.beam_number(detector)].wavelength
              for detector in bench.detectors] or [0.35 / bench.beam.wavelength]
    return 4.0 * np.pi * radius * max(finest)
