"""From many candidates to the best cloud and its rivals: descents, order, distinctness."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.forward.growth_model import Cloud
from scatterfit.inversion.data import bin_channels, bin_edges
from scatterfit.inversion.disturbances import find_disturbances, stack_columns
from scatterfit.inversion.problem import evaluate
from scatterfit.inversion.solve import descend
from scatterfit.inversion.uncertainty import channel_inflation

CANDIDATES = 30
"""How many candidates of the search may be followed up."""
SOFT = 1.6
"""From which inflation on a channel's weights are lowered [-]."""

_COARSE = 260
_COARSE_TOLERANCE = 2e-5
_APART = 4e-3
_ROUGHLY = 0.012
_RIVAL = 400.0
_CLOSE = 80.0
_HOPELESS = 4.0
_CONTINUED = 3
_COMPARABLE = 2.5
_SLOW_MISFIT = 0.02
_BATCHES = (1, 3, 6, 10, 10)
_CLEARED_AFTER = 1
_MUCH = 0.5
# How near a template must come, and how many are followed, once one describes the trace: few
# where lobes tell, many where only shoulders do.
_LIKELY = (1.6, 10)
_LIKELY_SMOOTH = (10.0, 14)
_DESCRIBED = 1.25
_FAR = 3.0
_LEAST_RADIUS = 8e-8


@dataclass(frozen=True)
class Rival:
    """Another minimum of the misfit."""

    cloud: Cloud
    final_radius: float
    """[m]."""
    delta_chi2: float
    """Misfit beyond that of the best cloud [-]."""


def best_of(problem, found):
    """Return the best cloud in the finer bins, and its rivals.

    Parameters
    ----------
    problem : Problem
        With the fine bins.
    found : list of Solution
        Ends of the descents in the coarse bins, best first.

    Returns
    -------
    best : Solution
        In the fine bins.
    rivals : tuple of Rival
        The others, best first.
    """
    close = [found[0], *(s for s in found[1:] if s.best.chi2 - found[0].best.chi2 < _CLOSE)]
    refined = sorted(
        (descend(problem, s.best.cloud, iterations=10, tolerance=0.05) for s in close[:3]),
        key=lambda s: s.best.chi2,
    )
    best = refined[0]
    if len(refined) > 1:
        # Only the order is decided with softer weights; the fit itself starts from the trace's own.
        soft = soften(problem, np.array(channel_inflation(problem, best.best)))
        best = min(refined, key=lambda s: evaluate(
            soft, s.best.cloud, derivatives=False, linear=s.best.state.linear).chi2)
        refined.remove(best)
        refined.insert(0, best)
    rivals = [
        Rival(s.best.cloud, final_radius(s), float(s.best.chi2 - best.best.chi2))
        for s in _distinct(refined)[1:]
    ]
    rivals += [
        Rival(s.best.cloud, final_radius(s), float(s.best.chi2 - found[0].best.chi2))
        for s in found if all(s is not other for other in close[:3])
    ]
    kept = []
    for rival in sorted(rivals, key=lambda r: r.delta_chi2):
        apart = [abs(np.log(rival.final_radius / r)) for r in
                 (final_radius(best), *(k.final_radius for k in kept))]
        if min(apart) > _ROUGHLY:
            kept.append(rival)
    return best, tuple(kept)


def coarse_model(model):
    """Return a model with fewer classes of droplets and fewer nodes, for first looks.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.

    Returns
    -------
    model : PulseModel
        Good to a few percent of the light.
    """
    setup, path = model.setup, model.setup.path
    chosen = np.unique(np.append(np.arange(0, path.time.size, 2), path.time.size - 1))
    path = replace(path, time=path.time[chosen], pressure=path.pressure[chosen],
                   temperature=path.temperature[chosen])
    setup = replace(setup, path=path, births=setup.few_births, tolerance=_COARSE_TOLERANCE)
    return replace(model, setup=setup)


