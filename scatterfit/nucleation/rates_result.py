"""Rates as the documented JSON object, and cautions about them."""

import math

import numpy as np

from scatterfit.nucleation.estimate import quantity
from scatterfit.nucleation.line import chi_square_limit
from scatterfit.nucleation.select import REASONS_LEFT_OUT
from scatterfit.nucleation.theory import theories
from scatterfit.units import from_si

SCHEMA = "scatterfit-rates-1"
FREEZING = 235.0
"""Below it droplets of water may freeze within milliseconds [K] (common practice, no source)."""

_PER_CM3 = 1e-6
_FEWEST = 3
_LARGE_CORRECTION = 0.1  # rms of ln J
_FAR = math.log(10.0)
_WORTH_SAYING = 0.05  # ln of J, from where on losses are worth a caution
_MOST = math.log(2.0)  # the same, from where on a correction is as large as what it corrects


def rates_to_dict(rates):
    """Return rates as the JSON object that ``rates --json`` prints.

    Parameters
    ----------
    rates : Rates
        The result.

    Returns
    -------
    result : dict
        Quantities in the units that their keys name; ``None`` where nothing is determined.
    """
    settings = rates.settings
    return {
        "schema": SCHEMA,
        "source": rates.source,
        "substance": settings.substance.name,
        "by": rates.by,
        "isotherms": [_isotherm(isotherm, lost, rates)
                      for isotherm, lost in zip(rates.isotherms, rates.losses, strict=True)],
        "theories": {theory.name: {"source": theory.source,
                                   "temperature_range_K": [_plain(end) for end in theory.range]}
                     for theory in theories(settings.substance)},
        "properties": {name: getattr(settings.substance, name).source
                       for name in ("saturation_pressure", "surface_tension", "density")},
        "theory_trend": {name: None if trend is None else
                         {"constant": quantity(trend.constant),
                          "per_inverse_K": quantity(trend.per_inverse_kelvin)}
                         for name, trend in rates.trends.items()},
        "hold_series": [_series(series) for series in rates.series],
        "comparison": [_comparison(comparison) for comparison in rates.comparison],
        "left_out": [{"code": code, "text": REASONS_LEFT_OUT[code], "pulses": count}
                     for code, count in rates.left_out.items() if count],
        "settings": {
            "tolerance_K": settings.tolerance,
            "to_isotherm": settings.to_isotherm,
            "critical_cluster_convention": f"slope = n* + {settings.convention}",
            "saturation_ratio": "over the liquid, as given in the table",
            "uncertainties": "stated and scatter" if any(
                isotherm.pulses.errors for isotherm in rates.isotherms) else
            "scatter alone; what all pulses share, such as an error of the start temperature or "
            "of the gain, is not in it",
        },
    }


def _isotherm(isotherm, lost, rates):
    seen, line, settings = isotherm.measured, isotherm.line, rates.settings
    scatter = chi2 = None
    if line is not None:
        scatter, chi2 = _plain(line.scatter), _plain(line.chi2_reduced)
    return {
        "temperature_K": isotherm.temperature,
        "by": isotherm.by,
        "pulses": len(seen.names),
        "censored": len(isotherm.pulses.names) - len(seen.names),
        "temperature_spread_K": _spread(isotherm.pulses.temperature),
        "saturation_ratio_range": _range(seen.ratio),
        "rate_range_per_cm3_s": _range(seen.rate * _PER_CM3),
        "slope": quantity(isotherm.slope),
        "slope_robust": quantity(isotherm.robust),
        "critical_cluster": quantity(isotherm.cluster),
        "critical_cluster_convention": f"slope = n* + {settings.convention}",
        "critical_cluster_theory": _plain(isotherm.cluster_theory),
        "saturation_ratio_at": [
            {"rate_per_cm3_s": from_si(rate, "per_cm3"), "saturation_ratio": quantity(ratio)}
            for rate, ratio in isotherm.ratio_at
        ],
        "theory_log10_ratio": {theory.name: _ratio(isotherm.theory.get(theory.name))
                               for theory in theories(settings.substance)},
        "outliers": list(isotherm.outliers),
        "scatter_ln_rate": scatter,
        "chi2_reduced": chi2,
        "temperature_correction": _correction(isotherm, settings),
        "losses": _losses(lost, settings),
        "reasons": [{"code": code, "text": text} for code, text in
                    reasons_of(isotherm, settings, lost, background=rates.background)],
    }


def _ratio(ratio):
    found = None if ratio is None else quantity(ratio.estimate)
    if found is None:
        return None
    return {**found, "scatter": _plain(ratio.scatter), "in_range": ratio.in_range}


def _losses(lost, settings):
    """Return what a background took: of J in percent, and what that rests on."""
    if lost is None:
        return None
    whole = lost.droplets + lost.vapour
    left = math.exp(-whole)
    return {
        "corrected": settings.put_back,
        "lost_percent": {"value": -100 * math.expm1(-whole), "sigma": 100 * left * lost.sigma},
        "factor_on_rate": {"value": 1 / left, "sigma": lost.sigma / left},
        "lost_droplets_percent": -100 * math.expm1(-lost.droplets),
        "lost_by_vapour_percent": None if lost.taken is None else -100 * math.expm1(-lost.vapour),
        "survival": math.exp(-lost.droplets),
        "detected_diameter_nm": lost.detected * 1e9,
        "condensation_sink_per_s": lost.sink,
        "growth_rate_nm_per_ms": lost.growth * 1e6,
        "vapour_taken": lost.taken,
        "density": "as given, at the density of the hold" if lost.density is None else
        f"taken from the chamber's gas density to that of the hold, {lost.density}",
    }


