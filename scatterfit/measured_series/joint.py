"""The bench that all pulses agree on: Gauss-Newton over what they share."""

from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from scatterfit.measured_series.answer import answer, followed
from scatterfit.measured_series.unknowns import LEAST_INVERSE

_ROUNDS = 24
_SETTLED = 0.05
_LEAST_GAIN = 0.15
_HALVINGS = 4
# Classes of droplets come and go with a sample: a pulse's chi-square is known to about this.
_SLACK = 0.5
_OUTLYING = 4.0
_FEWEST = 4


@dataclass(frozen=True)
class Joint:
    """The joint estimate."""

    x: np.ndarray
    """Coordinates, shape (k,) [SI]."""
    covariance: np.ndarray
    """Shape (k, k)."""
    before: np.ndarray
    """Covariance beforehand, shape (k, k)."""
    answers: tuple
    """Of the pulses at x."""
    weights: np.ndarray
    """What each pulse counts, 1 but for those that disagree, shape (n,) [-]."""
    excess: np.ndarray
    """By how many sigmas each pulse disagrees with the joint bench, shape (n,) [-]."""
    scatter: float
    """Ratio of the pulses' scatter about the joint bench to what their noise makes, >= 1 [-]."""
    rounds: int
    converged: bool
    """Whether the last step was below a twentieth of each sigma, or would gain less than 0.15 of
    chi-square, which is about how well that is known."""


def joint_estimate(warms, unknowns, start, before, settings):
    """Return the bench that the pulses agree on.

    At each round every pulse is fitted at the present bench and gives its information about the
    shared coordinates, its own cloud eliminated. Their sum and what was known beforehand give the
    next bench. Pulses that disagree with the rest count less; where all scatter more than their
    noise, the covariance is widened by that ratio.

    Parameters
    ----------
    warms : sequence of Warm
        Pulses.
    unknowns : sequence of Unknown
        What is shared.
    start : ndarray, shape (k,)
        Coordinates to start from [SI].
    before : ndarray, shape (k, k)
        Covariance of the coordinates beforehand; their mean is zero [SI].
    settings : dict
        ``"store"``: of kernel tables; ``"map"``: like the built-in ``map``, of a function over
        pulses; ``"progress"``: called with the round and its largest step over sigma. Optional:
        ``"rounds"``, at the most, and ``"loose"`` as for :func:`answer`.

    Returns
    -------
    joint : Joint
        Coordinates, covariance, and each pulse's answer.

    References
    ----------
    .. [1] B. Triggs, P. McLauchlan, R. Hartley, A. Fitzgibbon, "Bundle adjustment - a modern
       synthesis", in Vision Algorithms: Theory and Practice, Springer 2000.
    .. [2] R. T. Birge, "The calculation of errors by the method of least squares", Physical
       Review 40 (1932) 207-227. doi:10.1103/PhysRev.40.207
    """
    precision = np.linalg.inv(before)
    x = _inside(unknowns, np.asarray(start, dtype=float))
    warms, raw = list(warms), _asked(warms, unknowns, x, settings)
    weights = np.ones(len(warms))
    size, turn, settled = 1.0, 0, False
    for turn in range(1, settings.get("rounds", _ROUNDS) + 1):
        answers = weighed(raw, raw)
        weights, excess, scatter = _judged(answers, x, precision)
        covariance, step = _solved(answers, weights, scatter, x, precision)
        size = float(np.max(np.abs(step) / np.sqrt(np.diag(covariance))))
        settings["progress"](turn, size)
        gain = float(step @ np.linalg.solve(covariance, step))
        if size < _SETTLED or gain < _LEAST_GAIN:
            settled = True
            break
        step = _capped(unknowns, x, step)
        warms, raw, x, moved = _advanced(
            (warms, raw, x), step, (unknowns, precision, weights, scatter), settings)
        if not moved:
            break
    answers = weighed(raw, raw)
    weights, excess, scatter = _judged(answers, x, precision)
    covariance, _ = _solved(answers, weights, scatter, x, precision)
    return Joint(x, covariance, before, tuple(answers), weights, excess, scatter, turn, settled)


def _asked(warms, unknowns, x, settings):
    """Return every pulse's answer at a bench."""
    ask = partial(answer, unknowns=unknowns, x=x, store=settings["store"],
                  loose=settings.get("loose", 1.0))
    return list(settings["map"](ask, warms))