def coarse_bins(time, channels, onset, slow):
    """Return few bins for first looks, whose weights allow for a slow misfit.

    A coarse model is good to a percent or two, and transmitted light alone is so precise that
    its shoulders would count for nothing beside a slow misfit of one percent: such misfits are
    let pass at first.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Channels of the trace.
    onset : float
        About when droplets are born [s].
    slow : float
        Misfit let pass where there is only transmitted light, over its change [-].

    Returns
    -------
    bins : Bins
        With lowered weights.
    """
    kinds = [data.kind for data in channels]
    return blunted(bin_channels(time, channels, bin_edges(time, onset, _COARSE)), kinds, slow)


def blunted(bins, kinds, slow):
    """Return bins whose weights allow for a misfit of a percent or two of the light.

    Parameters
    ----------
    bins : Bins
        Binned channels.
    kinds : sequence of str
        ``"scatter"`` or ``"transmission"`` of each.
    slow : float
        Misfit let pass where there is only transmitted light, over its change [-].

    Returns
    -------
    bins : Bins
        The same means with lowered weights.
    """
    weights = []
    alone = "scatter" not in kinds
    for kind, values, weight in zip(kinds, bins.values, bins.weights, strict=True):
        some = weight > 0.0
        light = np.maximum(values - np.percentile(values[some], 2.0), 0.0) if some.any() else values
        allowed = _SLOW_MISFIT * light
        if kind == "transmission":
            allowed = (slow if alone else 0.0) * np.ptp(values[some])
        weights.append(weight / np.sqrt(1.0 + (allowed * weight) ** 2))
    return replace(bins, weights=np.array(weights))


def explore(problem, candidates, closer):
    """Return where descents from the candidates end, ordered by misfit and prior, best first.

    The most likely candidate is followed first. If it describes the trace, only those whose
    templates came near are followed too, as possible rivals; if not, the others are, more and
    more of them, until one does or none is left. A trace may be out of reach of every cloud
    because of hum or drift: with those allowed for, the first few candidates may do. If even so
    none is near, a closer search gives the candidates from there on.

    Parameters
    ----------
    problem : Problem
        Coarse model and bins.
    candidates : sequence of Candidate
        Best first.
    closer : callable
        Gives more candidates, at some cost.

    Returns
    -------
    found : list of Solution
        Distinct ends.
    disturbances : tuple of tuple of str
        Names by channel, where they had to be allowed for.
    """
    rough, start = [], 0
    disturbances = ((),) * len(problem.model.channels)
    for turn, size in enumerate(_BATCHES):
        batch = candidates[start:start + size]
        if rough and _good(rough[0]):
            factor, most = _LIKELY if _lobed(problem) else _LIKELY_SMOOTH
            near = factor * candidates[0].chi2 + _RIVAL
            batch = [c for c in candidates[start:start + most] if c.chi2 < near]
        rough = _sorted([*rough, *_descents(problem, [c.cloud for c in batch])])
        start += size
        if turn == _CLEARED_AFTER and not _good(rough[0]):
            problem, rough, disturbances = _cleared(problem, rough)
            if _hopeless(rough[0]):
                # Neither list alone: what one misses stands in the other.
                candidates, start = _in_turn(closer(), candidates[start:]), 0
        if (len(rough) > 1 and _good(rough[0])) or start >= len(candidates):
            break
    # What a cloud in the wrong lobe seemed to need is forgotten.
    known = rough and _good(rough[0])
    return settle(problem, rough), disturbances if known else ((),) * len(disturbances)


def _in_turn(first, second):
    """Return two lists as one that takes from each in turn, as long as both last."""
    both = [candidate for pair in zip(first, second, strict=False) for candidate in pair]
    return [*both, *first[len(second):], *second[len(first):]]


def _sorted(solutions):
    """Return solutions, best first."""
    return sorted(solutions, key=lambda s: s.best.chi2)


def _cleared(problem, rough):
    """Return the problem with hum and drift allowed for, its solutions and names, if it helps."""
    names = find_disturbances(problem, rough[0].best)
    none = ((),) * len(problem.model.channels)
    if names == none:
        return problem, rough, none
    extras = tuple(stack_columns(problem.bins.time, group) for group in names)
    clearer = replace(problem, extras=extras)
    again = _sorted(descend(clearer, s.best.cloud, iterations=8, tolerance=1.0, rounds=3,
                            linear=s.best.state.linear) for s in rough)
    much = again[0].best.chi2 < _MUCH * rough[0].best.chi2
    return (clearer, again, names) if much or _good(again[0]) else (problem, rough, none)


