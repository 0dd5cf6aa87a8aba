"""What a planned bench would resolve, as JSON, tables and plain text."""

import textwrap

from scatterfit.measured_pulse.best_settings import QUANTITIES, quantity_of
from scatterfit.measured_pulse.budget import DURATION
from scatterfit.measured_pulse.number import COUNTING, TWICE
from scatterfit.measured_pulse.plan import PULSE_KEYS
from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity, pretty_unit

SCHEMA = "scatterfit-plan-1"
WIDTH = 80
"""Columns of the text."""
KEYS = {
    "final_radius": ("final_radius_um", 1e6, "um", "final radius"),
    "growth_rate": ("growth_rate_um_per_s", 1e6, "um/s", "growth rate"),
    "concentration": ("concentration_per_cm3", 1e-6, "1/cm3", "droplets per volume"),
    "nucleation_rate": ("nucleation_rate_per_cm3_s", 1e-6, "1/(cm3 s)", "nucleation rate"),
}
"""Quantity to its key, factor from SI, unit and name."""

_RANDOM = ("noise", COUNTING)
_SHORT = {
    "noise": "noise", COUNTING: "counting", TWICE: "scattered twice", DURATION: "duration",
    "model": "model", "computed growth rate": "growth law", "shape of the growth law": "growth law",
    "creep of the gas during growth": "creep", "duration of the births": "duration",
    "computed depletion": "depletion", "vapour.mass_accommodation": "sticking",
    "clock of the births": "clock", "chamber.temperature_K": "temperature", "vapour": "vapour",
    "vapour.refractive_index": "index", "threshold of the seeds": "threshold",
}
_ENDS = {"angle_deg": "angle", "gain_V_m": "gain", "path_mm": "path"}
_CODES = {
    "ambiguous-lobe": "lobes coincide", "few-extrema": "few extrema",
    "multiple-scattering": "multiple scattering", "clipped": "clipping",
    "no-number": "no number", "no-cloud": "too faint", "largest-radius": "largest radius",
    "never-supersaturated": "no growth", "may-freeze": "may freeze",
    "number-from-depletion": "depletion alone",
}
"""Code of a reason to what limits a setting."""
_LINEAR = 0.05
"""From which sigma over value first order says little: lobes are about as far apart [-]."""
_MISSED = 0.5
_WORTH_A_LINE = 0.02
_WORTH_KEEPING = 0.01
_PLAIN_CHI2 = 9999.0


def outcome_to_dict(found):
    """Return what one setting would resolve as plain numbers.

    Parameters
    ----------
    found : Outcome
        A setting.

    Returns
    -------
    result : dict
        Ready for JSON; every quantity is ``None`` where it is not determined.
    """
    result = {"setting": dict(found.setting), "error": found.error or None}
    if found.expectation is None:
        return result
    pulse = found.expectation.pulse
    documented = pulse.to_dict()
    for name in QUANTITIES:
        result[KEYS[name][0]] = _quantity(found.expectation, name, documented["budget"])
    turns = [turn for turn in pulse.extrema if turn.kind != "shoulder"]
    rival = found.expectation.rival
    return {
        **result, "concentration_by": documented["concentration_by"],
        "nucleation": documented["nucleation"],
        "verdict": pulse.verdict, "reasons": documented["reasons"],
        "extrema": len(turns), "shoulders": len(pulse.extrema) - len(turns),
        "rival_delta_chi2": None if rival is None else float(rival),
        "optical_depth": documented["optical_depth"],
        "upper_limit_per_cm3": documented["upper_limit_per_cm3"],
        "budget": [line for line in documented["budget"] if line["share"] >= _WORTH_KEEPING],
        "limited_by": _limits(found.expectation),
    }


def _quantity(expectation, name, budget):
    """Return value and sigma with the parts that do and do not average out, or ``None``."""
    key, factor, _, _ = KEYS[name]
    quantity = quantity_of(expectation, name)
    if quantity is None:
        return None
    found = quantity.to_dict(factor)
    lines = [line for line in budget if line["quantity"] == key]
    for part, chosen in (("statistical", True), ("systematic", False)):
        found[f"sigma_{part}"] = sum(
            line["sigma"] ** 2 for line in lines if (line["input"] in _RANDOM) is chosen) ** 0.5
    return found


def _limits(expectation):
    """Return what limits a setting: the largest line of two budgets, and what else to mind."""
    pulse = expectation.pulse
    found = {"radius": None, "number": None}
    for label, name in (("radius", "final_radius"), ("number", "concentration")):
        lines = [line for line in pulse.budget if line.quantity == KEYS[name][0]]
        if lines:
            found[label] = short_input(max(lines, key=lambda line: line.share).input)
    more = [_CODES[reason.code] for reason in pulse.reasons if reason.code in _CODES]
    if expectation.coarse:
        more.append("digitizer")
    if expectation.misfit > _MISSED:
        more.append("births too coarse")
    radius = pulse.final_radius
    if radius is not None and radius.sigma > _LINEAR * radius.value:
        more.append("first order fails")
    return {**found, "also": list(dict.fromkeys(more))}


