"""Peaks, troughs and shoulders of a pulse, matched to the kernel's: a check on the fit."""

import numpy as np

from scatterfit.forward.light import spread_table
from scatterfit.inversion.extrema import find_shoulders, find_turns, match_turns
from scatterfit.inversion.verdict import Finding
from scatterfit.measured_pulse.record import Extremum

_FEW = 3
_FITS = 1.15


def matched_extrema(prepared, fit, curve):
    """Return the extrema of all channels and the kernel's that they match.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        Best cloud.
    curve : Curve
        Fitted radius against time.

    Returns
    -------
    extrema : list of Extremum
        In order of time; radius 0 where a peak or trough matches none of the kernel's.
    """
    table = spread_table(fit.problem.model.light, fit.best.cloud.variance)
    log_radius = table.log_radius
    start = prepared.setup.births.median + fit.best.cloud.delay
    found = []

    def radius_at(time):
        return float(np.interp(time, curve.time, curve.radius))

    for i, channel in enumerate(fit.problem.model.channels):
        bins, row = fit.problem.bins, table.values[channel.row]
        samples = bins.time, bins.values[i], bins.weights[i] * np.sqrt(fit.softening)
        turns = find_turns(*samples, start) if channel.kind == "scatter" else []
        for turn, radius in match_turns(turns, radius_at, log_radius, row):
            found.append(Extremum(turn.time, radius or 0.0, turn.kind, channel.column))
        shoulders = find_shoulders(*samples, start)
        for turn, radius in match_turns(shoulders, radius_at, log_radius, row):
            if radius:
                found.append(Extremum(turn.time, radius, turn.kind, channel.column))
    found.sort(key=lambda extremum: extremum.time)
    return found


def extrema_findings(turns, fit):
    """Return what the peaks and troughs say about the fit.

    Parameters
    ----------
    turns : list of Extremum
        From :func:`matched_extrema`.
    fit : Fit
        Best cloud.

    Returns
    -------
    findings : list of Finding
        Reasons.
    """
    if not any(c.kind == "scatter" for c in fit.problem.model.channels):
        return []
    turns = [turn for turn in turns if turn.kind != "shoulder"]
    matched = sum(1 for turn in turns if turn.radius > 0.0)
    # Where the residuals are noise, turns that lie elsewhere are noise as well.
    white = fit.chi2_reduced < _FITS and fit.lag1 < 0.1
    if len(turns) >= _FEW and matched < 0.6 * len(turns) and not white:
        return [Finding("extrema-disagree", (
            f"of {len(turns)} peaks and troughs found without the fit only {matched} lie where "
            "the fitted radius puts them: look at the figure before using this radius"
        ))]
    if len(turns) < _FEW:
        return [Finding("few-extrema", (
            f"{len(turns)} peaks and troughs stand out: the radius rests on the computed growth "
            "rate as much as on the light; a longer record or a larger angle would show more"
        ))]
    return []