def _lobed(problem):
    """Return whether a channel shows the lobes of scattered light."""
    return any(channel.kind == "scatter" for channel in problem.model.channels)


def _good(solution):
    """Return whether a solution describes the coarse bins."""
    residual = solution.best.residual
    return solution.best.chi2 < _DESCRIBED * residual.size


def _hopeless(solution):
    """Return whether a solution is nowhere near the trace."""
    return solution.best.chi2 > _FAR * solution.best.residual.size


def _descents(problem, clouds):
    """Return short descents from clouds; those that end in nothing to see are dropped."""
    ends = [descend(problem, cloud, iterations=3, tolerance=1.0, rounds=1) for cloud in clouds]
    sound = [s for s in ends
             if final_radius(s) > _LEAST_RADIUS and s.best.state.growth.converged]
    # Where nothing sound is left, the verdict has to say so: it needs something to look at.
    return sound or ends


def follow(problem, clouds):
    """Return where descents from clouds that are near the answer end, best first.

    Parameters
    ----------
    problem : Problem
        Coarse model and bins.
    clouds : sequence of Cloud
        Where to start.

    Returns
    -------
    found : list of Solution
        Distinct ends.
    """
    ends = _descents(problem, clouds)
    return settle(problem, sorted(ends, key=lambda s: s.best.chi2))


def settle(problem, rough):
    """Return the ends of descents continued where they are close, best first.

    Where the misfit is not noise, what is known beforehand would count for nothing beside it: the
    order of close rivals is then that with the weights which the best of them deserves.

    Parameters
    ----------
    problem : Problem
        Coarse model and bins.
    rough : list of Solution
        Best first.

    Returns
    -------
    found : list of Solution
        Distinct ends.
    """
    if not rough:
        return []
    limit = _HOPELESS * rough[0].best.chi2 + _RIVAL
    kept = [s for s in _distinct(rough) if s.best.chi2 < limit][:_CONTINUED]
    if len(kept) == 1 and _good(kept[0]):
        return _distinct(rough)
    found = sorted(
        (descend(problem, s.best.cloud, iterations=8, tolerance=0.1, linear=s.best.state.linear)
         for s in kept), key=lambda s: s.best.chi2)
    close = [s for s in found if s.best.chi2 < _COMPARABLE * found[0].best.chi2]
    factors = np.array(channel_inflation(problem, found[0].best))
    if len(close) > 1 and factors.max() > SOFT:
        soft = soften(problem, factors)
        again = [descend(soft, s.best.cloud, iterations=8, tolerance=0.1) for s in close]
        far = [s for s in found if all(s is not other for other in close)]
        found = [*sorted(again, key=lambda s: s.best.chi2), *far]
    return _distinct([*found, *rough])


def soften(problem, factors):
    """Return the problem with the variance of each channel's bins multiplied by its factor.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    factors : ndarray, shape (channels,)
        From :func:`channel_inflation`; those next to one are left [-].

    Returns
    -------
    problem : Problem
        With lower weights.
    """
    weights = problem.bins.weights / np.sqrt(np.where(factors < SOFT, 1.0, factors))[:, None]
    return replace(problem, bins=replace(problem.bins, weights=weights))


def _distinct(solutions, apart=_APART):
    """Return solutions that ended in different places, best first."""
    kept = []
    for solution in solutions:
        radius = final_radius(solution)
        if all(abs(np.log(radius / final_radius(other))) > apart for other in kept):
            kept.append(solution)
    return kept


def final_radius(solution):
    """Return the mean radius of the classes at the last sample.

    Parameters
    ----------
    solution : Solution
        End of a descent.

    Returns
    -------
    radius : float
        At least 1 nm [m].
    """
    return max(float(solution.best.state.radius[:, -1].mean()), 1e-9)
