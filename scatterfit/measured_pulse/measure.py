"""One pulse through all stages: prepare, fit, weigh, judge."""

from dataclasses import replace

import numpy as np

from scatterfit.inversion.fit import ANGLE_SETTLED, fit_pulse, refine
from scatterfit.inversion.uncertainty import posterior
from scatterfit.inversion.verdict import (
    Finding,
    describes,
    empty,
    growth_findings,
    residual_findings,
    rivals_left,
    sample_findings,
    visible,
)
from scatterfit.measured_pulse import conditions
from scatterfit.measured_pulse import quantities as q
from scatterfit.measured_pulse.beforehand import dry, flat_columns
from scatterfit.measured_pulse.bench_inputs import bench_inputs
from scatterfit.measured_pulse.budget import budget_lines, learnt_inputs, rate_budget
from scatterfit.measured_pulse.extrema import extrema_findings, matched_extrema
from scatterfit.measured_pulse.heat import heat_findings
from scatterfit.measured_pulse.limit import upper_limit
from scatterfit.measured_pulse.number import final_depth, number_results
from scatterfit.measured_pulse.prepare import optical_columns, prepare, reangled
from scatterfit.measured_pulse.record import (
    Alternative,
    ChannelView,
    MeasuredPulse,
    Quantity,
    Reason,
)
from scatterfit.measured_pulse.settings import fit_options

# Kernel and growth law: what pulses of programs that share neither were off beyond their noise.
_RADIUS_FLOOR = 2.5e-5
# An index stated without a sigma is seldom said to be against vacuum, air or the gas at hand, which
# differ by two to three parts in ten thousand: what that moved in radius, by angle, was 1 to 3e-4.
_BARE_INDEX = 1.5e-4
_RATE_FLOOR = 2e-3
_SCALE_FLOOR = 5e-3
_BASE_SPREAD = 0.003
_LARGEST = 0.98
_UNSURE = 1.5
_DISAGREE = 0.015


def measure(  # noqa: PLR0913  (the one door to the stages: each argument is a source of its own)
    apparatus, time, columns, *, trace="", store=None, exclude=(), provenance=None,
    angle_offsets=None,
):
    """Return what one pulse says.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,)
        Samples [s].
    columns : dict of str to ndarray
        Trace columns, volts and pascal.
    trace : str
        Name of the trace.
    store : object, optional
        Where kernel tables are kept.
    exclude : sequence of tuple of float
        Ranges of time to leave out [s].
    provenance : dict, optional
        What is known about the files.
    angle_offsets : sequence of float, optional
        By how much each detector's angle is stated differently than the bench says [rad].

    Returns
    -------
    pulse : MeasuredPulse
        Result with verdict and reasons.

    Raises
    ------
    TraceError
        If too few samples can be used.
    """
    provenance = dict(provenance or {})
    flat = flat_columns(apparatus, columns)
    if flat:
        return MeasuredPulse(trace, "rejected", flat, provenance=provenance)
    prepared = prepare(apparatus, time, columns, store, exclude)
    provenance["properties"] = conditions.property_sources(prepared.setup)
    provenance["refractive_index"] = _indices(apparatus, prepared.index)
    gas = {**gas_records(prepared.setup), "provenance": provenance, "trace": trace}
    warnings = tuple(Reason(*w) for w in prepared.setup.warnings)
    if dry(prepared.setup):
        ratio = prepared.setup.growth_saturation_ratio
        reason = Reason("never-supersaturated", (
            f"the vapour's saturation ratio stays below one (growth: {ratio:.3f}): no "
            "droplet can grow; check [vapour], chamber.temperature_K and the pressure"
        ))
        return MeasuredPulse(verdict="rejected", reasons=(reason, *warnings), **gas)
    base = (0.0,) * len(apparatus.detectors)
    offsets = base if angle_offsets is None else tuple(angle_offsets)
    options = fit_options(prepared, base, offsets)
    fit = fit_pulse(prepared.model, prepared.time, prepared.channels, options)
    if not visible(fit):
        if not empty(fit):
            return _puzzle(prepared, fit, gas, warnings)
        return without_cloud(prepared, fit, gas, warnings)
    prepared, fit = settle_angles(prepared, fit, base, offsets)
    return with_cloud(prepared, fit, gas, warnings)


