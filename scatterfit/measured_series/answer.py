"""One pulse at a given bench: what its light says about the bench, its own cloud eliminated."""

from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit.apparatus.overrides import split_path
from scatterfit.forward.growth_model import linear_growth
from scatterfit.forward.model import channel_signals
from scatterfit.inversion.problem import (
    LIMITS,
    Problem,
    evaluate,
    family,
    limits_of,
    shifted,
    value_of,
)
from scatterfit.inversion.solve import descend
from scatterfit.inversion.uncertainty import channel_inflation, split_number
from scatterfit.measured_pulse.prepare import prepare_setup, pulse_kernel, pulse_model
from scatterfit.measured_series.placing import angle_shifts, in_cloud, moved
from scatterfit.measured_series.unknowns import BEND, DEPLETION, SCALE, cloud_name

OWN_PARTS = {"scale": 5e-3, "bend": 2e-3, "depletion": 3e-3}
"""How far a pulse may stray from the common error of the model (common practice, no source)."""
_LINKED = {SCALE: "scale", BEND: "bend", DEPLETION: "depletion"}
_OPTICAL = (".gain_V_m", "path_mm", ".dark_V")


@dataclass(frozen=True)
class Answer:
    """What one pulse says at one bench."""

    name: str
    information: np.ndarray
    """About the shared coordinates, its own cloud eliminated, shape (k, k)."""
    gradient: np.ndarray
    """Half the derivative of its chi-square by them, shape (k,)."""
    chi2: float
    """Least for any cloud, to first order about the one found; its own priors included [-]."""
    chi2_reduced: float
    """In the bins [-]."""
    inflation: float
    """By which information, gradient and chi-square are too large, as residuals are not white; one
    where that is taken account of [-]."""
    cloud: object
    """Its own cloud at this bench (Cloud)."""
    names: tuple
    """What is its own."""
    follow: np.ndarray
    """Derivative of its own parameters by the shared coordinates, shape (p, k)."""
    number_sigma: float
    """Standard uncertainty of ln of the number at this bench [-]."""
    handles: dict
    """Handle to the standard uncertainty of ln of the number by it alone, at this bench [-]."""
    final_radius: float
    """[m]."""
    left: dict = field(default_factory=dict)
    """Column to the root mean square of what is not explained, over the light [-]."""


def answer(warm, unknowns, x, store, loose=1.0):
    """Return what a pulse says about the shared coordinates at a given bench.

    The pulse's own parameters are fitted at the bench; its information about the shared ones is
    the Schur complement of the whole normal matrix.

    Parameters
    ----------
    warm : Warm
        The pulse, with a cloud to start from.
    unknowns : sequence of Unknown
        What is shared.
    x : ndarray, shape (k,)
        Coordinates [SI].
    store : object
        Where kernel tables are kept.
    loose : float
        By what factor a pulse may stray further than usual from the common error of the model [-].

    Returns
    -------
    answer : Answer
        Information, gradient, and the pulse's own cloud.

    References
    ----------
    .. [1] B. Triggs, P. McLauchlan, R. Hartley, A. Fitzgibbon, "Bundle adjustment - a modern
       synthesis", in Vision Algorithms: Theory and Practice, Springer 2000, section 6.
    """
    place = dict(zip((u.key for u in unknowns), x, strict=True))
    model, setup, remake = _modelled(warm, unknowns, x, store)
    problem = _problem(warm, model, place, loose)
    best = descend(problem, replace(warm.cloud, **_gas(warm, unknowns, x))).best
    cloud = best.cloud
    acting = _acting(warm, unknowns, x)
    linear = linear_growth(setup, cloud, problem.names + tuple(name for name, _ in acting.values()))
    columns = _columns(unknowns, x, remake, (problem, best))
    wide = evaluate(
        replace(problem, names=problem.names + tuple(name for name, _ in acting.values())), cloud,
        more=columns, linear=linear,
    )
    inflation = max(1.0, *channel_inflation(problem, best))
    own, shared = _parted(problem, unknowns, wide, (acting, [name for name, _ in columns]))
    return _eliminated(warm, problem, wide, (own, shared), inflation)


def _gas(warm, unknowns, x):
    """Return the parameters of the cloud that stand for shared unknowns."""
    return {cloud_name(u.key): in_cloud(warm.apparatus, u, c)[0]
            for u, c in zip(unknowns, x, strict=True) if cloud_name(u.key)}


def _acting(warm, unknowns, x):
    """Return key to (parameter, its slope) of what acts by the cloud or by the tables."""
    columns = [d.column for d in warm.apparatus.detectors]
    found = {}
    for unknown, coordinate in zip(unknowns, x, strict=True):
        if cloud_name(unknown.key):
            slope = in_cloud(warm.apparatus, unknown, coordinate)[1]
            found[unknown.key] = (cloud_name(unknown.key), slope)
        elif unknown.key.endswith(".angle_deg"):
            found[unknown.key] = (f"angle:{columns.index(split_path(unknown.key)[1])}", 1.0)
    return found


def _modelled(warm, unknowns, x, store):
    """Return forward model and setup at a bench, and how to make them at another."""
    kernels = []

    def remake(there, optics=True):
        bench = moved(warm.apparatus, unknowns, there)
        setup = prepare_setup(bench, warm.time, warm.columns)
        if optics:
            kernels[:] = pulse_kernel(setup, store)[:2]
        return pulse_model(setup, *kernels, angle_shifts(bench, unknowns, there)), setup

    return (*remake(x), remake)