def short_input(name):
    """Return a short word for an input of a budget.

    Parameters
    ----------
    name : str
        As budgets spell it.

    Returns
    -------
    word : str
        For tables.

    Examples
    --------
    >>> short_input("detector.scatter1_V.angle_deg"), short_input("tilt:0")
    ('angle', 'drift')
    """
    if name.startswith(("tilt", "bow")):
        return "drift"
    return _SHORT.get(name) or _ENDS.get(name.rpartition(".")[2], name)


def plan_to_dict(base, sweeps, best, about):
    """Return a plan as plain numbers.

    Parameters
    ----------
    base : Outcome
        The bench as it stands.
    sweeps : dict of str to list of Outcome
        By key.
    best : list of Outcome
        Best first.
    about : dict
        ``chamber``, ``pulse``, ``wanted``, ``tried``, ``limits``.

    Returns
    -------
    plan : dict
        Ready for JSON.
    """
    information = base.expectation.information if base.expectation is not None else None
    return {
        "schema": SCHEMA, "chamber": about["chamber"], "pulse": about["pulse"],
        "base": outcome_to_dict(base),
        "information": None if information is None else {
            "parameters": list(base.expectation.names), "matrix": information.tolist(),
        },
        "sweeps": [{"key": key, "unit": unit_of(key),
                    "settings": [outcome_to_dict(one) for one in found]}
                   for key, found in sweeps.items()],
        "best": {
            "criterion": "least mean of ln(sigma/value) of what is wanted; accepted before "
                         "ambiguous before others",
            "wanted": [KEYS[name][0] for name in about["wanted"]], "tried": about["tried"],
            "limits": {key: list(ends) for key, ends in about["limits"].items()},
            "settings": [outcome_to_dict(one) for one in best],
        },
    }


def unit_of(key):
    """Return the unit of a key, as ``pretty_unit`` reads it.

    Parameters
    ----------
    key : str
        Key path.

    Returns
    -------
    unit : str
        Empty for a pure number.

    Examples
    --------
    >>> unit_of("beam.wavelength_nm"), unit_of("number"), unit_of("beam.polarization")
    ('nm', '1/cm3', 'deg')
    """
    if key in PULSE_KEYS:
        return PULSE_KEYS[key][3]
    name = key.rpartition(".")[2].removesuffix("_sigma")
    if name == "polarization":
        return "deg"
    for ending, unit in (("_per_cm3", "1/cm3"), ("_V_m", "V m"), ("_kg_m3", "kg/m3"),
                         ("_N_m", "N/m"), ("_mm2_s", "mm2/s")):
        if name.endswith(ending):
            return unit
    last = name.rpartition("_")[2]
    return last if last in {"nm", "um", "mm", "deg", "ms", "V", "K", "kPa", "mm3"} else ""


def plan_text(plan):
    """Return the plain text that a terminal shows for a plan.

    Parameters
    ----------
    plan : mapping
        From :func:`plan_to_dict`.

    Returns
    -------
    text : str
        The bench as it stands, sweeps, best settings; without a closing newline.
    """
    parts = [_head(plan), _base(plan["base"])]
    parts += [_sweep(sweep) for sweep in plan["sweeps"]]
    parts += [_best(plan), _legend()]
    return "\n\n".join(part for part in parts if part)


def _head(plan):
    pulse = plan["pulse"]
    words = [f"{format_number(pulse['number'])} droplets per cm³",
             f"{format_number(pulse['duration_ms'])} ms at {format_number(pulse['rate_khz'])} kHz",
             f"noise {format_number(100 * pulse['noise'])} % of the light"]
    return f"PLAN  {plan['chamber']}\n  assumed pulse: {', '.join(words)}"


def _base(base):
    if base["error"]:
        return f"The bench as it stands: {base['error']}"
    lines = [f"The bench as it stands: {base['verdict'].upper()}"]
    for name in QUANTITIES:
        key, _, unit, label = KEYS[name]
        lines += _row(base, key, unit, label)
    names = {"gain": "by gain", "transmission": "by transmission", "depletion": "by depletion"}
    for handle, label in names.items():
        one = base["concentration_by"][handle]
        if one is not None:
            text = format_quantity(one["value"], one["sigma"], "1/cm3")
            lines.append(f"  {'  ' + label:<22}{text}")
    rival = base["rival_delta_chi2"]
    lines.append(f"  {'peaks and troughs':<22}{base['extrema']} visible"
                 + (f", {base['shoulders']} shoulders" if base["shoulders"] else ""))
    if base["optical_depth"] is not None:
        lines.append(f"  {'optical depth':<22}{format_number(base['optical_depth'], digits=2)}"
                     " at the end")
    lines.append(f"  {'nearest other lobe':<22}" + (
        "none that comes near" if rival is None
        else f"misfit higher by chi² of {_chi2(rival)}; excluded from 13.8"))
    for reason in base["reasons"]:
        lines += textwrap.wrap(f"[{reason['code']}] {reason['text']}", WIDTH,
                               initial_indent="  ", subsequent_indent="    ")
    return "\n".join(lines)