def gas_records(setup):
    """Return what is said about the gas whatever the light shows.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    gas : dict
        Fields of :class:`MeasuredPulse`.
    """
    temperature, saturation = conditions.gas_quantities(setup)
    return {
        "growth_temperature": temperature, "growth_saturation_ratio": saturation,
        "nucleation": conditions.nucleation_conditions(setup, None),
    }


def _indices(apparatus, indices):
    """Return the liquid's index, by the name of the beam where there are several [-]."""
    if len(indices) == 1:
        return float(indices[0])
    return {beam.name: float(n) for beam, n in zip(apparatus.beams, indices, strict=True)}


def settle_angles(prepared, fit, base, offsets):
    """Return the pulse and its fit with tables made at the angles that the fit found.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        Its fit.
    base : sequence of float
        Angle shifts that the tables already hold [rad].
    offsets : sequence of float
        Where the angles are stated to be, less the bench's own statement [rad].

    Returns
    -------
    prepared : Prepared
        With other tables.
    fit : Fit
        Continued with them.
    """
    for _ in range(3):
        shifts = fit.best.cloud.angles
        if not any(abs(shift) > ANGLE_SETTLED for shift in shifts):
            break
        base = tuple(b + s for b, s in zip(base, shifts, strict=True))
        prepared = reangled(prepared, base)
        fit = refine(fit, prepared.model, prepared.time, fit_options(prepared, base, offsets))
    return prepared, fit


def _views(prepared, fit):
    """Return the channels for figures."""
    bench = prepared.setup.apparatus
    labels = {}
    for column, kind, record in optical_columns(bench):
        angle = f", {np.degrees(record.angle):g}\N{DEGREE SIGN}" if kind == "scatter" else ""
        word = "scattered" if kind == "scatter" else "transmitted"
        whose = f", {record.beam}" if bench.other_beams else ""
        labels[column] = f"{word} light{angle}{whose}"
    return tuple(
        ChannelView(d.column, labels[d.column], prepared.time,
                    d.signal, fit.model[i], fit.residual[i], d.used)
        for i, d in enumerate(fit.channels)
    )


def without_cloud(prepared, fit, gas, warnings):
    """Return the result of a pulse without a cloud.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        That found nothing.
    gas : dict
        From :func:`gas_records`, and what is known of the files.
    warnings : tuple of Reason
        From before the fit.

    Returns
    -------
    pulse : MeasuredPulse
        With an upper limit where there is one.
    """
    limit = upper_limit(fit.problem)
    text = "no rise of the light that growing droplets would explain"
    after = prepared.time > prepared.setup.births.median
    if prepared.setup.clock_known and not any((d.used & after).any() for d in fit.channels):
        text = "nothing is left to fit after the births: narrow --exclude-ms or widen the window"
        limit = None
    text += (f": fewer than {limit * 1e-6:.3g} per cm3 (95 percent)" if limit is not None
             else "" if "nothing is left" in text
             else "; without a gain or a transmission there is no limit on their number")
    return MeasuredPulse(
        verdict="rejected", reasons=(Reason("no-cloud", text), *warnings),
        upper_limit=limit, channels=_views(prepared, fit), chi2_reduced=fit.chi2_reduced,
        residual_lag1=fit.lag1, **gas,
    )


def _puzzle(prepared, fit, gas, warnings):
    """Return the result of a pulse whose light changes in a way that no cloud found explains."""
    reason = Reason("not-described", (
        "the light changes far beyond its noise, but no cloud was found that explains it: check "
        "columns, angle, index and wavelength, or exclude what is not droplets (--exclude-ms)"
    ))
    more = [Reason(f.code, f.text) for f in heat_findings(prepared.setup, prepared.time[-1])]
    return MeasuredPulse(
        verdict="rejected", reasons=(reason, *more, *warnings), channels=_views(prepared, fit),
        chi2_reduced=fit.chi2_reduced, residual_lag1=fit.lag1, **gas,
    )


