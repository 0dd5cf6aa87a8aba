"""The first look at each pulse, on its own: is there a cloud, and about which one."""

from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit.errors import TraceError
from scatterfit.forward.growth_model import Cloud
from scatterfit.inversion.data import Bins
from scatterfit.inversion.fit import fit_pulse
from scatterfit.inversion.prior import depletion_sigma, growth_scale_sigma
from scatterfit.inversion.uncertainty import posterior
from scatterfit.inversion.verdict import describes, rivals_left, unexplained, visible
from scatterfit.measured_pulse.beforehand import dry, flat_columns
from scatterfit.measured_pulse.bench_inputs import bench_inputs
from scatterfit.measured_pulse.measure import settle_angles
from scatterfit.measured_pulse.prepare import prepare
from scatterfit.measured_pulse.settings import fit_options
from scatterfit.measured_series.placing import (
    humidity_key,
    stands_for,
    value_in,
    with_value,
)
from scatterfit.measured_series.unknowns import LABELS, SCALE, kind_of, moved_value

_KNOWN = 0.5
_LEFT_OVER = 0.2
_WIDER = 2.0
_SHARED = ("angle", "temperature", "vapour", "accommodation")


@dataclass(frozen=True)
class SeriesPulse:
    """One pulse as it comes in."""

    name: str
    apparatus: object
    """The bench with the pulse's own values (Apparatus)."""
    time: np.ndarray
    """Samples, shape (n,) [s]."""
    columns: dict
    """Trace columns [V, Pa]."""


@dataclass(frozen=True)
class Warm:
    """What the joint estimate needs of a pulse."""

    name: str
    apparatus: object
    """With what is shared stated and its sigmas (Apparatus)."""
    time: np.ndarray
    """Samples, shape (n,) [s]."""
    columns: dict
    """The pressure alone, where there is one [Pa]."""
    bins: Bins
    extras: tuple
    names: tuple
    """What stays the pulse's own."""
    priors: dict
    limits: dict
    cloud: Cloud
    gains: dict = field(default_factory=dict)
    """Detector to ln of the gain found without knowing it, and its standard uncertainty."""
    own: dict = field(default_factory=dict)
    """Shared key to the coordinate that the pulse on its own would have [SI]."""
    scale_sigma: float = 0.02
    """Standard uncertainty of the computed growth rate, without what is shared [-]."""
    depletion_sigma: float = 0.015


@dataclass(frozen=True)
class Look:
    """What came of a first look."""

    name: str
    warm: Warm | None
    code: str = ""
    text: str = ""
    """Why the pulse does not take part."""
    aside: Warm | None = None
    """Of a pulse that does not take part: where its number at the joint bench is sought."""


def first_look(pulse, free, store):
    """Return what a pulse says on its own, its gains taken as unknown where they are to be learnt.

    Parameters
    ----------
    pulse : SeriesPulse
        Bench and samples.
    free : dict of str to float
        Key paths that are shared, with the standard uncertainty of each value [SI].
    store : object
        Where kernel tables are kept.

    Returns
    -------
    look : Look
        With the warm start of the joint estimate, or the reason why there is none.
    """
    try:
        return _looked(pulse, free, store)
    except TraceError as error:
        return Look(pulse.name, None, "unusable", str(error))
    except (np.linalg.LinAlgError, FloatingPointError, ZeroDivisionError) as error:
        return Look(pulse.name, None, "unusable", f"the fit broke down ({error})")


def second_look(pulse, free, known, store):
    """Return what a pulse that was left out says at the bench that the others agree on.

    Parameters
    ----------
    pulse : SeriesPulse
        Bench as stated, and samples.
    free : dict of str to float
        As for :func:`first_look`.
    known : sequence of tuple
        Each shared unknown, its coordinate and the standard uncertainty of that [SI].
    store : object
        Where kernel tables are kept.

    Returns
    -------
    look : Look
        As from :func:`first_look`.
    """
    bench, sigmas = pulse.apparatus, {}
    for unknown, x, sigma in known:
        if unknown.key in LABELS:
            continue
        value = value_in(bench, unknown.key)
        value = unknown.value if value is None else value
        bench = with_value(bench, unknown.key, moved_value(unknown.kind, value, x))
        sigmas[unknown.key] = _WIDER * unknown.sigma_at(x, sigma)
    # It does not take part in what the others know of the bench.
    bench = replace(bench, sigmas={**bench.sigmas, **sigmas}, correlations=None)
    gains = {key for key in free if key.endswith(".gain_V_m")}
    rest = {key: sigma for key, sigma in free.items() if key not in gains}
    look = first_look(replace(pulse, apparatus=bench), rest, store)
    stated = _opened(pulse.apparatus, free)
    return replace(look, **{
        field: replace(warm, apparatus=stated)
        for field, warm in (("warm", look.warm), ("aside", look.aside)) if warm is not None
    })


