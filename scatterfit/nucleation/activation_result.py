"""Activation as the documented JSON object, cautions about it, and two runs compared."""

import math
from dataclasses import dataclass, replace

import numpy as np

from scatterfit.nucleation.activation import Run
from scatterfit.nucleation.estimate import Estimate, quantity
from scatterfit.nucleation.seeded import REASONS_LEFT_OUT

SCHEMA = "scatterfit-activation-1"
_NANO = 1e9
_MOST_POINTS = 200


@dataclass(frozen=True)
class RunComparison:
    """One run against another."""

    first: Run
    second: Run
    onset: Estimate
    """ln of the onset of the second over that of the first [-]."""
    width: Estimate | None
    """Width of the second less that of the first [-]."""


def compare_runs(runs, others):
    """Compare the runs of two tables, or those of one with its first.

    Parameters
    ----------
    runs : sequence of Run
        Of the first table.
    others : sequence of Run
        Of the second.

    Returns
    -------
    comparisons : tuple of RunComparison
        The n-th run with an onset of either, as far as both have one.
    """
    pairs = zip((run for run in runs if run.onset), (run for run in others if run.onset),
                strict=False)
    return tuple(_compared(one, other) for one, other in pairs)


def _compared(one, other):
    parts = [(run.onset.statistical / run.onset.value, run.onset.systematic / run.onset.value)
             for run in (one, other)]
    statistical, shared = (math.hypot(*both) for both in zip(*parts, strict=True))
    factor = max(one.onset.factor, other.onset.factor)
    onset = Estimate(math.log(other.onset.value / one.onset.value), statistical, shared, factor)
    width = None
    if one.width and other.width:
        width = Estimate(other.width.value - one.width.value,
                         math.hypot(one.width.statistical, other.width.statistical), 0.0, factor)
    return RunComparison(one, other, onset, width)


def with_comparison(activation, other=None):
    """Return an activation with its runs compared.

    Parameters
    ----------
    activation : Activation
        The result.
    other : Activation, optional
        Of another table; when absent, every run is compared with the first.

    Returns
    -------
    activation : Activation
        With its comparison.
    """
    if other is not None:
        found = compare_runs(activation.runs, other.runs)
    else:
        fitted = [run for run in activation.runs if run.onset]
        found = tuple(_compared(fitted[0], run) for run in fitted[1:])
    return replace(activation, comparison=found)


def activation_to_dict(activation):
    """Return activation as the JSON object that ``activation --json`` prints.

    Parameters
    ----------
    activation : Activation
        The result.

    Returns
    -------
    result : dict
        Quantities in the units that their keys name; ``None`` where nothing is determined.
    """
    settings = activation.settings
    return {
        "schema": SCHEMA,
        "source": activation.source,
        "substance": settings.substance.name,
        "by": activation.by,
        "density": activation.density,
        "isotherms": [_run(run, settings) for run in activation.runs],
        "comparison": [_comparison(found) for found in activation.comparison],
        "left_out": [{"code": code, "text": REASONS_LEFT_OUT[code], "pulses": count}
                     for code, count in activation.left_out.items() if count],
        "settings": {"tolerance_K": settings.tolerance, "kappa": settings.kappa,
                     "saturation_ratio": "over the liquid, as given in the table"},
    }


def _run(run, settings):
    data = run.pulses.data
    angle = quantity(run.angle, 180.0 / math.pi)
    return {
        "temperature_K": run.temperature,
        "by": run.by,
        "seed_diameter_nm": None if run.diameter is None else run.diameter * _NANO,
        "pulses": len(run.pulses.names),
        "temperature_spread_K": float(np.ptp(run.pulses.temperature)),
        "onset": quantity(run.onset),
        "width": quantity(run.width),
        "plateau": quantity(run.plateau),
        "plateau_fitted": bool(run.curve and run.curve.plateau_free),
        "saturation_ratio_10_90": _between(run),
        "kelvin_equivalent_diameter_nm": quantity(run.equivalent, _NANO),
        "kelvin": _against(run, run.kelvin),
        "koehler": None if run.koehler is None else
        {"kappa": settings.kappa, **_against(run, run.koehler)},
        "kappa": quantity(run.kappa),
        "contact_angle_deg": angle,
        "fletcher_factor": run.fletcher,
        "noise": None if run.curve is None or data.sigma is not None else
        {"counting": run.curve.noise.counting, "proportional": run.curve.noise.proportional},
        "outliers": list(run.outliers),
        "points": _points(run),
        "reasons": [{"code": code, "text": text} for code, text in activation_reasons(run)],
    }


