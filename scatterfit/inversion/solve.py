"""From a cloud near the answer to the answer: damped least squares, then lmfit's last word."""

from dataclasses import dataclass

import numpy as np

from scatterfit.inversion.problem import (
    LIMITS,
    SCALES,
    Evaluation,
    evaluate,
    family,
    shifted,
    value_of,
)

_DAMPING = 1e-3


@dataclass(frozen=True)
class Solution:
    """The end of a descent."""

    best: Evaluation
    """With its Jacobian."""
    iterations: int
    converged: bool


def descend(problem, cloud, iterations=12, tolerance=1e-3):
    """Return the end of a Levenberg-Marquardt descent.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    cloud : Cloud
        Where to start.
    iterations : int
        At the most.
    tolerance : float
        Relative change of chi-square, or absolute where it is small, that ends the descent [-].

    Returns
    -------
    solution : Solution
        The best cloud seen.
    """
    scale = np.array([SCALES[family(name)] for name in problem.names])
    best = evaluate(problem, cloud)
    damping, turn = _DAMPING, 0
    for turn in range(1, iterations + 1):
        here = np.array([value_of(best.cloud, name) for name in problem.names])
        jacobian = best.jacobian * scale
        gradient = jacobian.T @ best.residual
        held = _held(problem.names, here, gradient)
        normal = jacobian.T @ jacobian
        gain = False
        for _ in range(6):
            step = _step(normal, gradient, held, damping) * scale
            trial_cloud = shifted(best.cloud, problem.names, here + step)
            trial = evaluate(problem, trial_cloud)
            if trial.chi2 < best.chi2:
                gain = True
                break
            damping *= 8.0
            if damping > 1e8:
                break
        if not gain:
            return Solution(best, turn, converged=True)
        drop = best.chi2 - trial.chi2
        best = trial
        damping = max(damping / 6.0, 1e-9)
        if drop < tolerance * max(1.0, 1e-4 * best.chi2):
            return Solution(best, turn, converged=True)
    return Solution(best, turn, converged=False)


def _held(names, here, gradient):
    """Return which parameters sit at a limit that the descent would cross."""
    low = np.array([LIMITS[family(name)][0] for name in names])
    high = np.array([LIMITS[family(name)][1] for name in names])
    return ((here <= low) & (gradient > 0)) | ((here >= high) & (gradient < 0))


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
        low, high = LIMITS[family(name)]
        parameters.add(f"p{i}", value=0.0, min=(low - start[i]) / scale[i] - 1e-9,
                       max=(high - start[i]) / scale[i] + 1e-9)
    seen = {}

    def at(values):
        key = tuple(values[f"p{i}"].value for i in range(len(names)))
        if key not in seen:
            cloud = shifted(solution.best.cloud, names, start + scale * np.array(key))
            seen[key] = evaluate(problem, cloud)
        return seen[key]

    def residual(values):
        return at(values).residual

    def jacobian(values):
        return at(values).jacobian * scale

    with np.errstate(all="ignore"):
        fitter = lmfit.Minimizer(residual, parameters, scale_covar=False, calc_covar=False)
        fitter.leastsq(Dfun=jacobian, col_deriv=0, max_nfev=12, ftol=1e-7, xtol=1e-6)
    best = min([solution.best, *seen.values()], key=lambda found: found.chi2)
    return Solution(best, solution.iterations + len(seen), solution.converged)


def covariance(problem, evaluation):
    """Return the covariance of the free parameters, linear ones marginalised.

    Parameters
    ----------
    problem : Problem
        What was fitted.
    evaluation : Evaluation
        At the solution, with its Jacobian.

    Returns
    -------
    matrix : ndarray, shape (p, p)
        Covariance of the parameters in the order of ``problem.names`` [any].
    """
    scale = np.array([SCALES[family(name)] for name in problem.names])
    jacobian = evaluation.jacobian * scale
    normal = jacobian.T @ jacobian
    values, vectors = np.linalg.eigh(normal)
    safe = np.maximum(values, 1e-14 * max(values.max(), 1e-300))
    return (vectors / safe) @ vectors.T * np.outer(scale, scale)
