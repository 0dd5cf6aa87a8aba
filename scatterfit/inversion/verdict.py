"""What to think of a fit: verdict and reasons, each with what would help."""

from dataclasses import dataclass

import numpy as np

SEEN = 40.0
EXCLUDED = 13.8
_WHITE = 1.3
_DESCRIBED = 3.0
_NOTHING = 3.0
_LEFT_OVER = 0.01
_LEFT_OVER_DEPTH = 0.05
_SCALE_SIGMAS = 3.5
_STRUCTURE = 0.15

REASONS = {
    "no-cloud": "no light that droplets would explain was seen",
    "flat-channel": "an optical channel never changes",
    "not-described": "the model does not describe the trace",
    "structured-residuals": "residuals are larger than the noise or not white",
    "ambiguous-lobe": "another lobe of the kernel describes the trace as well",
    "few-extrema": "too few peaks and troughs to be sure of the lobe",
    "extrema-disagree": "peaks and troughs found without the fit lie elsewhere",
    "no-number": "nothing in the data fixes the number",
    "number-from-depletion": "the number rests on the depletion of the vapour alone",
    "handles-disagree": "independent handles on the number disagree",
    "growth-scale-off": "droplets grow at another rate than the conditions imply",
    "low-accommodation": "droplets grow as if few vapour molecules stuck",
    "birth-off": "births are not when the pressure says",
    "clipped": "samples at full scale were left out",
    "missing-samples": "cells that are not finite were left out",
    "glitches": "samples far outside the noise were left out",
    "hum": "mains hum was found and fitted",
    "drift": "a drifting baseline was found and fitted",
    "mode-hops": "the laser hops between modes; its brighter state was scaled to the other",
    "multiple-scattering": "light scattered twice is no longer negligible",
    "largest-radius": "droplets reach the largest radius considered",
    "not-converged": "the last descent did not settle",
    "never-supersaturated": "the vapour is never supersaturated",
    "pressure-disagrees": "stated and measured pressure disagree",
    "warm-walls": "heat from the walls reaches far into the chamber",
    "pressure-recovers": "the pressure rises during growth by more than heat explains",
    "may-freeze": "droplets may freeze",
    "out-of-range": "a property was used outside its range",
    "unusable": "the file could not be used",
}
"""Every code a result can carry, with its meaning in few words."""


@dataclass(frozen=True)
class Finding:
    """A reason: code and text."""

    code: str
    text: str


def visible(fit):
    """Return whether the cloud lowers chi-square by more than chance would.

    Parameters
    ----------
    fit : Fit
        Best cloud and null.

    Returns
    -------
    seen : bool
        Whether there is a cloud.
    """
    return fit.chi2_null - fit.best.chi2 > SEEN * max(1.0, fit.chi2_reduced)


def empty(fit):
    """Return whether the trace holds nothing but its baseline.

    Parameters
    ----------
    fit : Fit
        Best cloud and null.

    Returns
    -------
    nothing : bool
        What the baseline leaves is little more than noise.
    """
    count = sum(int(np.count_nonzero(weight)) for weight in fit.problem.bins.weights)
    # As it was before noisier channels were weighted less.
    return fit.chi2_null * fit.softening < _NOTHING * count


def describes(fit):
    """Return whether the model describes what was seen.

    Parameters
    ----------
    fit : Fit
        Best cloud and residuals.

    Returns
    -------
    described : bool
        Chi-square is near one, or what is left is a small part of what was seen.
    """
    if fit.chi2_reduced < _DESCRIBED:
        return True
    scatter = any(channel.kind == "scatter" for channel in fit.problem.model.channels)
    return unexplained(fit) < (_LEFT_OVER if scatter else _LEFT_OVER_DEPTH) ** 2


def unexplained(fit):
    """Return which part of the signal's variance the model leaves [-].

    Parameters
    ----------
    fit : Fit
        Best cloud and null.

    Returns
    -------
    part : float
        In the bins [-].
    """
    rows = fit.problem.bins.weights.size
    return float(np.sum(fit.best.residual[:rows] ** 2)) / max(fit.chi2_null, 1e-300)


