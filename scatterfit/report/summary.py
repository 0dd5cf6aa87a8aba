"""One pulse's result as plain text for a terminal, 80 columns wide."""

import textwrap

from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity

WIDTH = 80
"""Columns of the text."""

VERDICTS = {
    "accepted": "One solution describes the trace, and no other comes near it.",
    "ambiguous": "The fit describes the trace, but another solution cannot be excluded.",
    "rejected": "No radius is claimed: no cloud was seen, or the model does not describe it.",
    "failed": "The file could not be used.",
}
"""What each verdict means, in words."""

_LABEL = 28
_WORTH_A_WORD = 0.01


def summary_text(result):
    """Return the plain text that a terminal shows for one pulse.

    Parameters
    ----------
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.

    Returns
    -------
    text : str
        Lines of at most 80 columns (longer only where a single word is), without a closing
        newline: verdict and reasons first, then the quantities with their units.
    """
    parts = [_verdict(result)]
    if result["verdict"] != "failed":
        parts += [
            _section("Droplets", _droplets(result)),
            _section("Number", _number(result)),
            _section("Gas", _gas(result)),
            _section("Nucleation", _nucleation(result)),
            _alternatives(result["alternatives"]),
            _fit(result),
            _budget(result["budget"]),
            _repeated(result.get("monte_carlo")),
        ]
    parts.append(_by_hand(result.get("provenance") or {}))
    return "\n\n".join(part for part in parts if part)


def _verdict(result):
    lines = [f"{result['verdict'].upper()}  {result['trace']}"]
    lines += [f"  {VERDICTS[result['verdict']]}"]
    for reason in result["reasons"]:
        lines += textwrap.wrap(
            f"[{reason['code']}] {reason['text']}",
            WIDTH,
            initial_indent="  - ",
            subsequent_indent="    ",
            break_long_words=False,
            break_on_hyphens=False,
        )
    return "\n".join(lines)


def _section(title, rows):
    """Return a titled table, or one line where nothing in it is determined."""
    rows = [row for row in rows if row is not None]
    if all(text == NOT_DETERMINED for _, text, _ in rows):
        return f"{title}: {NOT_DETERMINED}"
    return "\n".join([title, *(_row(*row) for row in rows)])


def _row(label, text, note):
    line = f"  {label:<{_LABEL}}{text}"
    if note and text != NOT_DETERMINED:
        noted = f"{line:<56} {note}"
        line = noted if len(noted) <= WIDTH else f"{line}\n{'':{_LABEL + 2}}{note}"
    return line


def _quantity(result, key, label, unit="", note=""):
    quantity = result[key]
    if quantity is None:
        return label, NOT_DETERMINED, ""
    return label, format_quantity(quantity["value"], quantity["sigma"], unit), note


def _droplets(result):
    at_end = "" if result["final_ms"] is None else f"at {format_number(result['final_ms'], 'ms')}"
    at_reference = "at the reference radius"
    return [
        _quantity(result, "final_radius_um", "final radius", "um", at_end),
        _quantity(result, "growth_rate_um_per_s", "growth rate dr/dt", "um/s", at_reference),
        _quantity(result, "area_rate_um2_per_s", "growth rate d(r²)/dt", "um2/s", at_reference),
        _quantity(result, "growth_scale", "measured / computed growth"),
        _quantity(result, "radius_spread_percent", "spread of radii", "percent"),
        _quantity(result, "droplet_temperature_K", "droplet temperature", "K", at_reference),
        _quantity(result, "birth_ms", "median birth", "ms"),
    ]


def _number(result):
    number = result["concentration_per_cm3"]
    by = result["concentration_by"]
    limit = result["upper_limit_per_cm3"]
    shown = None
    if limit is not None:
        shown = "upper limit (95 percent)", format_number(limit, "1/cm3", 2), ""
    return [
        _quantity(result, "concentration_per_cm3", "droplets per volume", "1/cm3"),
        *_shares_of_sigma(number),
        *(_quantity(by, key, f"  by {key}", "1/cm3") for key in by),
        shown,
    ]


