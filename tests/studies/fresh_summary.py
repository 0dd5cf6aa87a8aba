"""What the lines of ``fresh_draws.py`` say, as Markdown tables."""

import numpy as np

RIGHT_LOBE = 0.01
FEWEST_EXTREMA = 4


def share(values):
    """Return a fraction as text."""
    values = np.asarray(values, dtype=float)
    return f"{100 * values.mean():.1f} % of {values.size}" if values.size else "none"


def spread(values, factor=1.0, digits=3):
    """Return median, 90 and 97.5 percent points of sizes as text."""
    values = factor * np.abs(np.asarray(values, dtype=float))
    if not values.size:
        return "none"
    return " / ".join(f"{v:.{digits}g}" for v in np.percentile(values, [50, 90, 97.5]))


def right(line):
    """Return whether the final radius is in the right lobe."""
    return "er" in line and abs(line["er"]) < RIGHT_LOBE


def table(rows):
    """Return rows as a Markdown table."""
    return "\n".join(["| what | result |", "|---|---|", *(f"| {a} | {b} |" for a, b in rows)])


def summarise(lines):
    """Return the tables of a study.

    Parameters
    ----------
    lines : list of dict
        Outcomes of draws.

    Returns
    -------
    text : str
        Markdown.
    """
    done = [x for x in lines if x["verdict"] != "study-error"]
    blanks = [x for x in done if x.get("blank")]
    clouds = [x for x in done if not x.get("blank")]
    clear = [x for x in clouds if x.get("ext", 0) >= FEWEST_EXTREMA]
    accepted = [x for x in clear if x["verdict"] == "accepted"]
    good = [x for x in accepted if right(x)]
    wrong = [x for x in clear if not right(x)]
    silent = [x for x in clouds if x["verdict"] == "accepted" and not right(x)]
    broken = [x for x in done if x["verdict"] in ("exception", "failed")]

    def verdicts(some):
        return ", ".join(f"{v} {sum(x['verdict'] == v for x in some)}" for v in (
            "accepted", "ambiguous", "rejected", "failed", "exception"))

    def within(some, error, sigma, count):
        return share([abs(x[error]) < count * x[sigma] for x in some if error in x])

    gain = [x for x in accepted if "g" in x["has"] and "eN" in x]
    bare = [x for x in accepted if "g" not in x["has"] and "eN" in x]
    rows = [
        ("draws; by the independent simulator; benches",
         f"{len(done)}; {sum(x.get('sim') == 'I' for x in done)}; "
         f"{len({x['seed'] // 5 for x in done})}"),
        ("exceptions or failed, warnings being errors", str(len(broken))),
        (f"clouds; with at least {FEWEST_EXTREMA} extrema", f"{len(clouds)}; {len(clear)}"),
        ("verdicts, all clouds", verdicts(clouds)),
        (f"verdicts, at least {FEWEST_EXTREMA} extrema", verdicts(clear)),
        ("right lobe (final radius within 1 %), at least 4 extrema",
         share([right(x) for x in clear])),
        ("wrong there: seeds and verdicts",
         ", ".join(f"{x['seed']} {x['verdict']}" for x in wrong) or "none"),
        ("accepted and wrong, at least 4 extrema",
         str(sum(x["verdict"] == "accepted" for x in wrong))),
        ("accepted and off by 1 % or more, any number of extrema", ", ".join(
            f"{x['seed']} ({100 * x.get('er', 9):.1f} %, {x['ext']} extrema, sigma "
            f"{100 * x.get('sr', 9):.1f} %)" for x in silent) or "none"),
        ("final radius, accepted, >= 4 extrema: error in size, %, median / 90 / 97.5 percent point",
         spread([x["er"] for x in good], 100)),
        ("the same: within 0.1 %", share([abs(x["er"]) < 1e-3 for x in good])),
        ("the same by scatterfit's own simulation; by the independent one",
         "; ".join(share([abs(x["er"]) < 1e-3 for x in good if x["sim"] == s]) for s in "SI")),
        ("five times along the curve: largest error, %", spread([x["ec"] for x in good], 100)),
        ("the same: within 0.3 %", share([x["ec"] < 3e-3 for x in good])),
        ("radius within 1 sigma; 2 sigma; 3 sigma",
         "; ".join(within(good, "er", "sr", n) for n in (1, 2, 3))),
        ("number, gain given: error in size, %", spread([x["eN"] for x in gain], 100)),
        ("number, gain given: within 1; 2; 3 sigma",
         "; ".join(within(gain, "eN", "sN", n) for n in (1, 2, 3))),
        ("number, no gain: error in size, %", spread([x["eN"] for x in bare], 100)),
        ("number, no gain: within 1; 2; 3 sigma",
         "; ".join(within(bare, "eN", "sN", n) for n in (1, 2, 3))),
        ("rate J: error in size, %; within 1; 2 sigma",
         spread([x["eJ"] for x in accepted if "eJ" in x], 100) + "; "
         + "; ".join(within([x for x in accepted if "eJ" in x], "eJ", "sJ", n) for n in (1, 2))),
        ("reduced chi-square in 0.9 to 1.15: all clouds; own; independent simulation",
         "; ".join(share([0.9 <= x["chi2"] <= 1.15 for x in clouds if x.get("chi2") is not None
                          and x["sim"] in s]) for s in ("SI", "S", "I"))),
        ("reduced chi-square: median / 90 / 97.5 percent point",
         spread([x["chi2"] for x in clouds if x.get("chi2") is not None])),
        ("blanks: rejected; with a limit where gain or transmission allow; limits per cm3",
         f"{share([x['verdict'] == 'rejected' for x in blanks])}; "
         f"{share(['limit' in x for x in blanks if set(x['has']) & set('gt')])}; "
         + spread([x["limit"] for x in blanks if "limit" in x])),
        ("seconds of processor time a fit, on a busy machine: median / 90 / 97.5 percent point",
         spread([x["s"] for x in done if "s" in x])),
    ]
    return table(rows)