def _row(base, key, unit, label):
    """Return the lines of one quantity: value, parts, and where its uncertainty comes from."""
    one = base[key]
    if one is None:
        return [f"  {label:<22}{NOT_DETERMINED}"]
    percent = [f"{_percent(one, part)} %" for part in ("sigma_statistical", "sigma_systematic")]
    lines = [f"  {label:<22}{format_quantity(one['value'], one['sigma'], unit)}  "
             f"(noise {percent[0]}, rest {percent[1]})"]
    shares = [f"{line['input']} {100 * line['share']:.0f} %" for line in base["budget"]
              if line["quantity"] == key and line["share"] >= _WORTH_A_LINE][:4]
    return lines + textwrap.wrap(", ".join(shares), WIDTH, initial_indent=" " * 24,
                                 subsequent_indent=" " * 24)


def _percent(quantity, part="sigma"):
    if quantity is None:
        return "-"
    return format_number(100.0 * quantity[part] / quantity["value"], digits=2)


def _sweep(sweep):
    unit = sweep["unit"]
    title = sweep["key"] + (f" [{pretty_unit(unit)}]" if unit else "")
    rows = [_TABLE_HEAD]
    for one in sweep["settings"]:
        rows.append([format_number(one["setting"][sweep["key"]]), *_cells(one)])
    return "\n".join([title, *_table(rows)])


_TABLE_HEAD = ["", "r/µm", "σr/%", "noise", "σrate/%", "σn/%", "σJ/%", "extr", "Δχ²",
               "limits radius; number"]


def _cells(one):
    """Return the cells of a setting after the first."""
    if one["error"]:
        return ["-"] * 8 + [one["error"].rpartition(": ")[2]]
    radius = one["final_radius_um"]
    return [
        "-" if radius is None else format_number(radius["value"], digits=3),
        _percent(radius), _percent(radius, "sigma_statistical"),
        *(_percent(one[KEYS[name][0]]) for name in QUANTITIES[1:]),
        str(one["extrema"]), _chi2(one["rival_delta_chi2"]), _limit_words(one["limited_by"]),
    ]


def _chi2(value):
    if value is None:
        return "-"
    return f">{_PLAIN_CHI2:.0f}" if value > _PLAIN_CHI2 else f"{value:.0f}"


def _limit_words(limits):
    first = "; ".join(limits[name] or "-" for name in ("radius", "number"))
    return " + ".join([first, *limits["also"]])


def _table(rows):
    """Return rows as lines, right-aligned but for the last column, wrapped where it is long."""
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]) - 1)]
    lines = []
    for row in rows:
        start = "  " + "  ".join(f"{cell:>{width}}" for cell, width in zip(row, widths,
                                                                         strict=False)) + "  "
        wrapped = textwrap.wrap(row[-1], max(WIDTH - len(start), 24)) or [""]
        lines.append((start + wrapped[0]).rstrip())
        lines += [" " * len(start) + more for more in wrapped[1:]]
    return lines


def _best(plan):
    best = plan["best"]
    if not best["settings"]:
        return ""
    names = {key: label for key, _, _, label in KEYS.values()}
    wanted = ", ".join(names[key] for key in best["wanted"])
    among = f"{best['tried']} settings tried"
    if best["limits"]:
        among += " within " + ", ".join(f"{key} {low:g} to {high:g}"
                                        for key, (low, high) in best["limits"].items())
    title = textwrap.wrap(f"Best settings for {wanted} ({among}); {best['criterion']}", WIDTH)
    rows = [_TABLE_HEAD]
    notes = []
    for place, one in enumerate(best["settings"], start=1):
        rows.append([f"{place}", *_cells(one)])
        text = ", ".join(f"{key} = {format_number(value)}" for key, value in
                         one["setting"].items()) or "the bench as it stands"
        notes += textwrap.wrap(f"{place}: {text}", WIDTH, initial_indent="  ",
                               subsequent_indent="     ")
    return "\n".join([*title, *_table(rows), *notes])


def _legend():
    text = (
        "Sigmas are standard uncertainties over the value, stated inputs included; -: not "
        "determined. noise: the part of σr that the noise alone makes. extr: visible peaks and "
        "troughs. Δχ²: expected rise of chi-square at the nearest other lobe (from 150 at least "
        "that much; excluded from 13.8). model: what is allowed for the kernel and the growth law; "
        "less noise does not help there."
    )
    return "\n".join(textwrap.wrap(text, WIDTH))