def _correction(isotherm, settings):
    """Return how much bringing the pulses to the isotherm's temperature changes."""
    change = isotherm.correction
    if change is None:
        return None
    return {
        "applied": settings.to_isotherm,
        "rms_ln_rate": float(np.sqrt(np.mean(change**2))),
        "largest_ln_rate": float(np.abs(change).max()),
        "slope_with_it": _plain(isotherm.slope_corrected),
    }


def _series(series):
    return {
        "by": series.by,
        "temperature_K": series.temperature,
        "saturation_ratio": series.ratio,
        "pulses": len(series.number),
        "blanks": series.blanks,
        "rate_per_cm3_s": quantity(series.rate, _PER_CM3),
        "background_per_cm3": quantity(series.background, _PER_CM3),
    }


def _comparison(comparison):
    return {
        "by": comparison.by,
        "temperature_K": comparison.temperature,
        "other_temperature_K": comparison.other_temperature,
        "saturation_ratio": comparison.ratio,
        "log10_rate_difference": quantity(comparison.log10_rate),
        "slope_difference": quantity(comparison.slope),
        "sigmas_apart": _sigmas(comparison.log10_rate),
    }


def _sigmas(estimate):
    return _plain(abs(estimate.value) / estimate.sigma) if estimate.sigma > 0 else None


def reasons_of(isotherm, settings, lost=None, *, background=False):
    """Return what a reader of an isotherm should know, with what would help.

    Parameters
    ----------
    isotherm : Isotherm
        The isotherm.
    settings : RateSettings
        How it was analysed.
    lost : Losses, optional
        What a background took.
    background : bool
        Whether there is one.

    Returns
    -------
    reasons : list of tuple
        Code and text.
    """
    seen = isotherm.measured
    found = list(_about_the_fit(isotherm, len(seen.names)))
    change = isotherm.correction
    if change is not None and np.sqrt(np.mean(change**2)) > _LARGE_CORRECTION:
        rms = 100 * math.expm1(float(np.sqrt(np.mean(change**2))))
        spread = _spread(seen.temperature)
        text = (f"its temperatures differ by up to {spread:.2g} K, worth {rms:.0f} percent of J "
                "(rms)")
        text += ("; taken out by theory" if settings.to_isotherm else
                 "; --to-isotherm takes it out by theory, --tolerance-K divides more finely")
        found.append(("temperature-spread", text))
    if settings.substance.name == "water" and isotherm.temperature < FREEZING:
        found.append(("freezing", f"below about {FREEZING:g} K droplets of water may freeze as "
                                  "they grow: sizes and numbers assume liquid"))
    if isotherm.theory and not any(ratio.in_range for ratio in isotherm.theory.values()):
        found.append(("theory-out-of-range", "no theory claims to hold at this temperature"))
    if background:
        found += _about_losses(lost, settings)
    return found


def _about_losses(lost, settings):
    if lost is None:
        yield ("losses-unknown", "a background is stated, but not the pressure of the hold: "
               "--pressure-kPa, or a column nucleation_pressure_kPa")
        return
    done = "put back" if settings.put_back else "not put back"
    if lost.droplets + lost.vapour > _WORTH_SAYING:
        part = -100 * math.expm1(-lost.droplets - lost.vapour)
        yield ("losses", f"the background took {part:.2g} percent of J, {done}: a cleaner gas "
               "would need no such correction")
    if lost.taken is None:
        yield ("losses-unknown", "what the background took of the vapour is not counted: the "
               "effective duration of the hold is not known")
    elif lost.vapour > _MOST:
        yield ("vapour-taken", f"the background took {100 * lost.taken:.2g} percent of the vapour "
               "by the middle of the hold, and with it most of J: that is too much for the "
               "correction to be trusted")


def _about_the_fit(isotherm, count):
    line = isotherm.line
    if line is None or not np.isfinite(line.covariance).all():
        yield ("few-pulses", f"{count} measured pulse{'s' * (count != 1)}, not enough different "
               "supersaturations for a slope with an uncertainty: three or more would do")
        return
    if isotherm.outliers:
        names = ", ".join(isotherm.outliers[:5]) + ", ..." * (len(isotherm.outliers) > 5)
        yield ("outliers", f"{names}: too far from the others to be chance; kept in the fit, the "
               "robust slope hardly feels them")
    if line.overstated:
        yield ("overstated-sigmas", "pulses scatter less than their sigmas say (reduced "
               f"chi-square {line.chi2_reduced:.2g}): the rest counts as shared by all, as "
               "errors of the start temperature and of the gain are; _sigma_systematic columns "
               "would say it")
    elif line.chi2_reduced > chi_square_limit(line, count):
        yield ("extra-scatter", f"pulses scatter more than their sigmas say (reduced chi-square "
               f"{line.chi2_reduced:.2g}): {line.scatter:.2g} of ln J was added")
    if count < _FEWEST:
        yield ("few-pulses", f"{count} measured pulses: the uncertainty rests on the stated ones")
    logs = np.log(isotherm.measured.rate)
    for rate, ratio in isotherm.ratio_at:
        if ratio is not None and not logs.min() - _FAR < math.log(rate) < logs.max() + _FAR:
            asked = from_si(rate, "per_cm3")
            yield ("extrapolated", f"J = {asked:.0e} per cm3 and s is more than a decade from "
                   "what was measured")


def _range(values):
    return [float(values.min()), float(values.max())] if values.size else None


def _spread(values):
    return float(np.ptp(values)) if values.size else 0.0


def _plain(value):
    return float(value) if value is not None and math.isfinite(value) else None
