"""From many candidates to the best cloud and its rivals: descents, order, distinctness."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.forward.growth_model import Cloud
from scatterfit.inversion.data import bin_channels, bin_edges
from scatterfit.inversion.problem import evaluate
from scatterfit.inversion.solve import descend
from scatterfit.inversion.uncertainty import channel_inflation

CANDIDATES = 4
"""How many candidates of the search are followed up."""
SOFT = 1.6
"""From which inflation on a channel's weights are lowered [-]."""

_COARSE = 260
_APART = 4e-3
_ROUGHLY = 0.012
_RIVAL = 400.0
_HOPELESS = 4.0
_CONTINUED = 3
_COMPARABLE = 2.5
_SLOW_MISFIT = 0.01
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
    """Return the best cloud in the finer bins, and its rivals."""
    close = [found[0], *(s for s in found[1:] if s.best.chi2 - found[0].best.chi2 < _RIVAL)]
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
        for s in found if s not in close[:3]
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
    return replace(model, setup=replace(setup, path=path, births=setup.few_births))


def coarse_bins(time, channels, onset):
    """Return few bins for first looks.

    Transmitted light alone is precise but has little structure: its shoulders would count for
    nothing beside a slow misfit of one percent, so such a misfit is let pass at first.
    """
    bins = bin_channels(time, channels, bin_edges(time, onset, _COARSE))
    return bins if any(data.kind == "scatter" for data in channels) else blunted(bins)


def blunted(bins):
    """Return bins whose weights allow for a misfit of one percent of the change of light."""
    allowed = _SLOW_MISFIT * np.ptp(bins.values, axis=1)[:, None]
    return replace(bins, weights=bins.weights / np.sqrt(1.0 + (allowed * bins.weights) ** 2))


def explore(problem, clouds):
    """Return where descents from several clouds end, ordered by misfit and prior, best first.

    Where the misfit is not noise, what is known beforehand would count for nothing beside it: the
    order of close rivals is then that with the weights which the best of them deserves.
    """
    found = _descend_all(problem, clouds)
    close = [s for s in found if s.best.chi2 < _COMPARABLE * found[0].best.chi2]
    factors = np.array(channel_inflation(problem, found[0].best))
    if len(close) < 2 or factors.max() < SOFT:
        return found
    soft = soften(problem, factors)
    again = [descend(soft, s.best.cloud, iterations=8, tolerance=0.1) for s in close]
    return _distinct([*sorted(again, key=lambda s: s.best.chi2),
                      *(s for s in found if s not in close)])


def soften(problem, factors):
    """Return the problem with the variance of each channel's bins multiplied by its factor."""
    weights = problem.bins.weights / np.sqrt(np.where(factors < SOFT, 1.0, factors))[:, None]
    return replace(problem, bins=replace(problem.bins, weights=weights))


def _descend_all(problem, clouds):
    """Return where descents from several clouds end, best first; hopeless ones are cut short."""
    rough = sorted(
        (descend(problem, cloud, iterations=3, tolerance=1.0, rounds=1) for cloud in clouds),
        key=lambda s: s.best.chi2,
    )
    rough = [s for s in rough if final_radius(s) > _LEAST_RADIUS] or rough
    limit = _HOPELESS * rough[0].best.chi2 + _RIVAL
    kept = [s for s in _distinct(rough) if s.best.chi2 < limit][:_CONTINUED]
    if len(kept) == 1:
        return _distinct(rough)
    found = [
        descend(problem, s.best.cloud, iterations=8, tolerance=0.1, linear=s.best.state.linear)
        for s in kept
    ]
    return _distinct([*sorted(found, key=lambda s: s.best.chi2), *rough])


def _distinct(solutions, apart=_APART):
    """Return solutions that ended in different places, best first."""
    kept = []
    for solution in solutions:
        radius = final_radius(solution)
        if all(abs(np.log(radius / final_radius(other))) > apart for other in kept):
            kept.append(solution)
    return kept


def final_radius(solution):
    return max(float(solution.best.state.radius[:, -1].mean()), 1e-9)