def rivals_left(fit, inflation, best_radius):
    """Return the rivals that the data cannot exclude.

    Parameters
    ----------
    fit : Fit
        Best cloud and its rivals.
    inflation : float
        Of the noise, for residuals that are not white [-].
    best_radius : float
        Final radius of the best cloud [m].

    Returns
    -------
    left : list of Rival
        Rivals within a factor 1000 of the best in likelihood, at another radius.
    """
    scale = max(1.0, inflation)
    return [
        rival for rival in fit.rivals
        if rival.delta_chi2 / scale < EXCLUDED
        and abs(np.log(rival.final_radius / best_radius)) > 0.01
    ]


def residual_findings(fit):
    """Return what the residuals say.

    Parameters
    ----------
    fit : Fit
        With residuals.

    Returns
    -------
    findings : list of Finding
        Reasons.
    """
    found = []
    if not describes(fit):
        found.append(Finding("not-described", (
            f"reduced chi-square is {fit.chi2_reduced:.1f}: the model of one cloud that is born "
            "together and grows by condensation does not describe this trace; check angle, "
            "index and wavelength, or exclude the part that is not droplets (--exclude-ms)"
        )))
    elif fit.chi2_reduced > _WHITE or fit.lag1 > _STRUCTURE:
        found.append(Finding("structured-residuals", (
            f"reduced chi-square is {fit.chi2_reduced:.2f} and neighbouring residuals correlate "
            f"by {fit.lag1:.2f}: the model misses something; sigmas are widened for it. Look at "
            "the residuals; angle and aperture are the usual suspects"
        )))
    return found


def sample_findings(fit):
    """Return what was left out of the fit or added to it.

    Parameters
    ----------
    fit : Fit
        With channels and disturbances.

    Returns
    -------
    findings : list of Finding
        Reasons.
    """
    found = []
    for data, names in zip(fit.channels, fit.disturbances, strict=True):
        if data.clipped:
            found.append(Finding("clipped", (
                f"{data.clipped} samples of {data.column} are at full scale and were left out; "
                "a lower gain would keep them"
            )))
        if data.missing:
            found.append(Finding("missing-samples", (
                f"{data.missing} cells of {data.column} are not finite and were left out"
            )))
        if data.hops is not None:
            found.append(Finding("mode-hops", (
                f"the laser of {data.column} hops between modes "
                f"{100 * np.expm1(data.hops.height):.1f} percent apart; its brighter state was "
                "scaled to the other. A power monitor ([reference]) or a stabilised laser would "
                "remove it"
            )))
        hums = [name for name in names if name.startswith("hum")]
        if hums:
            found.append(Finding("hum", (
                f"{data.column} carries {', '.join(hums)}; it was fitted. Shielding or a "
                "battery-run amplifier would remove it"
            )))
        if any("drift" in name for name in names):
            found.append(Finding("drift", (
                f"the baseline of {data.column} drifts; the drift was fitted"
            )))
    if fit.glitches:
        found.append(Finding("glitches", (
            f"{fit.glitches} samples stand alone far outside the noise and were left out"
        )))
    return found


def growth_findings(fit, scale, setup):
    """Return what the growth rate and the births say.

    Parameters
    ----------
    fit : Fit
        The fit.
    scale : tuple of float
        Growth scale and the relative uncertainty of the computed rate [-].
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    findings : list of Finding
        Reasons.
    """
    found = []
    value, prior = scale
    if abs(np.log(max(value, 1e-9))) > _SCALE_SIGMAS * prior:
        found.append(Finding("growth-scale-off", (
            f"droplets grow {value:.3f} times as fast as temperature, vapour and pressure imply "
            f"(known to {100 * prior:.1f} percent): check chamber.temperature_K and the vapour"
        )))
    sticking = setup.apparatus.vapour.mass_accommodation * np.exp(fit.best.cloud.accommodation)
    if sticking < 0.6 * setup.apparatus.vapour.mass_accommodation:
        found.append(Finding("low-accommodation", (
            f"early growth is that of a mass accommodation coefficient of {sticking:.2f}, not "
            f"{setup.apparatus.vapour.mass_accommodation:g}; a dirty surface or a wrong pressure "
            "would look the same"
        )))
    if setup.clock_known and abs(fit.best.cloud.delay) > 1e-3:
        found.append(Finding("birth-off", (
            f"light says that droplets were born {1e3 * fit.best.cloud.delay:+.2f} ms from where "
            "the pressure says: check pressure.time_constant_ms and the two clocks"
        )))
    if not fit.converged:
        found.append(Finding("not-converged", (
            "the last descent still moved when it was stopped; the result is near, not at, the "
            "best cloud"
        )))
    return found
