"""Misfit of one pulse: residuals with the linear parameters projected out, and derivatives."""

from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from scatterfit.forward.growth_model import Cloud, setting
from scatterfit.forward.model import PulseModel, channel_signals
from scatterfit.inversion.data import Bins
from scatterfit.inversion.projection import project

# A change of each parameter that matters a little, so that all are of order one to the solver.
SCALES = {
    "number": 0.05, "scale": 0.01, "delay": 2e-5, "variance": 1e-5, "accommodation": 0.1,
    "temperature": 3e-4, "vapour": 3e-3, "threshold": 3e-3, "angle": 1e-3,
    "tilt": 1e-3, "bow": 1e-3,
    "bend": 5e-3, "depletion": 1e-2, "creep": 5e-3,
    "stretch": 0.02,
}
_SPLITS = ("number_gain", "number_extinction", "number_depletion")
LIMITS = {
    "number": (np.log(1e3), np.log(1e15)), "scale": (-1.6, 1.6), "variance": (0.0, 0.04),
    "accommodation": (-4.6, 0.4), "temperature": (-0.02, 0.02), "vapour": (-0.4, 0.4),
    "threshold": (-0.25, 0.25), "delay": (-np.inf, np.inf), "angle": (-0.1, 0.1),
    "tilt": (-0.1, 0.1), "bow": (-0.1, 0.1),
    "bend": (-0.3, 0.3), "depletion": (-0.5, 0.5), "creep": (-0.3, 0.3), "stretch": (-0.7, 0.7),
}


@dataclass(frozen=True)
class Problem:
    """What is fitted to what."""

    model: PulseModel
    bins: Bins
    names: tuple[str, ...]
    """Free parameters of the cloud."""
    priors: dict[str, tuple[float, float]] = field(default_factory=dict)
    """Parameter to mean and standard deviation."""
    limits: dict[str, tuple[float, float]] = field(default_factory=dict)
    """Parameter to its least and largest value, where they are not those of ``LIMITS``."""
    extras: tuple[np.ndarray, ...] = ()
    """Per channel: more linear columns (drift, hum), each shape (k, m) [-]."""

    @cached_property
    def drifts(self):
        """Return, per channel, the slow drifts among the parameters, in volts per unit."""
        place = 2.0 * (self.bins.time - self.bins.time[0]) / np.ptp(self.bins.time) - 1.0
        shapes = {"tilt": place, "bow": place**2}
        return tuple(
            {f"{kind}:{i}": shape * float(np.ptp(values[weight > 0.0]))
             for kind, shape in shapes.items() if f"{kind}:{i}" in self.names}
            for i, (values, weight) in enumerate(
                zip(self.bins.values, self.bins.weights, strict=True))
        )


@dataclass(frozen=True)
class Evaluation:
    """The misfit at one cloud."""

    cloud: Cloud
    residual: np.ndarray
    """Weighted, priors last, shape (n,) [-]."""
    chi2: float
    """Sum of squares, priors included [-]."""
    jacobian: np.ndarray | None
    """d(residual)/d(parameter), linear parameters projected out, shape (n, p)."""
    coefficients: tuple[np.ndarray, ...]
    """Linear parameters of each channel: amplitude (where it is free) first."""
    fits: np.ndarray
    """Model values in the bins, shape (channels, m) [V]."""
    state: object = None
    """The cloud at the samples (CloudState)."""
    bases: tuple[np.ndarray, ...] = ()
    """Per channel: orthonormal weighted linear columns, shape (m, q)."""
    splits: dict = field(default_factory=dict)
    """Projected derivatives by the number as each handle sees it, each of shape (n,)."""


def family(name):
    """Return the kind of a parameter: the name without its index.

    Parameters
    ----------
    name : str
        Parameter.

    Returns
    -------
    kind : str
        Key of ``SCALES`` and ``LIMITS``.

    Examples
    --------
    >>> family("angle:1")
    'angle'
    """
    return name.partition(":")[0]


def value_of(cloud, name):
    """Return a parameter of a cloud.

    Parameters
    ----------
    cloud : Cloud
        A cloud.
    name : str
        Parameter.

    Returns
    -------
    value : float
        Its value [any].
    """
    kind, _, index = name.partition(":")
    return getattr(cloud, f"{kind}s")[int(index)] if index else setting(cloud, kind)


def limits_of(problem, name):
    """Return the least and largest value of a parameter.

    Parameters
    ----------
    problem : Problem
        What is fitted.
    name : str
        Parameter.

    Returns
    -------
    low, high : float
        Limits [any].
    """
    return problem.limits.get(name, LIMITS[family(name)])


