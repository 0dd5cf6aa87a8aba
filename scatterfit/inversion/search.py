"""The right Mie lobe without a start value: many clouds grown at once, compared with the trace."""

from dataclasses import dataclass
from math import log

import numpy as np

from scatterfit.droplet_growth.cloud import CloudParameters, solve_cloud
from scatterfit.droplet_growth.gas_path import GasPath
from scatterfit.droplet_growth.setup import with_threshold
from scatterfit.forward.growth_model import Cloud, grow, no_shifts, per_mole
from scatterfit.forward.light import widened
from scatterfit.inversion.search_grid import number_levels, scale_count

_NODES = 70
# Templates are compared to a few percent: half the memory is more than half the time saved.
_COARSE = np.float32
_TOLERANCE = 5e-4
_STICKING = (0.0, -1.2)
_MORE_STICKING = (0.0, -0.6, -1.2, -1.9)
_VARIANCE = 2e-5
_RATIO = 4.0
_SPREADS = 5
_GRID_ERROR = 0.05
_FAINT = 0.01
_CERTAIN = 4.0
_DEPTH_ERROR = 0.01
_VAPOUR_SIGMAS = 2.5


@dataclass(frozen=True)
class Candidate:
    """A cloud worth refining."""

    cloud: Cloud
    chi2: float
    """Misfit of its template [-]."""
    final_radius: float
    """At the last sample [m]."""


def search(problem, delays, widest, count=6, *, dense=False):
    """Return the clouds whose traces look most like the one seen.

    Clouds are grown for a grid of growth scale, sticking and depletion; amplitudes and offsets
    are fitted to each in closed form. In a steady gas a growth scale only stretches time, so
    that one solution serves all scales.

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
    dense : bool
        Whether numbers stand so close that the radius at which the vapour is used up moves by a
        part of a lobe from one to the next, delays half as far apart, and more sticking
        coefficients are tried, at several times the cost.

    Returns
    -------
    candidates : list of Candidate
        Best first, each at a minimum of the grid.
    """
    setup = problem.model.setup
    axis = _axis(problem)
    if axis == "vapour":
        widest = min(_VAPOUR_SIGMAS * problem.priors["vapour"][1], 0.3)
    scales = np.linspace(-widest, widest, scale_count(setup.apparatus, widest))
    lone = grow(setup, Cloud(number=0.0))
    levels = number_levels(setup, max(float(lone.radius[0].max()), 1e-7), dense=dense)
    if dense and len(delays) > 1:
        delays = np.sort(delays)
        delays = np.unique(np.append(delays, 0.5 * (delays[1:] + delays[:-1])))
    # With a gauge there is time for more of both.
    some = _MORE_STICKING if dense and len(delays) == 1 else _STICKING
    sticking, level = (v.ravel() for v in np.meshgrid(some, levels, indexing="ij"))
    tables = np.stack([widened(problem.model.light, _VARIANCE * _RATIO**k)
                       for k in range(_SPREADS)], axis=1)
    width = problem.priors.get(axis, (0.0, 0.15))[1]
    curves = _curves(setup, sticking, level, (axis, scales))
    found = []
    for delay in delays:
        radius, density = _sampled(curves, scales, problem.bins.time - delay)
        which = _spread_by_birth(lone, problem.bins.time - delay)
        misfit, amplitude = _misfits(problem, (tables, which), radius, density)
        misfit = misfit + _disagreement(problem, amplitude, level) + (scales / width) ** 2
        for i in _minima(misfit):
            row, column = np.unravel_index(i, misfit.shape)
            cloud = Cloud(
                number=_number(problem, amplitude[:, row, column], level[row]),
                delay=delay, variance=_VARIANCE, accommodation=sticking[row],
                **no_shifts(problem.model), **{axis: scales[column]},
            )
            found.append(Candidate(cloud, float(misfit[row, column]),
                                   float(radius[row, column, -1])))
    return _distinct(sorted(found, key=lambda c: c.chi2), count)


@dataclass(frozen=True)
class _Curves:
    """Radius and number density of the grid's clouds at nodes."""

    time: np.ndarray
    """Since the birth, shape (m,) [s]."""
    birth: float
    square: np.ndarray
    """(r + l)^2, shape (l, s or 1, m) [m^2]."""
    length: np.ndarray
    """Shape (l, 1, 1) [m]."""
    density: np.ndarray
    """Shape (l, s or 1, m) [1/m^3]."""
    births: np.ndarray
    """Shape (l, s or 1, 1) [s]."""
    stretched: bool
    """Whether a scale is a stretch of time, one solution for all."""


def _axis(problem):
    """Return what the grid varies: the growth scale, or the vapour of a seeded cloud.

    Near saturation a small change of the vapour changes when and how fast seeds grow, which no
    growth scale can imitate.
    """
    seeded = problem.model.setup.threshold is not None
    return "vapour" if seeded and "vapour" in problem.names else "scale"