def _advanced(here, step, known, settings):
    """Return pulses, answers and coordinates after a step, shortened until chi-square falls."""
    warms, raw, x = here
    unknowns, precision, weights, scatter = known
    total = _total(weighed(raw, raw), weights, scatter, x, precision)
    for _ in range(_HALVINGS):
        moved = [followed(w, a, step) for w, a in zip(warms, raw, strict=True)]
        there = x + step
        found = _asked(moved, unknowns, there, settings)
        slack = _SLACK * np.sqrt(len(warms)) / scatter**2
        if _total(weighed(found, raw), weights, scatter, there, precision) < total + slack:
            return moved, found, there, True
        step = 0.4 * step
    return warms, raw, x, False


def weighed(answers, like):
    """Return answers with what residuals that are not white take from them.

    Parameters
    ----------
    answers : sequence of Answer
        As the pulses give them.
    like : sequence of Answer
        The same pulses, perhaps at another bench, whose inflation holds.

    Returns
    -------
    weighed : list of Answer
        Information, gradient and chi-square over the inflation.
    """
    return [
        replace(a, information=a.information / b.inflation, gradient=a.gradient / b.inflation,
                chi2=a.chi2 / b.inflation, number_sigma=a.number_sigma * np.sqrt(b.inflation),
                handles={k: s * np.sqrt(b.inflation) for k, s in a.handles.items()},
                inflation=1.0)
        for a, b in zip(answers, like, strict=True)
    ]


def _total(answers, weights, scatter, x, precision):
    """Return chi-square of all pulses and of what was known beforehand [-]."""
    data = sum(w * a.chi2 for w, a in zip(weights, answers, strict=True))
    return data / scatter**2 + float(x @ precision @ x)


def _solved(answers, weights, scatter, x, precision):
    """Return covariance and step."""
    shrink = weights / scatter**2
    information = precision + sum(w * a.information for w, a in zip(shrink, answers, strict=True))
    gradient = precision @ x + sum(w * a.gradient for w, a in zip(shrink, answers, strict=True))
    size = 1.0 / np.sqrt(np.diag(information))
    inverse = np.linalg.inv(information * np.outer(size, size)) * np.outer(size, size)
    covariance = 0.5 * (inverse + inverse.T)
    return covariance, -covariance @ gradient


def _judged(answers, x, precision):
    """Return weights, excess in sigmas and the common scatter of the pulses about the bench.

    What a pulse would gain by a bench of its own, within what was known beforehand, is compared
    with what chance gives it.
    """
    covariance, _ = _solved(answers, np.ones(len(answers)), 1.0, x, precision)
    gains, degrees = [], []
    for found in answers:
        own = np.linalg.inv(found.information + precision)
        chance = found.information - found.information @ covariance @ found.information
        gains.append(float(found.gradient @ own @ found.gradient))
        degrees.append(max(float(np.trace(own @ chance)), 1e-3))
    gains, degrees = np.array(gains), np.array(degrees)
    usual = 1.0
    if gains.size >= _FEWEST:
        usual = max(1.0, float(np.median(gains / np.maximum(degrees, 0.5))))
    # Fisher's normal approximation of chi-square.
    excess = np.sqrt(2.0 * gains / usual) - np.sqrt(np.maximum(2.0 * degrees - 1.0, 0.0))
    allowed = 0.5 * (_OUTLYING + np.sqrt(np.maximum(2.0 * degrees - 1.0, 0.0))) ** 2
    weights = np.minimum(1.0, allowed * usual / np.maximum(gains, 1e-300))
    scatter = 1.0
    if gains.size >= _FEWEST:
        scatter = float(np.sqrt(max(1.0, weights @ gains / degrees.sum())))
    return weights, excess, scatter


def _capped(unknowns, x, step):
    """Return a step no longer than one iteration may go, inside what can be."""
    most = max(abs(s) / u.kind.reach for s, u in zip(step, unknowns, strict=True))
    step = step / max(1.0, most)
    return _inside(unknowns, x + step) - x


def _inside(unknowns, x):
    """Return coordinates that stand for possible values."""
    x = x.copy()
    for k, unknown in enumerate(unknowns):
        if unknown.kind.way == "inverse":
            x[k] = max(x[k], LEAST_INVERSE - 1.0 / unknown.value)
    return x