def with_cloud(prepared, fit, gas, warnings):
    """Return the result of a pulse with a cloud.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        Best cloud, or the true one where a bench is planned.
    gas : dict
        From :func:`gas_records`, and what is known of the files.
    warnings : tuple of Reason
        From before the fit.

    Returns
    -------
    pulse : MeasuredPulse
        Quantities with their uncertainties, verdict and reasons.
    """
    setup, problem = prepared.setup, fit.problem
    inputs = bench_inputs(prepared, problem, fit.best)
    after = posterior(problem, fit.best, inputs)
    curve, (final, noise, parts) = q.radius_curve(setup, problem, after.state, after)
    least = _radius_floor(setup.apparatus)
    floor = least * final.value
    final = Quantity(final.value, float(np.hypot(final.sigma, floor)))
    curve = replace(curve, sigma=np.hypot(curve.sigma, least * curve.radius))
    budget = budget_lines("final_radius_um", 1e6, (noise, parts, floor), fit)
    number = number_results(prepared, fit, after)
    budget += budget_lines("concentration_per_cm3", 1e-6,
                           (number.noise, number.parts, number.floor), fit)
    reference = setup.apparatus.analysis.reference_radius
    rates, more = _rates(setup, fit, after, reference)
    budget += more
    scale = q.exponential(q.growth_scale(setup, fit.best.cloud, reference), after)[0]
    scale = Quantity(scale.value, float(np.hypot(scale.sigma, _SCALE_FLOOR * scale.value)))
    turns = matched_extrema(prepared, fit, curve)
    left = rivals_left(fit, after.inflation * fit.softening, _final_radius(fit.best))
    findings = _findings(prepared, fit, scale, turns, left)
    reasons = [Reason(f.code, f.text) for f in [*findings, *number.findings]]
    verdict = _verdict(fit, reasons, left)
    gas = {**gas, "nucleation": conditions.nucleation_conditions(
        setup, number.concentration, q.exponential(
            q.Derived(fit.best.cloud.stretch, {"stretch": 1.0}), after)[0])}
    budget += rate_budget(gas["nucleation"], number, fit)
    return MeasuredPulse(
        verdict=verdict, reasons=(*reasons, *warnings), final_radius=final,
        final_time=float(problem.bins.time[-1]), growth_scale=scale,
        concentration=number.concentration, concentration_by=number.by_handle,
        birth_time=q.birth_time(setup, fit.best.cloud, after),
        optical_depth=final_depth(prepared, fit),
        curve=curve, extrema=tuple(e for e in turns if e.radius > 0.0),
        alternatives=_alternatives(fit, number), chi2_reduced=fit.chi2_reduced,
        residual_lag1=fit.lag1, budget=tuple(budget), channels=_views(prepared, fit),
        learnt=learnt_inputs(fit, after), **rates, **gas,
    )


def _radius_floor(apparatus):
    """Return what a radius may be off beside all that is stated, relative [-]."""
    known = "vapour.refractive_index" in apparatus.sigmas
    bare = any(
        f"{apparatus.path_of(beam)}.refractive_index" not in apparatus.sigmas
        if beam.refractive_index is not None
        else apparatus.vapour.refractive_index is not None and not known
        for beam in apparatus.beams)
    return _BARE_INDEX if bare else _RADIUS_FLOOR