def _curves(setup, sticking, level, axis):
    """Return the clouds of the grid, grown."""
    name, scales = axis
    stretched = setup.threshold is None
    birth = setup.births.median
    path = setup.path
    births = np.array([birth])
    shift = np.zeros(level.size)
    if stretched:
        path = _thinned(setup.path, birth, np.exp(scales[-1]))
    else:
        sticking, level = np.repeat(sticking, scales.size), np.repeat(level, scales.size)
        shift = np.tile(scales, level.size // scales.size)
        if name == "vapour":
            times = [births_shifted(setup, value) for value in scales]
            births = np.tile(np.array(times), level.size // scales.size)[:, None]
    vapour = setup.apparatus.vapour
    growth = solve_cloud(
        setup.properties, path, (births, np.ones(1)),
        CloudParameters(
            per_mole(setup, level), np.exp(shift if name == "scale" else 0.0 * shift),
            vapour.mass_accommodation * np.exp(sticking), vapour.thermal_accommodation,
            setup.vapour_fraction * np.exp(shift if name == "vapour" else 0.0 * shift), 1.0,
        ),
        setup.start_radius, tolerance=_TOLERANCE,
    )
    shape = (level.size, 1, -1) if stretched else (level.size // scales.size, scales.size, -1)
    origin = birth if stretched else 0.0
    return _Curves(
        path.time - origin, origin, growth.square[:, 0, :].reshape(shape),
        growth.length.reshape(shape[0], shape[1], 1)[:, :1],
        growth.number_density.reshape(shape),
        growth.birth_times.reshape(shape[0], shape[1], 1), stretched,
    )


def births_shifted(setup, wetter):
    """Return when seeds become droplets in a wetter gas.

    Parameters
    ----------
    setup : GrowthSetup
        Of a seeded pulse.
    wetter : float
        ln of the vapour over that of the setup [-].

    Returns
    -------
    birth : float
        Time of birth [s].
    """
    return with_threshold(setup, setup.threshold, wetter).births.median


def _sampled(curves, scales, clock):
    """Return radius [m] (zero before birth) and number density [1/m^3], shape (l, s, n)."""
    age = clock - curves.birth
    if curves.stretched:
        age = np.exp(scales)[:, None] * age
    index = np.clip(np.searchsorted(curves.time, age) - 1, 0, curves.time.size - 2)
    t = (age - curves.time[index]) / (curves.time[index + 1] - curves.time[index])
    t = np.clip(t, 0.0, 1.0)

    t = t.astype(_COARSE)
    after = index + 1

    def at(values):
        values = (values[:, 0] if curves.stretched else values).astype(_COARSE)
        low, rise = values.take(index, axis=-1), values.take(after, axis=-1)
        rise -= low
        rise *= t
        rise += low
        return rise

    radius = np.sqrt(np.maximum(at(curves.square), 0.0)) - curves.length.astype(_COARSE)
    # A cloud in a gas that cannot be has no radius: it does not shine, and is not chosen.
    born = age > 0.0 if curves.stretched else clock > curves.births
    return np.where(born & (radius > 0.0), radius, 0.0), at(curves.density)


def _thinned(path, birth, stretch=1.0):
    """Return the gas path with fewer nodes, still dense after the births, and longer."""
    span = (path.time[-1] - birth) * stretch
    later = birth + span * np.linspace(0.0, 1.0, _NODES) ** 2
    nodes = np.unique(np.concatenate([[min(path.time[0], birth)], later]))
    return GasPath(
        nodes, np.interp(nodes, path.time, path.pressure),
        np.interp(nodes, path.time, path.temperature),
        path.reference_pressure, path.reference_temperature,
    )


def _spread_by_birth(lone, clock):
    """Return which table each bin needs: births spread young droplets far more than old ones."""
    if lone.weights.size == 1:
        return np.zeros(clock.size, dtype=np.intp)
    log_radius = np.log(lone.radius[0])
    mean = lone.weights @ log_radius
    variance = lone.weights @ (log_radius - mean) ** 2
    # Until all are born there is no telling.
    variance = np.where(lone.time < lone.birth_times[0].max(), 1.0, variance)
    relative = np.interp(clock, lone.time, variance) / _VARIANCE
    level = np.rint(np.log(1.0 + relative) / np.log(_RATIO))
    return np.clip(level, 0, _SPREADS - 1).astype(np.intp)


def _misfits(problem, spread, radius, density):
    """Return chi-square [-], shape (l, s), and fitted ln amplitudes, shape (channels, l, s)."""
    bins, model = problem.bins, problem.model
    (tables, which), light = spread, model.light
    size = tables.shape[-1]
    born = radius > 0.0
    place = np.log(np.maximum(radius, _COARSE(1e-9)))
    place -= _COARSE(light.start)
    place *= _COARSE(1.0 / light.step)
    np.minimum(np.maximum(np.rint(place, out=place), 0.0, out=place), size - 1, out=place)
    index = place.astype(np.intp)
    index += which * size
    density = density * born
    everywhere = born.any(axis=(0, 1))
    total = np.zeros(radius.shape[:2])
    amplitudes = []
    for i, channel in enumerate(model.channels):
        data = bins.values[i]
        weight = _blunted(bins.weights[i], data, channel.kind)
        depth = 0.0
        if channel.path > 0.0:
            depth = tables[channel.dimming_row].ravel().astype(_COARSE).take(index)
            depth *= density
            depth *= _COARSE(channel.path)
        if channel.kind == "scatter":
            # Of order one, so that squares and sums keep their digits.
            unit = float(np.max(density) * np.max(tables[channel.row])) or 1.0
            shape = (tables[channel.row].ravel() / unit).astype(_COARSE).take(index)
            shape *= density
            if channel.path > 0.0:
                shape *= np.exp(-depth)
            unit *= channel.gain or 1.0
        else:
            shape, data, weight = _optical_depth(depth, data, weight, everywhere)
            unit = 1.0
        misfit, amplitude, certain = _line_fit(shape, data, weight)
        amplitude = amplitude / unit
        total += misfit
        known = channel.gain is not None or channel.kind == "transmission"
        amplitudes.append(np.log(np.maximum(amplitude, 1e-30)) if known
                          else np.full(total.shape, np.nan))
        # Light cannot be negative, but a faint channel may come out so by its noise.
        below = (amplitude < 0.0) & (certain > _CERTAIN)
        total += np.where(below, 1e3 + 0.1 * np.abs(misfit), 0.0)
    return total, np.array(amplitudes)


def _blunted(weight, data, kind):
    """Return weights that know how coarse the grid is: a few percent of the light.

    With the noise alone the misfit of every template would be dominated by the few bins where
    the light is strong and steep.
    """
    some = weight > 0.0
    if not some.any():
        return weight
    rest = np.percentile(data[some], 2.0)
    top = np.ptp(data[some]) if kind == "transmission" else np.maximum(data - rest, 0.0)
    # Young droplets are faint and grow in a way that the grid knows least: a floor for them.
    coarse = _DEPTH_ERROR * top if kind == "transmission" else _GRID_ERROR * top + (
        _FAINT * np.ptp(data[some]))
    return np.where(some, weight / np.sqrt(1.0 + (coarse * weight) ** 2), 0.0)


def _optical_depth(depth, data, weight, born):
    """Return depth, and a transmission's data and weights as optical depth."""
    rest = data[~born & (weight > 0)]
    full = float(np.median(rest)) if rest.size else float(data[:5].mean())
    ratio = np.maximum(data / full, 0.02)
    return depth, -np.log(ratio), weight * np.abs(full) * ratio


def _line_fit(shape, data, weight):
    """Return misfit, factor and the factor over its deviation of each shape plus an offset."""
    square = weight**2
    total = square.sum()
    centred = data - (square @ data) / total
    mean = (shape @ square.astype(shape.dtype)).astype(float) / total
    top = (shape @ (square * centred).astype(shape.dtype)).astype(float)
    power = ((shape * shape) @ square.astype(shape.dtype)).astype(float) - total * mean**2
    amplitude = top / np.maximum(power, 1e-300)
    certain = np.abs(top) / np.sqrt(np.maximum(power, 1e-300))
    return square @ centred**2 - amplitude * top, amplitude, certain


def _disagreement(problem, amplitude, level):
    """Return a penalty where the amplitude says another number than the depletion."""
    known = [i for i, channel in enumerate(problem.model.channels)
             if channel.kind == "scatter" and channel.gain is not None]
    if not known:
        return 0.0
    level = level[:, None]
    apart = np.abs(np.mean(amplitude[known], axis=0))
    scale = 4.0 * problem.bins.time.size
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
    """Return flat indices of the minima along the scales, best first."""
    padded = np.pad(misfit, ((0, 0), (1, 1)), constant_values=np.inf)
    low = (misfit <= padded[:, :-2]) & (misfit <= padded[:, 2:])
    index = np.flatnonzero(low)
    return index[np.argsort(misfit.ravel()[index])][:40]


def _distinct(candidates, count, apart=0.02):
    """Return the best candidates that differ in final radius or sticking."""
    chosen = []
    for candidate in candidates:
        same = any(
            abs(log(max(candidate.final_radius, 1e-10) / max(other.final_radius, 1e-10))) < apart
            and abs(candidate.cloud.delay - other.cloud.delay) < 1e-9
            and candidate.cloud.accommodation == other.cloud.accommodation
            for other in chosen
        )
        if not same:
            chosen.append(candidate)
        if len(chosen) == count:
            break
    return chosen
