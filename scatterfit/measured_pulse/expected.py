"""The result that a pulse of a bench would have, before either exists."""

from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from scatterfit.forward.growth_model import Cloud, grow, no_shifts
from scatterfit.forward.simulate import simulate_pulse
from scatterfit.inversion.data import ChannelData
from scatterfit.inversion.information import (
    expected_rivals,
    fisher_information,
    fit_at_truth,
    true_problem,
)
from scatterfit.inversion.noise import NoiseModel
from scatterfit.inversion.verdict import visible
from scatterfit.measured_pulse.measure import dry, gas_records, with_cloud, without_cloud
from scatterfit.measured_pulse.prepare import (
    assembled,
    optical_columns,
    prepare_setup,
    pulse_kernel,
    pulse_model,
)
from scatterfit.measured_pulse.record import MeasuredPulse, Reason
from scatterfit.measured_pulse.settings import fit_options
from scatterfit.measured_pulse.window import span, window_of

_ROOM = 1.6
"""Largest radius of the tables over that of the cloud: room for rivals [-]."""
_LEAST_REACH = 2e-6
_LEAST_FINAL = 0.08
"""Below this final radius there is nothing to see [um]."""


@dataclass(frozen=True)
class Expectation:
    """What a fit of one pulse of a bench is expected to say."""

    pulse: MeasuredPulse
    """As ``measure`` gives it: quantities at the truth with their uncertainties."""
    truth: dict
    """What went in, in the units its keys name."""
    names: tuple[str, ...] = ()
    """Free parameters of the fit."""
    information: np.ndarray | None = None
    """Fisher information of the trace about them, shape (p, p)."""
    rival: float | None = None
    """Expected rise of chi-square at the nearest rival; ``None`` where none was found [-]."""
    coarse: tuple[str, ...] = ()
    """Columns whose digitizer's step exceeds the noise: what it does is then not like noise."""
    misfit: float = 0.0
    """What the fit's simpler model of births leaves of the noiseless light, in the fine bins over
    their number: where it nears one, what is missed counts as much as the noise [-]."""


def expect(apparatus, scenario, store=None, rivals=True):
    """Return what a fit of one pulse is expected to say.

    The noiseless trace is simulated, binned and weighted as a fit would; the fit's posterior and
    all that follows from it are evaluated at the true cloud instead of at a best one.

    Parameters
    ----------
    apparatus : Apparatus
        The bench, with the sigmas of what it states.
    scenario : Scenario
        What the pulse does.
    store : object, optional
        Where kernel tables are kept.
    rivals : bool
        Whether to look for rivals in other lobes, which takes most of the time.

    Returns
    -------
    expectation : Expectation
        Quantities, verdict and reasons as of a fitted pulse.

    References
    ----------
    .. [1] JCGM 100:2008, Evaluation of measurement data: Guide to the expression of uncertainty
       in measurement, section 5.
    """
    straight = (0.0,) * len(apparatus.detectors)
    analysis = apparatus.analysis

    def make_model(setup):
        nonlocal analysis
        setup = _narrowed(setup, scenario)
        analysis = setup.apparatus.analysis
        kernel, relative, _ = pulse_kernel(setup, store)
        return pulse_model(setup, kernel, relative, straight)

    # Of the noise that is drawn only the gauge's is used, for what it does to the duration.
    pulse = simulate_pulse(apparatus, scenario, make_model, np.random.default_rng(0))
    apparatus = replace(apparatus, analysis=analysis)
    noiseless = {name: one.value for name, one in pulse.expected.items()}
    setup = _with_gauge_noise(prepare_setup(apparatus, pulse.time, noiseless), pulse)
    gas = {"trace": "", **gas_records(setup)}
    warnings = tuple(Reason(*w) for w in setup.warnings)
    if dry(setup) or pulse.truth["final_radius_um"] < _LEAST_FINAL:
        reason = Reason("never-supersaturated", (
            f"the vapour's saturation ratio is {setup.growth_saturation_ratio:.3f} during growth: "
            "droplets do not last; more vapour, a colder start or a lower growth pressure would do"
        ))
        return Expectation(MeasuredPulse(verdict="rejected", reasons=(reason, *warnings), **gas),
                           pulse.truth)
    time = pulse.time[span(apparatus, pulse.time)]
    window = window_of(apparatus, time)
    channels = [_channel(pulse.expected[column], column, kind, record, window)
                for column, kind, record in optical_columns(apparatus)]
    prepared = replace(assembled(setup, store, time, channels, window), restate=partial(
        prepare_setup, time=pulse.time, columns=noiseless))
    options = fit_options(prepared, straight, straight)
    cloud = replace(pulse.cloud, **no_shifts(prepared.model))
    problem = true_problem(prepared.model, time, channels, options, cloud)
    fit = fit_at_truth(problem, cloud, channels)
    if not visible(fit):
        return Expectation(without_cloud(prepared, fit, gas, warnings), pulse.truth)
    if rivals:
        found = expected_rivals(problem, time, channels, options, cloud)
        fit = replace(fit, rivals=found)
    return Expectation(
        with_cloud(prepared, fit, gas, warnings), pulse.truth, problem.names,
        fisher_information(problem, cloud), fit.rivals[0].delta_chi2 if fit.rivals else None,
        tuple(name for name, one in pulse.expected.items()
              if one.step > float(np.median(one.sigma))),
        fit.best.chi2 / max(np.count_nonzero(problem.bins.weights), 1),
    )


def _with_gauge_noise(setup, pulse):
    """Return the setup with the hold's duration as uncertain as it is from a noisy record."""
    if setup.hold is None or not setup.clock_known:
        return setup
    noisy = prepare_setup(setup.apparatus, pulse.time, pulse.columns).hold
    return replace(setup, hold=replace(setup.hold, effective_sigma=noisy.effective_sigma))


def _channel(expected, column, kind, record, window):
    """Return a channel's noiseless samples with the noise they will have."""
    count = window.size
    value, sigma = expected.value[:count], expected.sigma[:count]
    clipped = np.zeros(count, dtype=bool)
    if expected.full_scale is not None and getattr(record, "full_scale", None) is not None:
        clipped = (value >= expected.full_scale - expected.step) & window
    signal = value - (record.dark or 0.0)
    variance = sigma**2 + expected.step**2 / 12.0
    floor = float(variance.min())
    noise = NoiseModel(floor, 0.0, 0.0, float(signal.min()), expected.step)
    return ChannelData(
        column, kind, signal, window & ~clipped, np.sqrt(variance), noise,
        int(clipped.sum()), 0, raw=signal,
    )


def _narrowed(setup, scenario):
    """Return the setup with tables that end not far beyond the radius its pulse reaches.

    Large droplets cost most of the time that a new table takes.
    """
    growth = grow(setup, Cloud(number=float(np.log(max(scenario.number, 1e-3)))))
    radius = max(_ROOM * float(np.nanmax(growth.radius)), _LEAST_REACH)
    # On a lattice, so that pulses which differ little share their tables.
    reach = _LEAST_REACH * 2.0 ** (0.5 * np.ceil(2.0 * np.log2(radius / _LEAST_REACH)))
    analysis = setup.apparatus.analysis
    analysis = replace(analysis, max_radius=min(analysis.max_radius, float(reach)))
    return replace(setup, apparatus=replace(setup.apparatus, analysis=analysis))
