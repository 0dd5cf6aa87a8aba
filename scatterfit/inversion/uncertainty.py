"""What the data and the stated uncertainties leave open, to first order about the best cloud."""

from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit.forward.growth_model import linear_growth, with_changes
from scatterfit.inversion.problem import evaluate

_WHITE = 1.25
_BLOCKS = (1, 4, 16)
_FEWEST_BLOCKS = 12
_CHANCE = 3.0
_DETERMINED = 0.6


@dataclass(frozen=True)
class Posterior:
    """Covariance of all parameters, those of the bench included."""

    names: tuple[str, ...]
    """Free parameters, then inputs of the bench."""
    step: np.ndarray
    """Where the parameters would move if the inputs were free as well, shape (p,)."""
    noise: np.ndarray
    """Covariance from the noise of the trace, shape (p, p)."""
    by_prior: dict
    """Input or prior to its vector v: it adds v v^T to the covariance, shape (p,)."""
    inflation: float
    """Factor on the noise covariance for residuals that are not white [-]."""
    handles: dict
    """Handle on the number to (shift of ln number, its sigma); only those that are determined."""
    priors: dict = field(default_factory=dict)
    """Parameter to mean and standard deviation of what was known beforehand."""
    state: object = None
    """The cloud at the bins, with derivatives by all cloud parameters (CloudState)."""

    @property
    def covariance(self):
        """Return the whole covariance, shape (p, p)."""
        return self.noise + sum(
            (np.outer(v, v) for v in self.by_prior.values()), np.zeros_like(self.noise)
        )

    def propagate(self, gradient):
        """Return the shift of a quantity, its noise variance and its variance by prior.

        Parameters
        ----------
        gradient : dict of str to float
            Derivative of the quantity by parameter.

        Returns
        -------
        shift, variance : float
            Of the quantity.
        parts : dict of str to float
            Variance by input.
        """
        g = np.array([gradient.get(name, 0.0) for name in self.names])
        parts = {name: float(g @ v) ** 2 for name, v in self.by_prior.items()}
        return float(g @ self.step), float(g @ self.noise @ g), parts


def posterior(problem, best, inputs):
    """Return the covariance of the fit with the bench's inputs let loose within their sigmas.

    Parameters
    ----------
    problem : Problem
        What was fitted; its priors are kept.
    best : Evaluation
        The solution.
    inputs : dict
        ``"names"``: further cloud parameters; ``"more"``: further columns as in
        :func:`evaluate`; ``"grown"``, optional: of further names, what they do to growth, as in
        :func:`with_changes`; ``"priors"``: standard deviations of both, and replacements;
        ``"correlations"``, optional: names of priors, and the correlations of their errors.

    Returns
    -------
    posterior : Posterior
        Covariance, shifts and handles.

    References
    ----------
    .. [1] JCGM 100:2008, Evaluation of measurement data: Guide to the expression of uncertainty
       in measurement.
    """
    names = problem.names + tuple(inputs["names"])
    priors = {**problem.priors, **inputs["priors"]}
    linear = linear_growth(problem.model.setup, best.cloud, names, best.state.linear)
    linear = with_changes(linear, inputs.get("grown", {}))
    wide = evaluate(
        replace(problem, names=names, priors=priors), best.cloud, more=inputs["more"],
        linear=linear,
    )
    wide = _correlated(wide, priors, inputs.get("correlations"))
    all_names = (*names, *(name for name, _ in inputs["more"]))
    data_rows = wide.residual.size - len(priors)
    jacobian = wide.jacobian
    scale = 1.0 / np.maximum(np.sqrt(np.sum(jacobian**2, axis=0)), 1e-300)
    inverse = _inverse(jacobian * scale)
    step = -scale * (inverse @ ((jacobian * scale).T @ wide.residual))
    inflation = _inflation(problem, best)
    data = jacobian[:data_rows] * scale
    spread = inverse @ data.T
    noise = inflation * (spread @ spread.T) * np.outer(scale, scale)
    by_prior = {
        name: scale * (inverse @ (jacobian[data_rows + k] * scale))
        for k, name in enumerate(priors)
    }
    handles = _handles(wide, all_names, inflation)
    return Posterior(all_names, step, noise, by_prior, inflation, handles, priors, wide.state)


