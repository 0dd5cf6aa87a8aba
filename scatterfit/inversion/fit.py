"""One pulse from samples to the best cloud, its rivals and what the residuals say."""

from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit.errors import TraceError
from scatterfit.forward.cloud_state import hermite
from scatterfit.inversion.data import (
    ChannelData,
    bin_channels,
    bin_edges,
    rehopped,
    without,
)
from scatterfit.inversion.disturbances import find_disturbances, find_glitches, stack_columns
from scatterfit.inversion.explore import (
    CANDIDATES,
    SOFT,
    Rival,
    best_of,
    blunted,
    coarse_bins,
    coarse_model,
    explore,
    follow,
    soften,
)
from scatterfit.inversion.problem import Evaluation, Problem, evaluate
from scatterfit.inversion.search import search
from scatterfit.inversion.solve import descend, polish
from scatterfit.inversion.uncertainty import channel_inflation

FINE_BINS = 800
"""Bins at the most, roughly."""
SLOW_MISFITS = (0.01, 0.004, 0.025)
"""What slow misfit is let pass at first, one look after the other [-]."""
ANGLE_SETTLED = 2e-5
"""Shift of a detector's angle from that of its tables that first order follows [rad]."""
_FOLLOWED = 5
_SOFTENINGS = 3
_HOP_ROUNDS = 5
_HOPS_SETTLED = 1e-3


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
    rivals: tuple[Rival, ...]
    """Other clouds, best first."""
    disturbances: tuple[tuple[str, ...], ...]
    """Names of drift and hum found in each channel."""
    glitches: int
    converged: bool
    softening: float = 1.0
    """Largest factor by which the variance of a channel's bins was raised [-]."""


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
        Best cloud, rivals and residuals; to be refined where an angle has not settled.

    Raises
    ------
    TraceError
        If no droplets would be born and seen within the record.
    """
    channels = tuple(channels)
    alone = all(data.kind == "transmission" for data in channels)
    # Shoulders of transmitted light alone are faint: several ways of looking, the best is kept.
    looks = SLOW_MISFITS if alone else SLOW_MISFITS[:1]
    fits = [_one_look(model, time, channels, options, slow) for slow in looks]
    return min(fits, key=lambda fit: fit.chi2_reduced)


def _one_look(model, time, channels, options, slow):
    """Return the best cloud found with one idea of what misfit to let pass at first."""
    coarse = coarse_bins(time, channels, options.onset, slow)
    problem = Problem(coarse_model(model), coarse, options.names, options.priors,
                      options.limits, tuple(np.empty((0, coarse.time.size)) for _ in channels))
    looking = (problem, options.delays, options.widest, CANDIDATES)
    candidates = search(*looking)
    if not candidates:
        message = ("no droplets would be born and seen within the record: look at the pressure, "
                   "its unit and single samples that are far off")
        raise TraceError(message)
    found, disturbances = explore(problem, candidates, lambda: search(*looking, dense=True))
    channels, found = _without_hops(problem, found, time, channels, (options.onset, slow))
    problem = replace(problem, model=model)
    fine = bin_channels(time, channels, bin_edges(time, options.onset, FINE_BINS))
    kinds = [data.kind for data in channels]
    start = fine if "scatter" in kinds else blunted(fine, kinds, slow)
    best, others = best_of(_with(problem, start, disturbances), found)
    if start is not fine:
        best = replace(best, best=evaluate(_with(problem, fine, disturbances), best.best.cloud,
                                           linear=best.best.state.linear))
    problem, best, disturbances = _undisturbed(problem, fine, best, disturbances)
    glitchy = tuple(
        find_glitches(r, d.used)
        for r, d in zip(full_residual(problem, best.best, time, channels)[1], channels, strict=True)
    )
    count = int(sum(g.sum() for g in glitchy))
    if count:
        channels = tuple(without(d, g) for d, g in zip(channels, glitchy, strict=True))
        fine = bin_channels(time, channels, bin_edges(time, options.onset, FINE_BINS))
        problem = _with(problem, fine, disturbances)
        best = _again(problem, best)
        problem, best, disturbances = _undisturbed(problem, fine, best, disturbances)
    sharp = problem
    problem, best = _softened(problem, best)
    if not _away(best):
        best = polish(problem, best)
    softening = float(np.max(sharp.bins.weights / np.maximum(problem.bins.weights, 1e-300)) ** 2)
    return _finished(problem, best, time, (channels, others, disturbances,
                                           count + sum(d.spikes for d in channels), softening))


def _away(solution):
    """Return whether tables at other angles are to follow, so that the last word waits for them."""
    return any(abs(shift) > ANGLE_SETTLED for shift in solution.best.cloud.angles)


def _again(problem, best):
    """Return the best cloud of a problem that differs little from the one solved."""
    return descend(problem, best.best.cloud, iterations=10, tolerance=0.05,
                   linear=best.best.state.linear)


def _softened(problem, best):
    """Return the problem with channels that are noisier than their samples say weighted less.

    Slow noise of a laser and what the model misses do not average out as white noise does; with
    the weights of white noise they would overrule what is known beforehand.
    """
    for _ in range(_SOFTENINGS):
        factors = np.array(channel_inflation(problem, best.best))
        if factors.max() < SOFT:
            break
        problem = soften(problem, factors)
        best = _again(problem, best)
    return problem, best


def _without_hops(problem, found, time, channels, look):
    """Return the channels with the laser's hops decided by the fit, and the clouds fitted anew."""
    for _ in range(_HOP_ROUNDS):
        if all(data.hops is None for data in channels):
            break
        fits = full_residual(problem, found[0].best, time, channels)[0]
        again = tuple(d if d.hops is None else rehopped(d, f)
                      for d, f in zip(channels, fits, strict=True))
        moved = sum(int(np.sum(a.hops.upper != b.hops.upper))
                    for a, b in zip(again, channels, strict=True) if a.hops is not None)
        channels = again
        problem = replace(problem, bins=coarse_bins(time, channels, *look))
        found = follow(problem, [s.best.cloud for s in found[:_FOLLOWED]])
        if moved < _HOPS_SETTLED * time.size:
            break
    return channels, found


