"""What was found in a simulated pulse beside what was put into it."""

import re

from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity

_PRINTED = re.compile(r"\(?(\S+) ± [\d.]+\)?")
_ROWS = (
    ("final radius [µm]", ("final_radius_um",), "final_radius_um"),
    ("number [cm⁻³]", ("concentration_per_cm3",), "N_per_cm3"),
    ("median birth [ms]", ("birth_ms",), "birth_ms"),
    ("saturation ratio, growth", ("growth_saturation_ratio",), "S_growth"),
    ("temperature, nucleation [K]", ("nucleation", "temperature_K"), "T_nuc"),
    ("saturation ratio, nucleation", ("nucleation", "saturation_ratio"), "S_nuc"),
    ("nucleation rate [cm⁻³ s⁻¹]", ("nucleation", "rate_per_cm3_s"), "J_per_cm3_s"),
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
        found = NOT_DETERMINED if limit is None else f"at most {format_number(limit, digits=2)}"
        return "\n".join([*lines, _row("number [cm⁻³]", found, "0", "")])
    lines.append(_row("", "found", "put in", "apart"))
    for label, path, key in _ROWS:
        found = result
        for step in path:
            found = (found or {}).get(step)
        lines.append(_compared(label, found, truth[key]))
    return "\n".join(lines)


def _compared(label, found, true):
    if found is None or true is None or not found["sigma"]:
        text = format_quantity(found["value"], found["sigma"]) if found else NOT_DETERMINED
        return _row(label, text, "-" if true is None else format_number(true, digits=5), "")
    value, sigma = found["value"], found["sigma"]
    # What was put in is rounded as what was found, so that the digits compare.
    put_in = _PRINTED.sub(r"\1", format_quantity(true, sigma))
    return _row(label, format_quantity(value, sigma), put_in, f"{(value - true) / sigma:+.1f} σ")


def _row(label, found, true, apart):
    return f"  {label:<30}{found:<24}{true:<14}{apart}".rstrip()