def _correlated(wide, priors, correlations):
    """Return an evaluation whose priors' rows take account of correlated errors.

    The rows are whitened by Cholesky's factor: each then stands for what its input adds to those
    before it, which is how the budget shares the variance among them.
    """
    if correlations is None or len(correlations[0]) == 0:
        return wide
    names, matrix = correlations
    first = wide.residual.size - len(priors)
    rows = [first + list(priors).index(name) for name in names]
    whiten = np.linalg.inv(np.linalg.cholesky(np.asarray(matrix)))
    residual, jacobian = wide.residual.copy(), wide.jacobian.copy()
    residual[rows], jacobian[rows] = whiten @ residual[rows], whiten @ jacobian[rows]
    return replace(wide, residual=residual, jacobian=jacobian)


def _inverse(jacobian):
    """Return the inverse of the normal matrix of a scaled Jacobian, ridged where it is singular."""
    values, vectors = np.linalg.eigh(jacobian.T @ jacobian)
    return (vectors / np.maximum(values, 1e-13)) @ vectors.T


def channel_inflation(problem, best):
    """Return by how much block means of each channel's residuals vary more than white noise does.

    Parameters
    ----------
    problem : Problem
        What was fitted.
    best : Evaluation
        The solution.

    Returns
    -------
    factors : list of float
        Ratio of variances by channel, at least 1 [-].
    """
    factors, start = [], 0
    for weight in problem.bins.weights:
        residual = best.residual[start:start + weight.size][weight > 0]
        start += weight.size
        most = 1.0
        for block in _BLOCKS:
            count = residual.size // block
            if count >= _FEWEST_BLOCKS:
                means = residual[: count * block].reshape(count, block).sum(axis=1)
                ratio = float(np.mean(means**2)) / block
                if ratio > 1.0 + _CHANCE * np.sqrt(2.0 / count):
                    most = max(most, ratio)
        factors.append(most)
    return factors


def _inflation(problem, best):
    """Return the largest of the channels' inflations, 1 where they are white."""
    most = max(channel_inflation(problem, best))
    return most if most > _WHITE else 1.0


def split_number(wide, names, inflation):
    """Return how well each handle on its own fixes the number, the rest of the fit shared.

    Parameters
    ----------
    wide : Evaluation
        With its Jacobian by at least the names.
    names : sequence of str
        Parameters that are free.
    inflation : float
        Of the noise [-].

    Returns
    -------
    sigmas : dict of str to float
        Handle to the standard uncertainty of ln of the number, where it is determined [-].
    """
    narrow = replace(wide, jacobian=wide.jacobian[:, : len(names)])
    return {key: sigma for key, (_, sigma) in _handles(narrow, names, inflation).items()}


def _handles(wide, names, inflation):
    """Return the number as each handle sees it on its own, the rest of the fit shared."""
    parts = {
        "gain": wide.splits["number_gain"], "transmission": wide.splits["number_extinction"],
        "depletion": wide.splits["number_depletion"],
    }
    at = names.index("number") if "number" in names else None
    if at is None:
        return {}
    rows = wide.jacobian.shape[0]
    others = np.delete(wide.jacobian, at, axis=1)
    columns = []
    for part in parts.values():
        column = np.zeros(rows)
        column[: part.size] = part
        columns.append(column)
    columns = np.array(columns).T
    size = np.sqrt(np.sum(columns**2, axis=0))
    seen = size > 1e-3
    keys = [key for key, ok in zip(parts, seen, strict=True) if ok]
    if not keys:
        return {}
    full = np.hstack([columns[:, seen], others])
    scale = 1.0 / np.maximum(np.sqrt(np.sum(full**2, axis=0)), 1e-300)
    inverse = _inverse(full * scale)
    step = -scale * (inverse @ ((full * scale).T @ wide.residual))
    sigma = scale * np.sqrt(np.diag(inverse) * inflation)
    return {
        key: (float(step[i]), float(sigma[i]))
        for i, key in enumerate(keys) if sigma[i] < _DETERMINED
    }