def _undisturbed(problem, fine, best, disturbances):
    """Return the problem with drift and hum, where there are any, and the best cloud in it."""
    problem = _with(problem, fine, disturbances)
    for _ in range(3):
        again = find_disturbances(problem, best.best, disturbances)
        if again == disturbances:
            break
        disturbances = again
        problem = _with(problem, fine, disturbances)
        best = _again(problem, best)
    return problem, best, disturbances


def _finished(problem, best, time, more):
    """Return the fit with its residuals at every sample."""
    channels, rivals, disturbances, count, softening = more
    whole, residual = full_residual(problem, best.best, time, channels)
    chi2, lag1 = whiteness(residual, channels, len(problem.names))
    return Fit(
        problem, best.best, channels, whole, residual, chi2, lag1,
        null_chi2(problem), tuple(rivals), disturbances, count, best.converged,
        softening,
    )


def refine(fit, model, time, options):
    """Return a fit continued with another model of the same pulse, from where it ended.

    Parameters
    ----------
    fit : Fit
        To start from.
    model : PulseModel
        With tables at other angles; the cloud's angle shifts start again at zero.
    time : ndarray, shape (n,)
        Samples [s].
    options : FitOptions
        With priors and limits for the new model.

    Returns
    -------
    fit : Fit
        The continued fit; rivals are carried over.
    """
    problem = replace(fit.problem, model=model, priors=options.priors, limits=options.limits)
    start = replace(fit.best.cloud, angles=(0.0,) * len(fit.best.cloud.angles))
    best = polish(problem, descend(problem, start, iterations=6, tolerance=0.02))
    return _finished(problem, best, time, (fit.channels, fit.rivals, fit.disturbances, fit.glitches,
                                           fit.softening))


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
    limits: dict[str, tuple[float, float]] = field(default_factory=dict)
    """Parameter to limits that are not the usual ones."""


def _with(problem, bins, disturbances):
    """Return the problem with other bins and disturbances."""
    extras = tuple(stack_columns(bins.time, names) for names in disturbances)
    return replace(problem, bins=bins, extras=extras)


def full_residual(problem, evaluation, time, channels):
    """Return the fit, carried from the bins by cubics, and the residuals at every sample.

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
    bins = problem.bins
    index = np.clip(np.searchsorted(bins.time, time) - 1, 0, bins.time.size - 2)
    width = bins.time[index + 1] - bins.time[index]
    t = (time - bins.time[index]) / width
    fits, residuals = [], []
    for values, data in zip(evaluation.fits, channels, strict=True):
        fit = hermite(values, np.gradient(values, bins.time), index, t, width)
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
    """Return the misfit without any droplets: a baseline that may bend slowly [-].

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
        place = np.linspace(-1.0, 1.0, weight.size)
        columns = np.vstack([np.ones_like(weight), place, place**2, problem.extras[i]])
        basis = np.linalg.qr((columns * weight).T)[0]
        target = problem.bins.values[i] * weight
        left = target - basis @ (basis.T @ target)
        total += float(left @ left)
    return total