def _problem(warm, model, place, loose):
    """Return what is fitted: the pulse's own parameters at the bench."""
    priors = dict(warm.priors)
    for key, name in _LINKED.items():
        if name in priors and key in place:
            stated = warm.apparatus.analysis.growth_scale if key == SCALE else 1.0
            priors[name] = (float(place[key] + np.log(stated)), loose * OWN_PARTS[name])
    dark = place.get("transmission.dark_V", 0.0)
    bins = warm.bins
    if dark:
        shift = np.array([[dark if c.kind == "transmission" else 0.0] for c in model.channels])
        bins = replace(bins, values=bins.values - shift)
    return Problem(model, bins, warm.names, priors, warm.limits, warm.extras)


def _columns(unknowns, x, remake, fitted):
    """Return (key, derivative of each channel's shape) of what acts on the light by the bench."""
    problem, best = fitted
    time, cloud = problem.bins.time, best.cloud
    plain = linear_growth(problem.model.setup, cloud, ())
    base, _ = channel_signals(problem.model, cloud, time, (), plain)
    found = []
    for k, unknown in enumerate(unknowns):
        if not unknown.by_bench:
            continue
        if unknown.key == "transmission.dark_V":
            found.append((unknown.key, [
                np.full(time.size, 1.0 / coefficients[0] if c.kind == "transmission" else 0.0)
                for c, coefficients in zip(problem.model.channels, best.coefficients, strict=True)
            ]))
            continue
        there = x + unknown.kind.step * (np.arange(len(unknowns)) == k)
        model, setup = remake(there, unknown.key == "vapour.refractive_index")
        optical = unknown.key.endswith(_OPTICAL)
        growth = plain if optical else linear_growth(setup, cloud, (), plain)
        signals, _ = channel_signals(model, cloud, time, (), growth)
        found.append((unknown.key, [(b.shape - a.shape) / unknown.kind.step
                                    for a, b in zip(base, signals, strict=True)]))
    return found


def _parted(problem, unknowns, wide, more):
    """Return the Jacobian by the pulse's own parameters and by the shared coordinates."""
    acting, keys = more
    count = len(problem.names)
    own = wide.jacobian[:, :count]
    by_key = {}
    for i, (key, (_, slope)) in enumerate(acting.items()):
        by_key[key] = slope * wide.jacobian[:, count + i]
    for i, key in enumerate(keys):
        by_key[key] = wide.jacobian[:, count + len(acting) + i]
    first = wide.residual.size - len(problem.priors)
    for key, name in _LINKED.items():
        column = np.zeros(wide.residual.size)
        if name in problem.priors:
            # The shared error is the mean of what the pulse's own may be.
            column[first + list(problem.priors).index(name)] = -1.0 / problem.priors[name][1]
        by_key[key] = column
    return own, np.column_stack([by_key[u.key] for u in unknowns])


def _eliminated(warm, problem, wide, parts, inflation):
    """Return the answer with the pulse's own parameters eliminated."""
    own, shared = parts
    residual = wide.residual
    own = own * _free(problem, wide.cloud, own.T @ residual)
    scale = 1.0 / np.maximum(np.sqrt(np.sum(own**2, axis=0)), 1e-300)
    basis, singular, back = np.linalg.svd(own * scale, full_matrices=False)
    keep = singular > 1e-6 * singular.max()
    basis = basis[:, keep]
    inverse = (back[keep].T / singular[keep]) * scale[:, None]
    shadow = basis.T @ shared
    rest = shared - basis @ shadow
    left = residual - basis @ (basis.T @ residual)
    number = problem.names.index("number")
    spread = float(np.sqrt(np.sum(inverse[number] ** 2)))
    used = int(np.count_nonzero(problem.bins.weights))
    data = wide.residual[: problem.bins.weights.size]
    return Answer(
        warm.name, rest.T @ rest, rest.T @ left, float(left @ left),
        float(data @ data) / max(used - len(problem.names), 1), inflation, wide.cloud,
        problem.names, -inverse @ shadow, spread,
        split_number(wide, problem.names, 1.0), float(wide.state.radius[:, -1].mean()),
        _left(problem, wide),
    )


def _free(problem, cloud, gradient):
    """Return which of the pulse's own parameters are not held by a limit, shape (p,) [bool]."""
    free = np.ones(len(problem.names), dtype=bool)
    for i, name in enumerate(problem.names):
        low, high = limits_of(problem, name)
        value = value_of(cloud, name)
        free[i] = not ((value <= low and gradient[i] > 0.0)
                       or (value >= high and gradient[i] < 0.0))
    return free


def _left(problem, wide):
    """Return how large what is not explained is, over the largest light, by column."""
    found = {}
    for channel, fit, values, weight in zip(problem.model.channels, wide.fits, problem.bins.values,
                                            problem.bins.weights, strict=True):
        some = weight > 0.0
        top = float(np.max(np.abs(values[some]))) if some.any() else 0.0
        if top:
            found[channel.column] = float(np.sqrt(np.mean((values - fit)[some] ** 2))) / top
    return found


def followed(warm, found, step):
    """Return a pulse that starts where its cloud would be after a step of the bench.

    Parameters
    ----------
    warm : Warm
        The pulse.
    found : Answer
        Its answer before the step.
    step : ndarray, shape (k,)
        Of the shared coordinates [SI].

    Returns
    -------
    warm : Warm
        With another cloud to start from.
    """
    change = found.follow @ step
    values = [value_of(found.cloud, name) + change[i] for i, name in enumerate(found.names)]
    limits = [warm.limits.get(name, LIMITS[family(name)]) for name in found.names]
    values = [min(max(v, low), high) for v, (low, high) in zip(values, limits, strict=True)]
    return replace(warm, cloud=shifted(found.cloud, found.names, values))
