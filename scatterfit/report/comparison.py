"""What was found in a simulated pulse beside what was put into it."""

from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity

_ROWS = (
    ("final radius", ("final_radius_um",), "final_radius_um", "um"),
    ("number", ("concentration_per_cm3",), "N_per_cm3", "1/cm3"),
    ("median birth", ("birth_ms",), "birth_ms", "ms"),
    ("saturation ratio, growth", ("growth_saturation_ratio",), "S_growth", ""),
    ("temperature, nucleation", ("nucleation", "temperature_K"), "T_nuc", "K"),
    ("saturation ratio, nucleation", ("nucleation", "saturation_ratio"), "S_nuc", ""),
    ("nucleation rate", ("nucleation", "rate_per_cm3_s"), "J_per_cm3_s", "1/(cm3 s)"),
)


def comparison_text(name, result, truth):
    """Return a table of found and true values of one simulated pulse.

    Parameters
    ----------
    name : str
        What to call the pulse.
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.
    truth : mapping
        What ``scatterfit.simulate`` put into the pulse.

    Returns
    -------
    text : str
        Verdict, reasons' codes and a row a quantity: found, true, and their difference in
        standard uncertainties.
    """
    codes = ", ".join(reason["code"] for reason in result["reasons"])
    lines = [f"{name}: {result['verdict']}" + (f" ({codes})" if codes else "")]
    if not truth["N_per_cm3"]:
        limit = result["upper_limit_per_cm3"]
        found = NOT_DETERMINED if limit is None else f"at most {format_number(limit, '1/cm3', 2)}"
        return "\n".join([*lines, _row("number", found, "0", "")])
    lines.append(_row("", "found", "true", "off by"))
    for label, path, key, unit in _ROWS:
        found = result
        for step in path:
            found = (found or {}).get(step)
        lines.append(_compared(label, found, truth[key], unit))
    return "\n".join(lines)


def _compared(label, found, true, unit):
    shown = format_number(true, unit, digits=5)
    if found is None:
        return _row(label, NOT_DETERMINED, shown, "")
    text = format_quantity(found["value"], found["sigma"], unit)
    off = f"{(found['value'] - true) / found['sigma']:+.1f} σ" if found["sigma"] else ""
    return _row(label, text, shown, off)


def _row(label, found, true, off):
    return f"  {label:<29}{found:<28}{true:<20}{off}".rstrip()