def _verdict(fit, reasons, left):
    """Return the verdict on a pulse with a cloud."""
    codes = {reason.code for reason in reasons}
    strange = codes & {"structured-residuals", "growth-scale-off", "birth-off"}
    if not describes(fit) or ("extrema-disagree" in codes and strange):
        return "rejected"
    count = sum(int(data.used.sum()) for data in fit.channels)
    noisy = fit.chi2_reduced > 1.0 + 5.0 * np.sqrt(2.0 / count)
    scatter = any(channel.kind == "scatter" for channel in fit.problem.model.channels)
    # A lobe is only as sure as the fit that tells it from the next.
    unsure = scatter and ((fit.chi2_reduced > _UNSURE and fit.lag1 > 0.3)
                          or ("few-extrema" in codes and noisy and fit.lag1 > 0.05))
    # Without lobes the radius rests on the very growth rate that is in doubt here.
    unsure = unsure or {"few-extrema", "growth-scale-off"} <= codes
    # Nor can growth that slows be told from vapour that depletes, which alone gives the number.
    unsure = unsure or {"few-extrema", "number-from-depletion"} <= codes
    # Nor a slow rise of the light from hum.
    unsure = unsure or {"few-extrema", "hum"} <= codes
    return "ambiguous" if left or unsure or "extrema-disagree" in codes else "accepted"


def _final_radius(evaluation):
    """Return the mean radius of the classes at the last sample [m]."""
    return max(float(evaluation.state.radius[:, -1].mean()), 1e-9)


def _rates(setup, fit, after, reference):
    """Return what is quoted at the reference radius, and the budget of the growth rate."""
    found = q.at_reference(setup, after, reference)
    intrinsic = _BASE_SPREAD**2 + fit.best.cloud.variance
    shift, noise, parts = after.propagate({"variance": 1.0})
    spread_sigma = np.sqrt(noise + sum(parts.values())) / (2.0 * np.sqrt(intrinsic))
    births = found.get("spread", 0.0)
    spread = float(np.sqrt(max(intrinsic + shift, 0.0) + births**2))
    rates = {"radius_spread": Quantity(spread, float(min(spread_sigma, 1.0)))}
    if not found:
        return rates, []
    rate, noise, parts = q.quantity(found["rate"], after)
    floor = _RATE_FLOOR * rate.value
    rate = Quantity(rate.value, float(np.hypot(rate.sigma, floor)))
    warm = q.quantity(found["warmth"], after, floor=0.05)[0]
    rates |= {
        "growth_rate": rate, "droplet_temperature": warm,
        "area_rate": Quantity(2.0 * reference * rate.value, 2.0 * reference * rate.sigma),
    }
    return rates, budget_lines("growth_rate_um_per_s", 1e6, (noise, parts, floor), fit)


def _findings(prepared, fit, scale, turns, left):
    """Return the reasons of a pulse with a cloud."""
    setup = prepared.setup
    expected, prior = fit.problem.priors["scale"]
    found = residual_findings(fit) + sample_findings(fit)
    found += growth_findings(fit, (scale.value / np.exp(expected), prior), setup)
    end = float(fit.problem.bins.time[-1]) - fit.best.cloud.delay
    found += heat_findings(setup, end, fit.best.state.growth)
    if left:
        radii = ", ".join(f"{r.final_radius * 1e6:.3f}" for r in left)
        found.append(Finding("ambiguous-lobe", (
            f"a final radius of {radii} um cannot be excluded: a second detector at another "
            "angle, a longer record, or a better known temperature would settle it"
        )))
    found += extrema_findings(turns, fit)
    table_end = np.exp(fit.problem.model.light.start) * np.exp(
        fit.problem.model.light.step * (fit.problem.model.light.count - 1))
    largest = min(setup.apparatus.analysis.max_radius, table_end)
    if _final_radius(fit.best) > _LARGEST * largest:
        found.append(Finding("largest-radius", (
            f"droplets reach {largest * 1e6:.1f} um, the largest radius considered: raise "
            "analysis.max_radius_um"
        )))
    return found


def _alternatives(fit, number):
    """Return the rivals as numbers."""
    return tuple(
        Alternative(
            rival.final_radius,
            float(np.exp(rival.cloud.number)) if number.concentration is not None else None,
            rival.delta_chi2,
        )
        for rival in fit.rivals
    )