def shifted(cloud, names, values):
    """Return a cloud with parameters set.

    Parameters
    ----------
    cloud : Cloud
        Where to start.
    names : sequence of str
        Parameters.
    values : sequence of float
        New values [any].

    Returns
    -------
    cloud : Cloud
        The other cloud.
    """
    changes = {}
    for name, value in zip(names, values, strict=True):
        kind, _, index = name.partition(":")
        if index:
            several = changes.setdefault(f"{kind}s", list(getattr(cloud, f"{kind}s")))
            several[int(index)] = float(value)
        else:
            changes[kind] = float(value)
    return replace(cloud, **{
        key: tuple(value) if isinstance(value, list) else value for key, value in changes.items()
    })


def linear_columns(channel, signal, extra):
    """Return the columns that enter a channel linearly and what has no free factor.

    Parameters
    ----------
    channel : Channel
        The channel.
    signal : ndarray, shape (m,)
        Its shape from the model [V or -].
    extra : ndarray, shape (k, m)
        Drift and hum [-].

    Returns
    -------
    columns : ndarray, shape (q, m)
        Columns to be fitted [V or -].
    fixed : ndarray, shape (m,)
        The part without a free factor [V].
    """
    ones = np.ones_like(signal)
    if channel.kind == "transmission":
        return np.vstack([signal, signal * extra]), np.zeros_like(signal)
    if channel.gain is None:
        return np.vstack([signal, ones, extra]), np.zeros_like(signal)
    return np.vstack([ones, extra]), signal


def evaluate(problem, cloud, derivatives=True, more=(), linear=None, near=None):
    """Return the misfit of a cloud.

    Parameters
    ----------
    problem : Problem
        Model, data and priors.
    cloud : Cloud
        Where to evaluate.
    derivatives : bool
        Whether the Jacobian is wanted.
    more : sequence of (str, sequence of ndarray)
        Further columns of the Jacobian: a name, and per channel the derivative of its shape.
    linear : LinearGrowth, optional
        Growth solved nearby; solved at the cloud where it is missing.
    near : SpreadTable, optional
        A table of nearly the right spread.

    Returns
    -------
    evaluation : Evaluation
        Residuals, and what was found on the way.
    """
    names = problem.names if derivatives else ()
    signals, state = channel_signals(problem.model, cloud, problem.bins.time, names, linear, near)
    wanted = (*names, *_SPLITS) if derivatives else ()
    more = more if derivatives else ()
    parts = []
    for i, (channel, signal) in enumerate(zip(problem.model.channels, signals, strict=True)):
        weight = problem.bins.weights[i]
        extra = problem.extras[i] if problem.extras else np.empty((0, weight.size))
        columns, fixed = linear_columns(channel, signal.shape, extra)
        drifts = problem.drifts[i]
        for name, shape in drifts.items():
            fixed = fixed + value_of(cloud, name) * shape
        by = np.zeros((len(wanted) + len(more), weight.size))
        volts = np.zeros(len(by), dtype=bool)
        for k, name in enumerate(wanted):
            volts[k] = name in drifts
            by[k] = drifts[name] if volts[k] else signal.by.get(name, 0.0)
        for k, (_, shapes) in enumerate(more):
            by[len(wanted) + k] = shapes[i]
        parts.append(project((problem.bins.values[i], weight), (columns, fixed), (by, volts),
                             _amplitude(channel, extra)))
    rows, own = _prior_rows(problem, cloud, tuple(name for name, _ in more))
    residual = np.concatenate([*(part.residual for part in parts), own])
    by = np.concatenate([part.by for part in parts], axis=1)
    jacobian, splits = None, {}
    if derivatives:
        first = len(names)
        splits = dict(zip(_SPLITS, by[first:], strict=False))
        data = np.concatenate([by[:first], by[first + len(_SPLITS):]])
        jacobian = np.concatenate([data, rows.T], axis=1).T
    return Evaluation(
        cloud, residual, float(residual @ residual), jacobian,
        tuple(part.factors for part in parts), np.array([part.fit for part in parts]), state,
        tuple(part.basis for part in parts), splits,
    )


def _amplitude(channel, extra):
    """Return what the first factors multiply to make a channel's amplitude, shape (e, m) [-]."""
    ones = np.ones((1, extra.shape[1]))
    if channel.kind == "transmission":
        return np.concatenate([ones, extra])
    return ones[:0] if channel.gain is not None else ones


def _prior_rows(problem, cloud, more):
    """Return Jacobian rows, shape (q, p), and residuals, shape (q,), of the priors."""
    names = (*problem.names, *more)
    rows = np.zeros((len(problem.priors), len(names)))
    own = np.zeros(len(problem.priors))
    for k, (name, (mean, sigma)) in enumerate(problem.priors.items()):
        own[k] = 0.0 if name in more else (value_of(cloud, name) - mean) / sigma
        if name in names:
            rows[k, names.index(name)] = 1.0 / sigma
    return rows, own
