"""One pulse from samples to the best cloud, its rivals and what the residuals say."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.forward.model import channel_signals
from scatterfit.inversion.data import ChannelData, bin_channels, bin_edges, without
from scatterfit.inversion.disturbances import find_disturbances, find_glitches, stack_columns
from scatterfit.inversion.problem import Evaluation, Problem, linear_columns
from scatterfit.inversion.search import search
from scatterfit.inversion.solve import Solution, descend, polish

_COARSE = 260
_FINE = 1400
_CANDIDATES = 5
_RIVAL = 400.0


@dataclass(frozen=True)
class Fit:
    """What was found in one pulse."""

    problem: Problem
    best: Evaluation
    channels: tuple[ChannelData, ...]
    """With glitches left out."""
    model: np.ndarray
    """Fit at every sample, shape (channels, n) [V]."""
    residual: np.ndarray
    """In units of the noise, shape (channels, n) [-]."""
    chi2_reduced: float
    lag1: float
    """Correlation of neighbouring residuals [-]."""
    chi2_null: float
    """Misfit without droplets, in the bins [-]."""
    rivals: tuple[Evaluation, ...]
    """Other clouds, best first."""
    disturbances: tuple[tuple[str, ...], ...]
    """Names of drift and hum found in each channel."""
    glitches: int
    converged: bool


def fit_pulse(model, time, channels, options):
    """Return the best cloud for a pulse.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        In the order of the model's channels.
    options : FitOptions
        What is free, priors, delays.

    Returns
    -------
    fit : Fit
        Best cloud, rivals and residuals.
    """
    channels = tuple(channels)
    start = options.onset
    coarse = bin_channels(time, channels, bin_edges(time, start, _COARSE))
    problem = Problem(model, coarse, options.names, options.priors,
                      tuple(np.empty((0, coarse.time.size)) for _ in channels))
    candidates = search(problem, options.delays, options.widest, _CANDIDATES)
    found = sorted(
        (descend(problem, c.cloud, iterations=8, tolerance=0.1) for c in candidates),
        key=lambda s: s.best.chi2,
    )
    found = _distinct(found)
    disturbances = find_disturbances(problem, found[0].best)
    fine = bin_channels(time, channels, bin_edges(time, start, _FINE))
    problem = _with(problem, fine, disturbances)
    best = descend(problem, found[0].best.cloud, iterations=10, tolerance=0.05)
    again = find_disturbances(problem, best.best, disturbances)
    if again != disturbances:
        disturbances = again
        problem = _with(problem, fine, disturbances)
        best = descend(problem, best.best.cloud, iterations=10, tolerance=0.05)
    whole, residual = full_residual(problem, best.best, time, channels)
    glitchy = tuple(find_glitches(r, d.used) for r, d in zip(residual, channels, strict=True))
    count = int(sum(g.sum() for g in glitchy))
    if count:
        channels = tuple(without(d, g) for d, g in zip(channels, glitchy, strict=True))
        fine = bin_channels(time, channels, bin_edges(time, start, _FINE))
        problem = _with(problem, fine, disturbances)
        best = descend(problem, best.best.cloud, iterations=6, tolerance=0.05)
    rivals = _rivals(problem, best, found[1:])
    if rivals and rivals[0].best.chi2 < best.best.chi2:
        rivals = sorted([best, *rivals], key=lambda s: s.best.chi2)
        best, rivals = rivals[0], rivals[1:]
    best = polish(problem, best)
    return _finished(problem, best, time, (channels, rivals, disturbances, count))


def _finished(problem, best, time, more):
    """Return the fit with its residuals at every sample."""
    channels, rivals, disturbances, count = more
    whole, residual = full_residual(problem, best.best, time, channels)
    chi2, lag1 = whiteness(residual, channels, len(problem.names))
    return Fit(
        problem, best.best, channels, whole, residual, chi2, lag1,
        null_chi2(problem), tuple(r.best for r in rivals), disturbances, count, best.converged,
    )


def refine(fit, model, time, priors):
    """Return a fit continued with another model of the same pulse, from where it ended.

    Parameters
    ----------
    fit : Fit
        To start from.
    model : PulseModel
        With tables at other angles; the cloud's angle shifts start again at zero.
    time : ndarray, shape (n,)
        Samples [s].
    priors : dict
        For the new model.

    Returns
    -------
    fit : Fit
        The continued fit; rivals are carried over.
    """
    problem = replace(fit.problem, model=model, priors=priors)
    start = replace(fit.best.cloud, angles=(0.0,) * len(fit.best.cloud.angles))
    best = polish(problem, descend(problem, start, iterations=6, tolerance=0.02))
    rivals = [Solution(rival, 0, True) for rival in fit.rivals]
    return _finished(problem, best, time, (fit.channels, rivals, fit.disturbances, fit.glitches))


@dataclass(frozen=True)
class FitOptions:
    """What is free in a fit and where it starts."""

    names: tuple[str, ...]
    priors: dict[str, tuple[float, float]]
    onset: float
    """About when droplets are born [s]."""
    delays: tuple[float, ...]
    """To be searched [s]."""
    widest: float
    """Largest |ln growth scale| to search [-]."""


def _with(problem, bins, disturbances):
    """Return the problem with other bins and disturbances."""
    extras = tuple(stack_columns(bins.time, names) for names in disturbances)
    return replace(problem, bins=bins, extras=extras)


def _distinct(solutions, apart=2e-3):
    """Return solutions that ended in different places, best first."""
    kept = []
    for solution in solutions:
        radius = _final(solution)
        if all(abs(np.log(radius / _final(other))) > apart for other in kept):
            kept.append(solution)
    return kept


def _final(solution):
    return max(float(solution.best.state.radius[:, -1].mean()), 1e-9)


def _rivals(problem, best, others):
    """Return the other minima, refined as the best was, that come anywhere near it."""
    refined = [
        descend(problem, other.best.cloud, iterations=8, tolerance=0.1) for other in others[:3]
    ]
    refined = sorted(refined, key=lambda s: s.best.chi2)
    return [s for s in _distinct([best, *refined]) if s is not best]


def full_residual(problem, evaluation, time, channels):
    """Return the fit and the residuals at every sample.

    Parameters
    ----------
    problem : Problem
        What was fitted.
    evaluation : Evaluation
        The solution.
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Samples of each channel.

    Returns
    -------
    fit : ndarray, shape (channels, n)
        Model [V].
    residual : ndarray, shape (channels, n)
        Signal less fit over the noise [-].
    """
    signals, _ = channel_signals(problem.model, evaluation.cloud, time)
    fits, residuals = [], []
    place = problem.bins.time
    for i, (channel, signal, data) in enumerate(
        zip(problem.model.channels, signals, channels, strict=True)
    ):
        extra = np.array([np.interp(time, place, row) for row in problem.extras[i]])
        columns, fixed = linear_columns(channel, signal.shape, extra.reshape(-1, time.size))
        fit = fixed + evaluation.coefficients[i] @ columns
        fits.append(fit)
        residuals.append((data.signal - fit) / np.sqrt(data.noise.variance(fit)))
    return np.array(fits), np.array(residuals)


def whiteness(residual, channels, parameters):
    """Return the reduced chi-square and the correlation of neighbouring residuals.

    Parameters
    ----------
    residual : ndarray, shape (channels, n)
        In units of the noise [-].
    channels : sequence of ChannelData
        With their masks.
    parameters : int
        Number of free parameters.

    Returns
    -------
    chi2 : float
        Reduced chi-square [-].
    lag1 : float
        Correlation of neighbours [-].
    """
    total, count, product, pairs = 0.0, 0, 0.0, 0
    for r, data in zip(residual, channels, strict=True):
        good = r[data.used]
        total += float(good @ good)
        count += good.size
        both = data.used[1:] & data.used[:-1]
        product += float(np.sum(r[1:][both] * r[:-1][both]))
        pairs += int(both.sum())
    chi2 = total / max(count - parameters - 2 * len(channels), 1)
    return chi2, product / max(pairs, 1) / max(total / max(count, 1), 1e-300)


def null_chi2(problem):
    """Return the misfit without any droplets [-].

    Parameters
    ----------
    problem : Problem
        What was fitted.

    Returns
    -------
    chi2 : float
        In the bins [-].
    """
    total = 0.0
    for i in range(len(problem.model.channels)):
        weight = problem.bins.weights[i]
        columns = np.vstack([np.ones_like(weight), problem.extras[i]])
        basis = np.linalg.qr((columns * weight).T)[0]
        target = problem.bins.values[i] * weight
        left = target - basis @ (basis.T @ target)
        total += float(left @ left)
    return total


