"""The right Mie lobe without a start value: many clouds grown at once, compared with the trace."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.births import Births
from scatterfit.droplet_growth.cloud import CloudParameters, solve_cloud
from scatterfit.droplet_growth.gas_path import GasPath
from scatterfit.forward.light import look_up, spread_table
from scatterfit.forward.model import Cloud, per_mole

_NODES = 70
_STICKING = (0.0, -1.2)
_DEPLETION = (0.003, 0.1, 0.2, 0.35, 0.5, 0.65, 0.8, 0.95, 1.2, 1.6, 2.5, 5.0)
_PHASE = 0.35


@dataclass(frozen=True)
class Candidate:
    """A cloud worth refining."""

    cloud: Cloud
    chi2: float
    """Misfit of its template [-]."""
    final_radius: float
    """At the last sample [m]."""


def search(problem, delays, widest, count=6):
    """Return the clouds whose traces look most like the one seen.

    Clouds are grown for a grid of growth scale, sticking and depletion; amplitudes and offsets
    are fitted to each in closed form.

    Parameters
    ----------
    problem : Problem
        Model and binned data.
    delays : sequence of float
        Delays to try [s].
    widest : float
        Largest |ln growth scale| to try [-].
    count : int
        Candidates to return at the most.

    Returns
    -------
    candidates : list of Candidate
        Best first, each at a minimum of the grid.
    """
    setup = problem.model.setup
    births = setup.births
    one = Births(np.array([births.median]), np.ones(1), births.median, births.effective, births.peak)
    path = _thinned(setup.path, one.median)
    scales = np.linspace(-widest, widest, _scale_count(problem, widest))
    levels = _levels(setup)
    grid = np.stack(np.meshgrid(_STICKING, levels, scales, indexing="ij"), axis=-1)
    shape = grid.shape[:3]
    sticking, level, scale = grid.reshape(-1, 3).T
    vapour = setup.apparatus.vapour
    growth = solve_cloud(
        setup.properties, path, (one.times, one.weights),
        CloudParameters(
            per_mole(setup, level), np.exp(scale), vapour.mass_accommodation * np.exp(sticking),
            np.full(scale.size, vapour.thermal_accommodation),
            np.full(scale.size, setup.vapour_fraction), np.ones(scale.size),
        ),
        setup.start_radius,
    )
    found = []
    for delay in delays:
        misfit, amplitude, final = _misfits(problem, growth, delay)
        misfit = misfit + _disagreement(problem, amplitude, level)
        misfit = misfit + (scale / _prior_width(problem)) ** 2
        for i in _minima(misfit.reshape(shape)):
            number = _number(problem, amplitude[:, i], level[i])
            cloud = Cloud(
                number=number, scale=scale[i], delay=delay, variance=2e-5,
                accommodation=sticking[i], angles=(0.0,) * len(setup.apparatus.detectors),
            )
            found.append(Candidate(cloud, float(misfit[i]), float(final[i])))
    return _distinct(sorted(found, key=lambda c: c.chi2), count)


def _prior_width(problem):
    return problem.priors.get("scale", (0.0, 0.15))[1]


def _thinned(path, birth):
    """Return the gas path with fewer nodes, still dense after the births."""
    span = path.time[-1] - birth
    later = birth + span * np.linspace(0.0, 1.0, _NODES) ** 2
    nodes = np.unique(np.concatenate([[min(path.time[0], birth)], later]))
    return GasPath(
        nodes, np.interp(nodes, path.time, path.pressure),
        np.interp(nodes, path.time, path.temperature),
        path.reference_pressure, path.reference_temperature,
    )


def _scale_count(problem, widest):
    """Return how many growth scales resolve the lobes at the largest radius."""
    beam = problem.model.setup.apparatus.beam
    detectors = problem.model.setup.apparatus.detectors
    sines = [np.sin(0.5 * detector.angle) for detector in detectors] or [0.35]
    phase = 4.0 * np.pi * 4e-6 / beam.wavelength * max(sines)
    return int(np.clip(np.ceil(2.0 * widest * 0.5 * phase / _PHASE), 25, 90)) | 1


def _levels(setup):
    """Return ln number densities from no depletion to far more droplets than vapour for 1 um."""
    path = setup.path
    saturated = float(setup.substance.saturation_pressure(path.reference_temperature))
    excess = max(setup.vapour_fraction - saturated / path.reference_pressure,
                 0.1 * setup.vapour_fraction)
    moles = path.reference_pressure / (GAS_CONSTANT * path.reference_temperature)
    # As many droplets of the radius that free growth would reach as use up the share.
    free = _free_radius(setup)
    volume = 4.0 / 3.0 * np.pi * free**3 / setup.properties.molar_volume
    return np.log(np.array(_DEPLETION) * 0.6 * excess * moles / volume)


def _free_radius(setup):
    """Return the radius that a lone droplet reaches [m]."""
    growth = solve_cloud(
        setup.properties, _thinned(setup.path, setup.births.median),
        (np.array([setup.births.median]), np.ones(1)),
        CloudParameters(*(np.array([v]) for v in (
            1e-6, 1.0, setup.apparatus.vapour.mass_accommodation,
            setup.apparatus.vapour.thermal_accommodation, setup.vapour_fraction, 1.0))),
        setup.start_radius,
    )
    return max(float(growth.radius[0, 0].max()), 1e-7)


def _misfits(problem, growth, delay):
    """Return chi-square [-], fitted ln amplitude per channel and final radius of every cloud."""
    bins, model = problem.bins, problem.model
    clock = bins.time - delay
    radius = growth.radius[:, 0, :]
    index = np.clip(np.searchsorted(growth.time, clock) - 1, 0, growth.time.size - 2)
    t = (clock - growth.time[index]) / (growth.time[index + 1] - growth.time[index])
    t = np.clip(t, 0.0, 1.0)
    square = growth.square[:, 0, :]
    at = square[:, index] + t * (square[:, index + 1] - square[:, index])
    at = np.sqrt(at) - growth.length[:, None]
    born = clock > growth.birth_times[0, 0]
    table = spread_table(model.light, 2e-5)
    values, _, _ = look_up(table, np.log(np.maximum(at, 1e-9)))
    values = values * born
    density = growth.number_density
    at_density = density[:, index] + t * (density[:, index + 1] - density[:, index])
    total = np.zeros(radius.shape[0])
    amplitudes = []
    for i, channel in enumerate(model.channels):
        weight, data = bins.weights[i], bins.values[i]
        row = model.extinction_row if channel.kind == "scatter" else channel.row
        depth = at_density * values[row] * channel.path
        if channel.kind == "scatter":
            shape = (channel.gain or 1.0) * at_density * values[channel.row] * np.exp(-depth)
        else:
            shape, data, weight = _optical_depth(depth, data, weight, born)
        misfit, amplitude = _line_fit(shape, data, weight)
        total += misfit
        known = channel.gain is not None or channel.kind == "transmission"
        amplitudes.append(np.log(np.maximum(amplitude, 1e-30)) if known
                          else np.full(total.size, np.nan))
        total += np.where(amplitude > 0.0, 0.0, 1e3 + 0.1 * np.abs(misfit))
    return total, np.array(amplitudes), radius[:, -1]


def _optical_depth(depth, data, weight, born):
    """Return depth, and a transmission's data and weights as optical depth."""
    rest = data[~born & (weight > 0)]
    full = float(np.median(rest)) if rest.size else float(data[:5].mean())
    ratio = np.maximum(data / full, 0.02)
    return depth, -np.log(ratio), weight * np.abs(full) * ratio