def _between(run):
    """Return where a tenth and nine tenths of the plateau are reached."""
    if run.width is None:
        return None
    z = 1.2816 * run.curve.width
    return [math.exp(run.curve.centre - z), math.exp(run.curve.centre + z)]


def _against(run, ratio):
    """Return a computed threshold, and how much of it the onset is."""
    if ratio is None:
        return None
    found = {"saturation_ratio": ratio, "onset_over_it": None}
    if run.onset is not None:
        onset = run.onset
        found["onset_over_it"] = quantity(replace(
            onset, value=onset.value / ratio, statistical=onset.statistical / ratio,
            systematic=onset.systematic / ratio))
    return found


def _points(run):
    """Return at most a few hundred of the measured fractions."""
    low, high = run.intervals()
    count = len(run.pulses.names)
    step = -(-count // _MOST_POINTS)
    return [{"trace": run.pulses.names[place],
             "saturation_ratio": float(np.exp(run.pulses.data.x[place])),
             "fraction": float(run.pulses.data.fraction[place]),
             "low": float(low[place]), "high": float(high[place])}
            for place in range(0, count, step)]


def _comparison(found):
    return {
        "first": _named(found.first), "second": _named(found.second),
        "ln_onset_difference": quantity(found.onset),
        "width_difference": quantity(found.width),
        "sigmas_apart": abs(found.onset.value) / found.onset.sigma if found.onset.sigma else None,
    }


def _named(run):
    return {"by": run.by, "temperature_K": run.temperature,
            "seed_diameter_nm": None if run.diameter is None else run.diameter * _NANO}


def _below_kelvin(run):
    """Return whether the onset is significantly below the Kelvin limit."""
    return run.onset.value + 2.0 * run.onset.sigma < run.kelvin


def activation_reasons(run):
    """Return what a reader of a run should know, with what would help.

    Parameters
    ----------
    run : Run
        The run.

    Returns
    -------
    reasons : list of tuple
        Code and text.
    """
    data, curve, found = run.pulses.data, run.curve, []
    if curve is None:
        side = "below" if data.fraction.max() < 0.5 else "above"
        return [("no-onset", f"every pulse is {side} half activation, from S = "
                 f"{np.exp(data.x.min()):.4g} to {np.exp(data.x.max()):.4g}: pulses on the other "
                 "side would do")]
    if not curve.resolved:
        found.append(("width-unresolved", "no pulse lies on the slope: the onset is between two "
                      "pulses, the width is not determined; finer steps of S would do"))
    if run.outliers:
        names = ", ".join(run.outliers[:5]) + ", ..." * (len(run.outliers) > 5)
        found.append(("outliers", f"{names}: too far from the curve to be chance; kept in the fit"))
    if curve.plateau_free and abs(curve.plateau - 1.0) > 0.02:
        found.append(("plateau", f"the fraction levels off at {curve.plateau:.3g}, not at one: the "
                      "number's scale and the seeds disagree, or not all seeds take part"))
    if curve.resolved and data.x.max() < curve.centre + curve.width:
        found.append(("no-plateau", "no pulse is far beyond the onset: that all seeds activate is "
                      "assumed"))
    spread = float(np.ptp(run.pulses.temperature))
    if spread > 2.0:
        found.append(("temperature-spread", f"temperatures differ by {spread:.2g} K within the "
                      "run: the thresholds are those of its mean"))
    if not run.pulses.ratio_shared and not np.any(data.variance_x):
        found.append(("no-sigmas", "the table has no sigma of S: the onset's uncertainty is that "
                      "of the scatter alone; what all pulses share, such as the start "
                      "temperature, is not in it"))
    if run.kelvin is not None and _below_kelvin(run):
        found.append(("below-kelvin", "activation below the Kelvin limit of a wettable seed: it "
                      "is soluble, or larger than stated"))
    return found
