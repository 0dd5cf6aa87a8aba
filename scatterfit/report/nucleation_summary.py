"""Rates and activation as plain text for a terminal, 80 columns wide where names allow."""

import textwrap

from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity

WIDTH = 80
"""Columns of the text."""

_MAIN_THEORY = ("woelk_strey_2001", "classical_with_1_over_S")
_NONE = "-"


def rates_text(result):
    """Return the plain text that a terminal shows for nucleation rates.

    Parameters
    ----------
    result : mapping
        As ``nucleation.rates_result.rates_to_dict`` gives it.

    Returns
    -------
    text : str
        Isotherms, theories, cautions; without a closing newline.
    """
    isotherms = result["isotherms"]
    parts = [_rates_head(result)]
    if isotherms:
        parts += [_slopes(isotherms, result["settings"]["uncertainties"]), _ratios(isotherms),
                  _trends(result["theory_trend"])]
    parts += [
        _lines("Series of holds", map(_series, result["hold_series"])),
        _lines("Compared with the other table", map(_night, result["comparison"])),
        _lines(*_losses(isotherms)),
        _cautions(isotherms),
        _left_out(result["left_out"]),
    ]
    return "\n\n".join(part for part in parts if part)


def _rates_head(result):
    pulses = sum(isotherm["pulses"] for isotherm in result["isotherms"])
    censored = sum(isotherm["censored"] for isotherm in result["isotherms"])
    count = len(result["isotherms"])
    text = (f"{pulses} pulse{'s' * (pulses != 1)} of {result['substance']} in {count} "
            f"isotherm{'s' * (count != 1)}")
    if censored:
        text += f", and {censored} without a cloud as upper limits"
    return f"NUCLEATION RATES  {result['source']}\n  {text}"


def _slopes(isotherms, uncertainties):
    rate = isotherms[0]["saturation_ratio_at"]
    asked = rate[0]["rate_per_cm3_s"] if rate else None
    head = ["T/K", "n", "d ln J/d ln S", "robust", "n*"]
    if asked is not None:
        head.append(f"S at {format_number(asked)}")
    rows = [head]
    for isotherm in isotherms:
        row = [_named(isotherm), str(isotherm["pulses"]), _pm(isotherm["slope"]),
               _pm(isotherm["slope_robust"]), _pm(isotherm["critical_cluster"])]
        if asked is not None:
            row.append(_pm(isotherm["saturation_ratio_at"][0]["saturation_ratio"]))
        rows.append(row)
    convention = isotherms[0]["critical_cluster_convention"]
    others = [_at_rates(isotherm) for isotherm in isotherms
              if len(isotherm["saturation_ratio_at"]) > 1]
    return "\n".join([f"Isotherms ({convention}; J in cm⁻³ s⁻¹)", *_table(rows), *others,
                      *_from_what(uncertainties)])


def _from_what(uncertainties):
    """Return what to keep in mind of uncertainties that no column states."""
    return [] if uncertainties.startswith("stated") else _wrapped(f"Uncertainties: {uncertainties}")


def _at_rates(isotherm):
    found = ", ".join(f"{_pm(at['saturation_ratio'])} at {format_number(at['rate_per_cm3_s'])}"
                      for at in isotherm["saturation_ratio_at"])
    return f"  {_named(isotherm)} K: S = {found}"


def _ratios(isotherms):
    names = list(next((i["theory_log10_ratio"] for i in isotherms if i["theory_log10_ratio"]), ()))
    if not names:
        return ""
    labels = {"classical_with_1_over_S": "classical/S", "classical_without_1_over_S": "classical"}
    rows = [["T/K", *(labels.get(name, name.rpartition("_")[0]) for name in names)]]
    for isotherm in isotherms:
        ratios = isotherm["theory_log10_ratio"]
        rows.append([_named(isotherm), *(_ratio(ratios.get(name)) for name in names)])
    title = "log10(J measured / J computed), median; in brackets: outside the theory's range"
    return "\n".join([title, *_table(rows)])


def _ratio(ratio):
    if ratio is None:
        return _NONE
    text = f"{ratio['value']:+.2f} ± {ratio['sigma']:.2f}"
    return text if ratio["in_range"] else f"({text})"


def _trends(trends):
    name = next((name for name in _MAIN_THEORY if trends.get(name)), None)
    if name is None:
        return ""
    constant, slope = trends[name]["constant"], trends[name]["per_inverse_K"]
    if constant is None or slope is None:
        return ""
    return (f"ln(J / J of {name}) = ({_pm(constant)}) + ({_pm(slope)} K) / T")


def _series(series):
    rate = _quantity(series["rate_per_cm3_s"], "1/(cm3 s)")
    background = _quantity(series["background_per_cm3"], "1/cm3")
    return (f"{series['temperature_K']:.2f} K, S = {series['saturation_ratio']:.4g}, "
            f"{series['pulses']} pulses: J = {rate}, background {background}")


def _night(found):
    apart = found["sigmas_apart"]
    told = "" if apart is None else f" ({apart:.1f} sigma)"
    return (f"{found['temperature_K']:.2f} K: log10 J higher by "
            f"{_pm(found['log10_rate_difference'])}{told}, slope by "
            f"{_pm(found['slope_difference'])}")


def _losses(isotherms):
    """Return title and lines on what a background took of each isotherm's rates."""
    found = [(isotherm, isotherm["losses"]) for isotherm in isotherms if isotherm["losses"]]
    done = found and found[0][1]["corrected"]
    how = "J above is corrected for them" if done else "J above is not corrected for them"
    title = f"Losses to the background ({how})"
    return title, [_lost(isotherm, lost) for isotherm, lost in found]