def _line_fit(shape, data, weight):
    """Return the misfit of a factor times each shape plus an offset, and the factor, (v,)."""
    square = weight**2
    total = square.sum()
    centred = data - (square @ data) / total
    mean = shape @ square / total
    top = shape @ (square * centred)
    power = np.einsum("vn,n,vn->v", shape, square, shape) - total * mean**2
    amplitude = top / np.maximum(power, 1e-300)
    return square @ centred**2 - amplitude * top, amplitude


def _disagreement(problem, amplitude, level):
    """Return a penalty where the amplitude says another number than the depletion."""
    known = [i for i, channel in enumerate(problem.model.channels)
             if channel.kind == "scatter" and channel.gain is not None]
    if not known:
        return 0.0
    apart = np.abs(np.mean(amplitude[known], axis=0))
    scale = 0.002 * sum(float((problem.bins.weights[i] * problem.bins.values[i]) @
                              (problem.bins.weights[i] * problem.bins.values[i])) for i in known)
    # Below a percent of depletion the level stands for every smaller number.
    lowest = (level == level.min()) & (np.mean(amplitude[known], axis=0) < 0)
    return np.where(lowest, 0.0, np.maximum(apart - 0.25, 0.0) ** 2 * scale)


def _number(problem, amplitude, level):
    """Return ln of the number density that the amplitudes say, else that of the level."""
    for i, channel in enumerate(problem.model.channels):
        if channel.kind == "scatter" and channel.gain is not None:
            return float(level + np.clip(amplitude[i], -8.0, 3.0))
    if not any(channel.kind == "scatter" for channel in problem.model.channels):
        return float(level + np.clip(amplitude[0], -2.0, 2.0))
    return float(level)


def _minima(misfit):
    """Return flat indices of minima along the last axis that are also best of their neighbours."""
    padded = np.pad(misfit, ((0, 0), (0, 0), (1, 1)), constant_values=np.inf)
    low = (misfit <= padded[..., :-2]) & (misfit <= padded[..., 2:])
    index = np.flatnonzero(low)
    return index[np.argsort(misfit.ravel()[index])][:40]


def _distinct(candidates, count, apart=0.02):
    """Return the best candidates that differ in final radius or sticking."""
    chosen = []
    for candidate in candidates:
        same = any(
            abs(np.log(candidate.final_radius / other.final_radius)) < apart
            and abs(candidate.cloud.delay - other.cloud.delay) < 1e-9
            and candidate.cloud.accommodation == other.cloud.accommodation
            for other in chosen
        )
        if not same:
            chosen.append(candidate)
        if len(chosen) == count:
            break
    return chosen


def renamed(problem, names):
    """Return a problem with other free parameters.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    names : sequence of str
        Free parameters.

    Returns
    -------
    problem : Problem
        The same data and model.
    """
    return replace(problem, names=tuple(names))