def _shares_of_sigma(number):
    if number is None:
        return
    for kind in ("statistical", "systematic"):
        sigma = number.get(f"sigma_{kind}")
        if sigma is not None:
            yield f"  sigma, {kind}", format_number(sigma, "1/cm3", 2), ""


def _gas(result):
    depth = result["optical_depth"]
    return [
        _quantity(result, "growth_saturation_ratio", "saturation ratio, growth"),
        _quantity(result, "growth_temperature_K", "temperature, growth", "K"),
        ("optical depth at the end", format_number(depth, digits=3), ""),
    ]


def _nucleation(result):
    nucleation = result["nucleation"] or {}
    if not nucleation:
        return [("", NOT_DETERMINED, "")]
    return [
        _quantity(nucleation, "temperature_K", "temperature", "K"),
        _quantity(nucleation, "pressure_kPa", "pressure", "kPa"),
        _quantity(nucleation, "saturation_ratio", "saturation ratio", "", "over the liquid"),
        _quantity(nucleation, "effective_ms", "effective duration", "ms"),
        _quantity(nucleation, "rate_per_cm3_s", "nucleation rate", "1/(cm3 s)", "peak"),
    ]


def _alternatives(alternatives):
    if not alternatives:
        return ""
    lines = ["Other solutions (chi² above the best)"]
    for other in alternatives:
        radius = format_number(other["final_radius_um"], "um")
        number = format_number(other["concentration_per_cm3"], "1/cm3", 3)
        excess = format_number(other["delta_chi2"], digits=3)
        lines.append(f"  +{excess:<12} final radius {radius:<12} number {number}")
    return "\n".join(lines)


def _fit(result):
    chi2, lag = result["chi2_reduced"], result["residual_lag1"]
    if chi2 is None:
        return ""
    text = f"Fit: reduced chi² {format_number(chi2, digits=3)}"
    return f"{text}, correlation of neighbouring residuals {format_number(lag, digits=2)}"


def _budget(budget):
    """Return the three largest inputs of the radius' and the number's uncertainty."""
    lines = []
    for quantity in ("final_radius_um", "concentration_per_cm3"):
        rows = [row for row in budget
                if row["quantity"] == quantity and (row["share"] or 0) >= _WORTH_A_WORD]
        largest = sorted(rows, key=lambda row: row["share"], reverse=True)[:3]
        if largest:
            shares = ", ".join(f"{row['input']} {100 * row['share']:.0f} %" for row in largest)
            head = "final radius: " if quantity == "final_radius_um" else "number: "
            lines += textwrap.wrap(head + shares, WIDTH - 2, subsequent_indent="    ")
    return "\n".join(["Where the uncertainty comes from (share of variance)"] * bool(lines)
                     + [f"  {line}" for line in lines])


def _repeated(found):
    """Return the spread over repeated analyses, where there is one."""
    if not found:
        return ""
    rows = (("final radius", "final_radius_um", "um"),
            ("droplets per volume", "concentration_per_cm3", "1/cm3"),
            ("nucleation rate", "nucleation_rate_per_cm3_s", "1/(cm3 s)"))
    lines = [f"  {name:<26}  {format_quantity(found[key]['value'], found[key]['sigma'], unit)}"
             for name, key, unit in rows if found.get(key)]
    head = f"Over {found['trials']} repeated analyses, inputs drawn from their sigmas"
    return "\n".join([head, *lines])


def _by_hand(provenance):
    """Return what was set by hand for this pulse, so that it is seen with the result."""
    overrides = provenance.get("overrides") or {}
    excluded = provenance.get("exclude_ms") or []
    lines = [f"  {key} = {value}" for key, value in overrides.items()]
    lines += [f"  excluded: {start:g} to {end:g} ms" for start, end in excluded]
    return "\n".join(["Set for this pulse", *lines]) if lines else ""
