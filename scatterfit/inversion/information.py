"""What a bench would tell of a cloud that is known: the fit at the truth, without a search.

To first order the estimates of a fit scatter about the truth with the inverse of the Fisher
information of the binned trace and of what is known beforehand. Both are the Jacobian of the very
residuals that a fit makes small, so nothing here knows any physics of its own.
"""

from dataclasses import replace

import numpy as np

from scatterfit.forward.growth_model import no_shifts
from scatterfit.inversion.data import bin_channels, bin_edges
from scatterfit.inversion.explore import (
    CANDIDATES,
    Rival,
    coarse_bins,
    coarse_model,
    final_radius,
)
from scatterfit.inversion.fit import FINE_BINS, SLOW_MISFITS, Fit, null_chi2
from scatterfit.inversion.problem import Problem, evaluate, value_of
from scatterfit.inversion.search import search
from scatterfit.inversion.solve import descend

_SAME = 0.02
"""Within this of the true ln r a cloud is of the same lobe: far fewer than lie between two [-]."""
_FOLLOWED = 4
_STEPS = 5
_FAR = 150.0
"""From which rise of chi-square in the coarse bins a rival is not followed any further [-]."""


def true_problem(model, time, channels, options, cloud):
    """Return the problem that a fit of these samples would solve, with priors about the truth.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Noiseless samples with the sigmas they will have.
    options : FitOptions
        What is free, and priors.
    cloud : Cloud
        The truth.

    Returns
    -------
    problem : Problem
        In the fine bins of a fit.
    """
    bins = bin_channels(time, channels, bin_edges(time, options.onset, FINE_BINS))
    priors = {name: (value_of(cloud, name), sigma) for name, (_, sigma) in options.priors.items()}
    nothing = tuple(np.empty((0, bins.time.size)) for _ in channels)
    return Problem(model, bins, options.names, priors, options.limits, nothing)


def fisher_information(problem, cloud):
    """Return what the binned trace tells of the free parameters, nothing known beforehand.

    Parameters
    ----------
    problem : Problem
        Model, bins and what is free.
    cloud : Cloud
        Where to evaluate.

    Returns
    -------
    information : ndarray, shape (p, p)
        ``J^T J`` of the weighted residuals in the order of ``problem.names``; free amplitudes and
        offsets are projected out, which leaves of their joint information with the parameters what
        remains when they are estimated too (the Schur complement) [one over the parameters' units].

    References
    ----------
    .. [1] H. Cramér, Mathematical Methods of Statistics (Princeton 1946), section 32.3;
       C. R. Rao, Bull. Calcutta Math. Soc. 37 (1945) 81-91.
    """
    bare = evaluate(replace(problem, priors={}), cloud)
    return bare.jacobian.T @ bare.jacobian


def fit_at_truth(problem, cloud, channels, rivals=()):
    """Return the fit that ends at the truth, as if noise had been nought when it was made.

    Parameters
    ----------
    problem : Problem
        From :func:`true_problem`.
    cloud : Cloud
        The truth.
    channels : sequence of ChannelData
        Noiseless samples.
    rivals : sequence of Rival
        From :func:`expected_rivals`.

    Returns
    -------
    fit : Fit
        With no residuals to speak of.
    """
    best = evaluate(problem, cloud)
    signals = np.array([data.signal for data in channels])
    return Fit(
        problem, best, tuple(channels), signals, np.zeros_like(signals), chi2_reduced=1.0,
        lag1=0.0, chi2_null=null_chi2(problem), rivals=tuple(rivals),
        disturbances=((),) * len(channels), glitches=0, converged=True,
    )


def expected_rivals(problem, time, channels, options, cloud):
    """Return clouds of another final radius that come nearest to the noiseless trace.

    The templates of a fit's own search are compared with the noiseless light; the best few whose
    final radius is off by more than two percent are followed by the fit's own descent. In its
    coarse bins errors of two percent of the light are let pass: a rival that is far from the
    trace even so is at least as far in the fine bins, and is left there; the others are followed
    in the fine bins to where they end. White noise adds as much to the misfit of the truth as to
    theirs, on average: the difference is what a fit may expect.

    Parameters
    ----------
    problem : Problem
        From :func:`true_problem`.
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Noiseless samples with the sigmas they will have.
    options : FitOptions
        What is free, and what to search.
    cloud : Cloud
        The truth.

    Returns
    -------
    rivals : tuple of Rival
        Best first; those that end at the truth after all are left out. A rise of more than 150 is
        a lower bound.
    """
    # The fit's fewer classes of births may like another cloud of the same lobe better.
    truth = descend(problem, cloud, iterations=_STEPS, tolerance=0.1, rounds=2)
    radius = final_radius(truth)
    coarse = coarse_bins(time, channels, options.onset, SLOW_MISFITS[0])
    look = replace(problem, model=coarse_model(problem.model), bins=coarse,
                   extras=tuple(np.empty((0, coarse.time.size)) for _ in channels))
    candidates = [c for c in search(look, options.delays, options.widest, CANDIDATES)
                  if _apart(c.final_radius, radius)][:_FOLLOWED]
    least = evaluate(look, cloud, derivatives=False).chi2
    found = []
    for candidate in candidates:
        start = replace(candidate.cloud, **no_shifts(problem.model))
        end, rise = descend(look, start, iterations=_STEPS, tolerance=1.0, rounds=1), least
        if end.best.chi2 - least < _FAR:
            end = descend(problem, end.best.cloud, iterations=2 * _STEPS, tolerance=0.1, rounds=3)
            rise = truth.best.chi2
        if _apart(final_radius(end), radius):
            found.append(Rival(end.best.cloud, final_radius(end), end.best.chi2 - rise))
    return tuple(sorted(found, key=lambda rival: rival.delta_chi2))


def _apart(radius, other):
    """Return whether two final radii are not of the same lobe [bool]."""
    return abs(np.log(max(radius, 1e-9) / other)) > _SAME