def _lost(isotherm, lost):
    vapour = lost["lost_by_vapour_percent"]
    by_vapour = "not known" if vapour is None else f"{format_number(vapour, digits=2)} %"
    return (f"{_named(isotherm)} K: {_pm(lost['lost_percent'])} % of J lost, so J times "
            f"{_pm(lost['factor_on_rate'])}; droplets swept up before "
            f"{format_number(lost['detected_diameter_nm'], 'nm', 3)}: "
            f"{format_number(lost['lost_droplets_percent'], digits=2)} % (survival "
            f"{lost['survival']:.4f}), by vapour taken: {by_vapour}; condensation sink "
            f"{format_number(lost['condensation_sink_per_s'], '1/s', 3)}, growth "
            f"{format_number(lost['growth_rate_nm_per_ms'], 'nm/ms', 3)}")


def activation_text(result):
    """Return the plain text that a terminal shows for activation.

    Parameters
    ----------
    result : mapping
        As ``nucleation.activation_result.activation_to_dict`` gives it.

    Returns
    -------
    text : str
        Runs, comparisons, cautions; without a closing newline.
    """
    runs = result["isotherms"]
    pulses = sum(run["pulses"] for run in runs)
    head = (f"ACTIVATION OF SEEDS  {result['source']}\n  {pulses} pulse{'s' * (pulses != 1)} of "
            f"{result['substance']} "
            f"in {len(runs)} run{'s' * (len(runs) != 1)}")
    head = "\n".join([head, *_wrapped(result["density"])])
    parts = [head, *map(_run, runs),
             _lines("Compared", map(_onsets, result["comparison"])),
             _cautions(runs), _left_out(result["left_out"])]
    return "\n\n".join(part for part in parts if part)


def _run(run):
    size = run["seed_diameter_nm"]
    title = f"{_named(run)} K" + (f", seeds of {format_number(size, 'nm')}" if size else "")
    rows = [
        ("onset, S at half", _quantity(run["onset"])),
        ("width of ln S", _quantity(run["width"])),
        ("levels off at", _quantity(run["plateau"]) if run["plateau_fitted"] else "1 (assumed)"),
        ("Kelvin-equivalent diameter", _quantity(run["kelvin_equivalent_diameter_nm"], "nm")),
    ]
    if run["kelvin"]:
        ratio = format_number(run["kelvin"]["saturation_ratio"], digits=4)
        rows.append(("Kelvin limit, wettable seed", f"S = {ratio}; onset over it: "
                     f"{_quantity(run['kelvin']['onset_over_it'])}"))
    if run["koehler"]:
        ratio = format_number(run["koehler"]["saturation_ratio"], digits=4)
        rows.append((f"Koehler, kappa {run['koehler']['kappa']:g}", f"S = {ratio}; onset over it: "
                     f"{_quantity(run['koehler']['onset_over_it'])}"))
    if run["kappa"]:
        rows.append(("kappa that would explain it", _quantity(run["kappa"])))
    if run["contact_angle_deg"]:
        rows.append(("contact angle that would", _quantity(run["contact_angle_deg"], "deg")))
        rows.append(("barrier left with it", format_number(run["fletcher_factor"], digits=3)))
    count = run["pulses"]
    return "\n".join([f"{title}, {count} pulse{'s' * (count != 1)}",
                      *(f"  {label:<29}{text}" for label, text in rows)])


def _onsets(found):
    apart = found["sigmas_apart"]
    names = [" ".join(filter(None, [one["by"], f"{one['temperature_K']:.2f} K"]))
             for one in (found["second"], found["first"])]
    told = "" if apart is None else f" ({apart:.1f} sigma)"
    text = f"{names[0]} over {names[1]}: ln of the onset by {_pm(found['ln_onset_difference'])}"
    return f"{text}{told}, width by {_pm(found['width_difference'])}"


def _named(isotherm):
    """Return an isotherm's temperature, with the value that its pulses share."""
    text = f"{isotherm['temperature_K']:.2f}"
    return text if isotherm["by"] is None else f"{isotherm['by'] or '(empty)'}: {text}"


def _pm(quantity):
    return _NONE if quantity is None else format_quantity(quantity["value"], quantity["sigma"])


def _quantity(quantity, unit=""):
    if quantity is None:
        return NOT_DETERMINED
    return format_quantity(quantity["value"], quantity["sigma"], unit)


def _table(rows):
    """Return rows of cells as lines, the columns as wide as their widest cell."""
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return ["  " + "  ".join(f"{cell:>{width}}" for cell, width in zip(row, widths, strict=True))
            for row in rows]


def _lines(title, lines):
    lines = [part for line in lines for part in _wrapped(line)]
    return "\n".join([title, *lines]) if lines else ""


def _wrapped(line, indent="  "):
    return textwrap.wrap(line, WIDTH, initial_indent=indent, subsequent_indent="    ",
                         break_long_words=False, break_on_hyphens=False)


def _cautions(isotherms):
    """Return every caution once, with the isotherms that it is about."""
    where = {}
    for isotherm in isotherms:
        for reason in isotherm["reasons"]:
            where.setdefault((reason["code"], reason["text"]), []).append(_named(isotherm))
    return _lines("Cautions", (f"{', '.join(names)} K [{code}] {text}"
                               for (code, text), names in where.items()))


def _left_out(left_out):
    return _lines("Left out", (f"{entry['pulses']}: {entry['text']}" for entry in left_out))
