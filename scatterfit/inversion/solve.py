"""From a cloud near the answer to the answer: damped least squares, then lmfit's last word."""

from dataclasses import dataclass

import numpy as np

from scatterfit.forward.growth_model import linear_growth
from scatterfit.inversion.problem import (
    SCALES,
    Evaluation,
    evaluate,
    family,
    limits_of,
    shifted,
    value_of,
)

_DAMPING = 1e-4
_RELATIVE = 1e-5
# How far first order serves: what is left out is of the square of these.
_NEAR = {
    "number": 0.02, "scale": 0.004, "accommodation": 0.007, "temperature": 5e-4, "vapour": 4e-3,
    "threshold": 4e-3, "bend": 6e-3, "creep": 6e-3, "stretch": 0.006,
}
# How far a descent may go before growth is solved again.
_REACH = {
    "number": 0.8, "scale": 0.06, "accommodation": 0.5, "temperature": 6e-3, "vapour": 0.05,
    "threshold": 0.02, "bend": 0.05, "creep": 0.05, "stretch": 0.2,
}


@dataclass(frozen=True)
class Solution:
    """The end of a descent."""

    best: Evaluation
    """With its Jacobian."""
    iterations: int
    converged: bool


def descend(problem, cloud, iterations=12, tolerance=1e-3, linear=None, rounds=6):
    """Return the end of a Levenberg-Marquardt descent.

    Growth is solved where the descent starts and followed to first order; where the descent ends
    far from there it is solved again and the descent goes on.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    cloud : Cloud
        Where to start.
    iterations : int
        At the most, a round.
    tolerance : float
        Change of chi-square, in units of its size over 10,000 where that is more than one, that
        ends the descent [-].
    linear : LinearGrowth, optional
        Growth solved at the start.
    rounds : int
        How often growth may be solved.

    Returns
    -------
    solution : Solution
        The best cloud seen.
    """
    best, turns, settled = None, 0, False
    for turn in range(rounds):
        if linear is None or turn:
            linear = linear_growth(problem.model.setup, cloud, problem.names, linear)
            if best is not None and not linear.growth.converged:
                # Not a cloud that could exist: the last one that was solved stands.
                return Solution(best, turns, converged=False)
        best, count, settled = _descend_linear(problem, cloud, linear, iterations, tolerance)
        turns += count
        cloud = best.cloud
        if _near(linear, cloud):
            break
    return Solution(best, turns, settled)


def _near(linear, cloud):
    """Return whether a cloud is so near to where growth was solved that first order serves."""
    return all(
        abs(getattr(cloud, name) - getattr(linear.cloud, name)) < _NEAR[name]
        for name in linear.log_radius_by
    )


def _descend_linear(problem, cloud, linear, iterations, tolerance):
    """Return the best evaluation with growth followed to first order, turns and convergence."""
    scale = np.array([SCALES[family(name)] for name in problem.names])
    best = evaluate(problem, cloud, linear=linear)
    low, high = _bounds(problem, linear)
    damping, turn = _DAMPING, 0
    for turn in range(1, iterations + 1):
        here = np.array([value_of(best.cloud, name) for name in problem.names])
        jacobian = best.jacobian * scale
        gradient = jacobian.T @ best.residual
        held = ((here <= low) & (gradient > 0)) | ((here >= high) & (gradient < 0))
        normal = jacobian.T @ jacobian
        gain = False
        for _ in range(6):
            step = _step(normal, gradient, held, damping)
            promised = -step @ (2.0 * gradient + normal @ step)
            if promised < 0.5 * tolerance * max(1.0, _RELATIVE * best.chi2):
                return best, turn, True
            there = np.clip(here + step * scale, low, high)
            trial_cloud = shifted(best.cloud, problem.names, there)
            trial = evaluate(problem, trial_cloud, linear=linear, near=best.state.table)
            if trial.chi2 < best.chi2:
                gain = True
                break
            damping *= 8.0
            if damping > 1e8:
                break
        if not gain:
            return best, turn, True
        drop = best.chi2 - trial.chi2
        best = trial
        damping = max(damping / 6.0, 1e-9)
        if drop < tolerance * max(1.0, _RELATIVE * best.chi2):
            return best, turn, True
    return best, turn, False


def _bounds(problem, linear):
    """Return the least and largest value of each parameter in one round, shape (p,)."""
    names = problem.names
    low, high = np.array([limits_of(problem, name) for name in names]).T
    for i, name in enumerate(names):
        if name in linear.log_radius_by:
            centre = getattr(linear.cloud, name)
            low[i] = max(low[i], centre - _REACH[name])
            high[i] = min(high[i], centre + _REACH[name])
    return low, high


def _step(normal, gradient, held, damping):
    """Return the damped Gauss-Newton step of the parameters that are not held."""
    free = ~held
    step = np.zeros(gradient.size)
    if free.any():
        inner = normal[np.ix_(free, free)]
        size = np.maximum(np.diag(inner), 1e-12 * max(np.diag(inner).max(), 1e-300))
        step[free] = np.linalg.solve(inner + np.diag(damping * size), -gradient[free])
    return step


def polish(problem, solution):
    """Return the solution after a last descent by lmfit, which knows the limits as bounds.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    solution : Solution
        Where to start.

    Returns
    -------
    solution : Solution
        At least as good.
    """
    import lmfit  # noqa: PLC0415  (takes a second to import)

    names = problem.names
    scale = np.array([SCALES[family(name)] for name in names])
    start = np.array([value_of(solution.best.cloud, name) for name in names])
    parameters = lmfit.Parameters()
    for i, name in enumerate(names):
        low, high = limits_of(problem, name)
        parameters.add(f"p{i}", value=0.0, min=(low - start[i]) / scale[i] - 1e-9,
                       max=(high - start[i]) / scale[i] + 1e-9)
    linear, near = solution.best.state.linear, solution.best.state.table
    seen = {(0.0,) * len(names): solution.best}

    def at(values):
        # Bounds are folded into the variables and out again, which costs the last digits.
        key = tuple(round(values[f"p{i}"].value, 9) + 0.0 for i in range(len(names)))
        if key not in seen:
            cloud = shifted(solution.best.cloud, names, start + scale * np.array(key))
            seen[key] = evaluate(problem, cloud, linear=linear, near=near)
        return seen[key]

    def residual(values):
        return at(values).residual

    def jacobian(values):
        return at(values).jacobian * scale

    with np.errstate(all="ignore"):
        fitter = lmfit.Minimizer(residual, parameters, scale_covar=False, calc_covar=False)
        fitter.leastsq(Dfun=jacobian, col_deriv=0, max_nfev=12, ftol=1e-6, xtol=1e-6)
    best = min([solution.best, *seen.values()], key=lambda found: found.chi2)
    return Solution(best, solution.iterations + len(seen), solution.converged)