def _looked(pulse, free, store):
    flat = flat_columns(pulse.apparatus, pulse.columns)
    if flat:
        return Look(pulse.name, None, flat[0].code, flat[0].text)
    bench = _opened(pulse.apparatus, free)
    without = replace(bench, detectors=tuple(
        replace(d, gain=None) if f"detector.{d.column}.gain_V_m" in free else d
        for d in bench.detectors
    ))
    prepared = prepare(without, pulse.time, pulse.columns, store)
    if dry(prepared.setup):
        return Look(pulse.name, None, "never-supersaturated",
                    "the vapour never exceeds saturation in this pulse")
    base = (0.0,) * len(bench.detectors)
    fit = fit_pulse(prepared.model, prepared.time, prepared.channels,
                    fit_options(prepared, base, base))
    if not visible(fit):
        return Look(pulse.name, None, "no-cloud", "no light that droplets would explain")
    if not (describes(fit) or _followed(fit)):
        return Look(pulse.name, None, "not-described",
                    f"reduced chi-square is {fit.chi2_reduced:.1f} on its own")
    prepared, fit = settle_angles(prepared, fit, base, base)
    after = posterior(fit.problem, fit.best, bench_inputs(prepared, fit.problem, fit.best))
    radius = max(float(fit.best.state.radius[:, -1].mean()), 1e-9)
    if rivals_left(fit, after.inflation * fit.softening, radius):
        return Look(pulse.name, None, "ambiguous-lobe",
                    "another radius describes it as well; it would pull the bench with it",
                    _warm(pulse, bench, prepared, fit, after, free))
    return Look(pulse.name, _warm(pulse, bench, prepared, fit, after, free))


def _followed(fit):
    """Return whether transmitted light alone is followed, if not within its noise.

    It has no lobes to be in the wrong one of, and what is not explained weighs less already.
    """
    return unexplained(fit) < _LEFT_OVER**2 and all(
        channel.kind == "transmission" for channel in fit.problem.model.channels)


def _opened(apparatus, free):
    """Return a bench with what is shared stated, each with its sigma."""
    sigmas = dict(apparatus.sigmas)
    for key, sigma in free.items():
        value = stands_for(apparatus, key)
        if value is not None:
            apparatus = with_value(apparatus, key, value)
            sigmas.setdefault(key, sigma)
    return replace(apparatus, sigmas=sigmas)


def _warm(pulse, bench, prepared, fit, after, free):
    """Return the start of the joint estimate."""
    problem, cloud = fit.problem, fit.best.cloud
    names = tuple(n for n in problem.names if n.partition(":")[0] not in _SHARED)
    at = after.names.index("number")
    sigma = float(np.sqrt(max(after.covariance[at, at], 0.0)))
    gains = {}
    for i, channel in enumerate(problem.model.channels):
        factor = float(fit.best.coefficients[i][0]) if channel.kind == "scatter" else 0.0
        if channel.gain is None and factor > 0.0:
            gains[channel.column] = (float(np.log(factor)), sigma, cloud.number)
    gauge = bench.pressure
    known = [key for key in ("temperature", "vapour") if key in problem.names]
    known += ["diffusivity"] if "vapour.diffusivity_mm2_s" in free else []
    return Warm(
        pulse.name, bench, pulse.time,
        {} if gauge is None else {gauge.column: pulse.columns[gauge.column]},
        problem.bins, problem.extras, names,
        {k: v for k, v in problem.priors.items() if k in names},
        {k: v for k, v in problem.limits.items() if k in names},
        replace(cloud, angles=(0.0,) * len(cloud.angles), temperature=0.0, vapour=0.0,
                accommodation=0.0),
        gains, _own_shifts(bench, fit), growth_scale_sigma(prepared.setup, known),
        depletion_sigma(prepared.setup),
    )


def _own_shifts(bench, fit):
    """Return where the pulse on its own would have what is shared, as coordinates."""
    cloud, problem = fit.best.cloud, fit.problem
    own = {SCALE: cloud.scale - float(np.log(bench.analysis.growth_scale))}
    sticking = bench.vapour.mass_accommodation
    own["vapour.mass_accommodation"] = float(np.exp(-cloud.accommodation) - 1.0) / sticking
    for i, detector in enumerate(bench.detectors):
        if f"angle:{i}" in problem.names:
            own[f"detector.{detector.column}.angle_deg"] = (
                cloud.angles[i] - problem.priors[f"angle:{i}"][0])
    key = "growth.temperature_K" if bench.growth is not None else "chamber.temperature_K"
    own[key] = value_in(bench, key) * float(np.expm1(cloud.temperature))
    key = humidity_key(bench)
    if kind_of(key).way == "factor":
        own[key] = cloud.vapour
    return own


def starting_gain(looks, column):
    """Return a detector's gain as the pulses that fix their own number see it.

    Parameters
    ----------
    looks : sequence of Warm
        Pulses.
    column : str
        Of the detector.

    Returns
    -------
    gain : float or None
        Weighted median; ``None`` where no pulse fixes its number to a factor 1.6 [V m].
    """
    found = [w.gains[column][:2] for w in looks if column in w.gains]
    found = sorted(pair for pair in found if pair[1] < _KNOWN)
    if not found:
        return None
    weight = np.cumsum([sigma**-2.0 for _, sigma in found])
    return float(np.exp(found[int(np.searchsorted(weight, 0.5 * weight[-1]))][0]))


def with_gains(warm, gains):
    """Return a pulse whose gains are known: its number follows from its light.

    Parameters
    ----------
    warm : Warm
        The pulse.
    gains : dict of str to float
        Column to gain [V m].

    Returns
    -------
    warm : Warm
        With gains in its bench and another number to start from.
    """
    bench, cloud = warm.apparatus, warm.cloud
    for column, gain in gains.items():
        key = f"detector.{column}.gain_V_m"
        bench = with_value(bench, key, gain)
        if column in warm.gains:
            factor, sigma, number = warm.gains[column]
            if sigma > 0.02:
                cloud = replace(cloud, number=number + factor - float(np.log(gain)))
    return replace(warm, apparatus=bench, cloud=cloud)
