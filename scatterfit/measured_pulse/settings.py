"""What is free in a pulse's fit, and how far it may stray."""

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.forward.growth_model import Cloud, grow
from scatterfit.inversion.data import bin_channels, bin_edges
from scatterfit.inversion.fit import FitOptions
from scatterfit.inversion.onset import find_onsets
from scatterfit.inversion.prior import (
    depletion_sigma,
    growth_scale_prior,
    growth_scale_sigma,
)
from scatterfit.measured_pulse.bench_inputs import (
    temperature_relative_sigma,
    vapour_relative_sigma,
)
from scatterfit.measured_pulse.prepare import ANGLE_SIGMAS, LARGEST_ANGLE

_STICKING = 0.7
# Slow drift of a baseline that would go unnoticed, over the range of the light (common practice).
_DRIFT = 1.5e-3
_BEND = 0.01
_CLOCK = 2e-4
_LOOSE_CLOCK = 5e-3
_THRESHOLD = 0.02
_UNKNOWN_THRESHOLD = 0.06
_WIDEST_SIGMAS = 4.0
_WIDEST = 0.6
_LEAST_WIDE = 0.35
_VISIBLE = 0.6e-6
_ONSET_BINS = 700
_AGE_AT_ONSET = 0.12
_DELAYS = 12
_FEWEST = 1e3
_USUAL_NUMBER = 1e9
_LOOSE_NUMBER = 4.0
_LEAST_SEEN = 1e-7
_LEAST_STRETCH = 0.01


def fit_options(prepared, angle_base, angle_offsets):
    """Return what is free in a pulse's fit.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    angle_base : sequence of float
        Angle shift that the model's tables already hold, one a detector [rad].
    angle_offsets : sequence of float
        Where the angles are stated to be, less the bench's own statement [rad].

    Returns
    -------
    options : FitOptions
        Names, priors, onset and delays to search.
    """
    setup = prepared.setup
    names, priors, limits = _free(prepared, angle_base, angle_offsets)
    # A bench whose temperature or vapour is wrong should get its radius, and be told.
    widest = float(np.clip(_WIDEST_SIGMAS * growth_scale_sigma(setup), _LEAST_WIDE, _WIDEST))
    if setup.clock_known:
        priors["delay"] = (0.0, _CLOCK)
        return FitOptions(tuple(names), priors, setup.births.median, (0.0,), widest, limits)
    bins = bin_channels(
        prepared.time, prepared.channels,
        bin_edges(prepared.time, float(prepared.time[0]), _ONSET_BINS),
    )
    onsets = find_onsets(bins, [c.kind for c in prepared.channels])
    delays, lags = [], []
    for onset in onsets:
        # At a thirtieth of its light a droplet has a third of its size, a tenth of its age.
        rest = float(prepared.time[-1]) - onset
        lag = _visible_after(prepared) + _AGE_AT_ONSET * rest
        delays += list(onset + 0.02 * rest - (lag + 0.02 * rest) * np.linspace(0.0, 1.0, _DELAYS))
        lags.append(lag)
    apart = onsets[-1] - onsets[0]
    priors["delay"] = (onsets[0] + 0.5 * apart - 0.4 * lags[0], _LOOSE_CLOCK + lags[0] + apart)
    return FitOptions(tuple(names), priors, onsets[0], tuple(delays), widest, limits)


def _free(prepared, angle_base, angle_offsets):
    """Return names, priors and limits of the free parameters, the delay's prior left out."""
    setup = prepared.setup
    apparatus = setup.apparatus
    names = ["number", "scale", "delay", "variance", "accommodation", "bend", "depletion"]
    priors = {
        "accommodation": (0.0, _sticking_sigma(apparatus)), "bend": (0.0, _BEND),
        "depletion": (0.0, float(np.hypot(depletion_sigma(setup), _path_sigma(apparatus)))),
    }
    limits = {"number": (np.log(_FEWEST), np.log(_most_droplets(setup)))}
    for i, data in enumerate(prepared.channels):
        if data.kind == "scatter":
            names += [f"tilt:{i}", f"bow:{i}"]
            priors[f"tilt:{i}"] = priors[f"bow:{i}"] = (0.0, _DRIFT)
    for i, detector in enumerate(apparatus.detectors):
        sigma = apparatus.sigmas.get(f"detector.{detector.column}.angle_deg")
        if sigma:
            names.append(f"angle:{i}")
            priors[f"angle:{i}"] = (angle_offsets[i] - angle_base[i], sigma)
            reach = min(ANGLE_SIGMAS * sigma, LARGEST_ANGLE)
            limits[f"angle:{i}"] = (-reach - angle_base[i], reach - angle_base[i])
    stated = {"temperature": temperature_relative_sigma(apparatus),
              "vapour": vapour_relative_sigma(apparatus)}
    free = [name for name, sigma in stated.items() if sigma]
    for name in free:
        names.append(name)
        priors[name] = (0.0, stated[name])
    if apparatus.transmission is None and not any(d.gain for d in apparatus.detectors):
        # Nothing but depletion may fix the number: a loose hold keeps it from running off.
        priors["number"] = (np.log(_USUAL_NUMBER), _LOOSE_NUMBER)
    stretch = _stretch_sigma(prepared)
    if stretch > _LEAST_STRETCH:
        names.append("stretch")
        priors["stretch"] = (setup.births.lengthening, stretch)
    priors["scale"] = growth_scale_prior(setup, free)
    if setup.threshold is not None:
        names.append("threshold")
        known = apparatus.seed.diameter is not None
        priors["threshold"] = (0.0, _THRESHOLD if known else _UNKNOWN_THRESHOLD)
    return names, priors, limits


def _sticking_sigma(apparatus):
    """Return how well the mass accommodation coefficient is known, relative to itself [-]."""
    stated = apparatus.sigmas.get("vapour.mass_accommodation")
    return stated / apparatus.vapour.mass_accommodation if stated else _STICKING


def _most_droplets(setup):
    """Return how many droplets of 0.1 um the vapour could make at the most [1/m^3]."""
    path = setup.path
    moles = path.reference_pressure / (GAS_CONSTANT * path.reference_temperature)
    volume = setup.vapour_fraction * moles * setup.properties.molar_volume
    return volume / (4.0 / 3.0 * np.pi * _LEAST_SEEN**3)


def _stretch_sigma(prepared):
    """Return how well the duration of births is known, relative to itself [-].

    A gauge sampled coarsely knows its end to a part of a sample; a stated hold to its sigma, or
    to a tenth (common practice, no source).
    """
    setup = prepared.setup
    if setup.births.times.size < 2:
        return 0.0
    if not setup.clock_known:
        hold = setup.births.effective
        return setup.apparatus.sigmas.get("pulse.hold_ms", 0.1 * hold) / hold
    width = np.sqrt(12.0) * setup.births.spread
    return 0.4 * float(np.median(np.diff(prepared.time))) / width


def _path_sigma(apparatus):
    """Return how far light and depletion may disagree about the number because of the path [-]."""
    if apparatus.transmission is None or any(d.gain for d in apparatus.detectors):
        return 0.0
    return apparatus.sigmas.get("transmission.path_mm", 0.0) / apparatus.transmission.path


def _visible_after(prepared):
    """Return how long a droplet grows before it is surely seen [s]."""
    growth = grow(prepared.setup, Cloud(number=np.log(1e6)))
    radius = growth.radius[0].mean(axis=0)
    if radius[-1] < _VISIBLE:
        return 0.3 * float(growth.time[-1])
    return float(np.interp(_VISIBLE, np.maximum.accumulate(radius), growth.time))
