"""A calibration as plain text for a terminal, 100 columns wide."""

import textwrap

from scatterfit.report.rounding import NOT_DETERMINED, format_quantity, pretty_unit

WIDTH = 100
"""Columns of the text."""
_UNITS = {"per_cm3": "1/cm3", "V_m": "V m", "mm2_s": "mm2/s", "kg_m3": "kg/m3", "N_m": "N/m",
          "deg": "deg", "J_mol_K": "J/(mol K)", "kJ_mol": "kJ/mol"}
_BARELY = 0.9
_UNLIKELY = 0.01


def series_text(result):
    """Return the plain text that a terminal shows for a calibration.

    Parameters
    ----------
    result : mapping
        As ``Calibration.to_dict`` gives it.

    Returns
    -------
    text : str
        What moved and why, what cannot be separated, gain drift, and a row for each pulse.
    """
    parts = [_head(result), _table(result["shared"]), _pairs(result), _drifts(result),
             _notes(result), _traces(result["traces"])]
    return "\n\n".join(part for part in parts if part)


def _head(result):
    state = "settled" if result["converged"] else "NOT settled"
    text = (f"CALIBRATED from {result['used']} of {result['pulses']} pulses, {state} after "
            f"{result['rounds']} rounds")
    if result["held"]:
        text += "\n" + _wrapped(
            f"held, and taken as exact in these sigmas: {', '.join(result['held'])}")
    return text


def _table(shared):
    """Return the table of shared unknowns."""
    rows = [("shared unknown", "before", "after", "moved", "informed by")]
    for one in shared:
        unit = _UNITS.get(one["unit"], one["unit"])
        mark = "" if one["sigma_stated"] else "*"
        name = one["label"] + (f" [{pretty_unit(unit)}]" if unit else "")
        rows.append((
            name, format_quantity(one["before"]["value"], one["before"]["sigma"]) + mark,
            format_quantity(one["after"]["value"], one["after"]["sigma"]),
            f"{one['moved_sigmas']:+.1f}", one["informed_by"],
        ))
    widths = [max(len(row[i]) for row in rows) for i in range(4)]
    lines = []
    for row in rows:
        cells = [f"{row[0]:<{widths[0]}}", *(f"{row[i]:<{widths[i]}}" for i in (1, 2)),
                 f"{row[3]:>{widths[3]}}"]
        start = "  " + "  ".join(cells) + "  "
        if len(start) + len(row[4]) <= WIDTH:
            lines.append(start + row[4])
        else:
            lines += [start.rstrip(), f"      {row[4]}"]
    note = "  moved: in sigmas before"
    if any(not one["sigma_stated"] for one in shared):
        note += "; *: not stated in the chamber file, the usual one"
    return "\n".join([*lines, note])


def _pairs(result):
    """Return what cannot be told apart."""
    if not result["not_separated"]:
        return ""
    lines = ["Not told apart by these pulses"]
    for pair in result["not_separated"]:
        sign = "-" if pair["slope"] > 0 else "+"
        lines.append(_wrapped(
            f"{pair['first']} and {pair['second']}: errors correlate by "
            f"{pair['correlation']:.3f}; what is known is {pair['first']} {sign} "
            f"{abs(pair['slope']):.4g} x {pair['second']}, to {pair['sigma']:.2g}"))
    return "\n".join(lines)


def _drifts(result):
    """Return what became of each gain."""
    lines = []
    for one in result["gain_drift"]:
        change = one["change_percent"]
        verdict = "constant" if one["probability"] > _UNLIKELY else "NOT constant"
        lines.append(_wrapped(
            f"{one['key']}: {verdict} over {len(one['pulses'])} pulses that fix it (chi-square "
            f"{one['chi2']:.1f} for {one['degrees']}, probability {one['probability']:.2g}); a "
            f"line through them changes by {change['value']:+.2g} +- {change['sigma']:.2g} % "
            "from the first to the last"))
    return "\n".join(["Gain through the series", *lines]) if lines else ""


def _notes(result):
    return "\n".join(_wrapped(f"- {note}") for note in result["notes"])


def _traces(traces):
    """Return one row for each pulse."""
    width = max(len("trace"), *(len(row["trace"]) for row in traces))
    lines = [f"  {'trace':<{width}}  {'number':<22}  {'radius':>8}  {'chi2':>6}  {'apart':>6}  "
             "unexplained"]
    for row in traces:
        if row["final_radius_um"] is None:
            lines.append(f"  {row['trace']:<{width}}  left out")
        else:
            number = row["concentration_per_cm3"]
            text = NOT_DETERMINED if number is None else format_quantity(
                number["value"], number["sigma"], "1/cm3")
            left = ", ".join(f"{100 * value:.2g} %" for value in row["unexplained_rms"].values())
            apart = f"{row['disagrees_by_sigmas']:+.1f}" if row["used"] else "beside"
            lines.append(
                f"  {row['trace']:<{width}}  {text:<22}  {row['final_radius_um']:>8.4f}  "
                f"{row['chi2_reduced']:>6.2f}  {apart:>6}  {left}")
        lines += [_wrapped(f"[{reason['code']}] {reason['text']}", 6) for reason in row["reasons"]]
    note = ("  radius: final, in um; apart: by how many sigmas the pulse wants another bench "
            "(beside: it\n  does not take part); unexplained: root mean square over the largest "
            "light, by column")
    return "\n".join(["Pulses", *lines, note])


def _wrapped(text, indent=2):
    blank = " " * indent
    return textwrap.fill(text, WIDTH, initial_indent=blank, subsequent_indent=blank + "  ",
                         break_long_words=False, break_on_hyphens=False)
