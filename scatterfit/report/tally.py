"""Lines about many pulses: what there is to do, what came of it."""

from scatterfit.report.rounding import format_number, format_quantity

VERDICT_ORDER = ("accepted", "ambiguous", "rejected", "failed")
"""Verdicts from good to bad."""


def tally_line(verdicts, reasons):
    """Return one line that counts verdicts and reasons.

    Parameters
    ----------
    verdicts, reasons : mapping of str to int
        How often each occurs.

    Returns
    -------
    line : str
        Verdicts in their order, then reasons, the most frequent first.

    Examples
    --------
    >>> print(tally_line({"failed": 1, "accepted": 8}, {"unusable": 1}))
    9 pulses: 8 accepted, 1 failed; reasons: unusable 1
    >>> print(tally_line({}, {}))
    no pulses
    """
    total = sum(verdicts.values())
    if not total:
        return "no pulses"
    counts = ", ".join(f"{verdicts[name]} {name}" for name in VERDICT_ORDER if verdicts.get(name))
    line = f"{plural(total, 'pulse')}: {counts}"
    ranked = sorted(reasons.items(), key=lambda item: (-item[1], item[0]))
    if ranked:
        line += "; reasons: " + ", ".join(f"{code} {count}" for code, count in ranked)
    return line


def plan_line(folder, catalogue):
    """Return one line that says what there is to do in a folder.

    Parameters
    ----------
    folder : path-like
        The folder.
    catalogue : Catalogue
        What was found there.

    Returns
    -------
    line : str
        Number of traces, of those skipped because they are done, and of those to do by cause.
    """
    line = f"{folder}: {plural(catalogue.found, 'trace')}"
    if catalogue.done:
        line += f", {catalogue.done} skipped because they are done"
    return f"{line}, {todo_text(catalogue)}"


def todo_text(catalogue):
    """Return in words what there is to do.

    Parameters
    ----------
    catalogue : Catalogue
        What was found.

    Returns
    -------
    text : str
        Number of traces by cause.
    """
    if not catalogue.todo:
        return "nothing to do"
    causes = ", ".join(f"{count} {cause}" for cause, count in catalogue.why.most_common())
    return f"{catalogue.todo} to do ({causes})"


def dry_lines(catalogue):
    """Yield the lines that a dry run prints after its first.

    Parameters
    ----------
    catalogue : Catalogue
        What was found.

    Yields
    ------
    line : str
        Cause and trace, a few for each cause.
    """
    for cause, count in catalogue.why.most_common():
        traces = catalogue.examples[cause]
        yield from (f"  {cause}: {trace}" for trace in traces)
        if count > len(traces):
            yield f"  {cause}: and {count - len(traces)} more"


def plural(count, noun):
    """Return a number with its noun.

    Parameters
    ----------
    count : int
        How many.
    noun : str
        Singular.

    Returns
    -------
    text : str
        For example ``1 pulse`` or ``2 pulses``.

    Examples
    --------
    >>> plural(1, "pulse"), plural(0, "pulse")
    ('1 pulse', '0 pulses')
    """
    return f"{count} {noun}{'' if count == 1 else 's'}"


def pulse_line(row, reasons=()):
    """Return one line for one pulse.

    Parameters
    ----------
    row : mapping
        Its flat columns.
    reasons : sequence of mapping
        ``code`` and ``text`` of each reason; the texts are told of a pulse that failed.

    Returns
    -------
    line : str
        Trace, verdict, and what was found or the reasons.
    """
    parts = [f"{row['verdict']:<9} {row['trace']}"]
    if row["final_radius_um"] is not None:
        parts.append("radius " + format_quantity(
            row["final_radius_um"], row["final_radius_um_sigma"], "um"))
    if row["concentration_per_cm3"] is not None:
        parts.append("number " + format_quantity(
            row["concentration_per_cm3"], row["concentration_per_cm3_sigma"], "1/cm3"))
    elif row["upper_limit_per_cm3"] is not None:
        parts.append(f"number below {format_number(row['upper_limit_per_cm3'], '1/cm3', 2)}")
    if row["verdict"] == "failed" and reasons:
        parts.append("; ".join(reason["text"] for reason in reasons))
    elif row["reasons"]:
        parts.append(row["reasons"].replace(";", ", "))
    return "  ".join(parts)
