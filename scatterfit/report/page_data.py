"""What the page of a night shows, gathered from its ledger."""

import json
import math
import shlex
import time
from collections import Counter
from datetime import UTC, datetime

import numpy as np

from scatterfit.overnight.columns import COLUMNS
from scatterfit.overnight.drift import drift, far_from_neighbours
from scatterfit.report.page_thumbs import thumbnail
from scatterfit.report.rounding import format_quantity
from scatterfit.report.tally import VERDICT_ORDER, plural

_SHOWN = {
    "final_radius_um": ("final radius", "µm"),
    "concentration_per_cm3": ("number", "cm⁻³"),
    "nucleation_rate_per_cm3_s": ("J", "cm⁻³ s⁻¹"),
    "nucleation_temperature_K": ("nucleation T", "K"),
    "nucleation_saturation_ratio": ("nucleation S", ""),
    "growth_saturation_ratio": ("growth S", ""),
    "growth_scale": ("growth scale", ""),
    "optical_depth": ("optical depth", ""),
    "chi2_reduced": ("reduced chi²", ""),
    "residual_lag1": ("lag-1", ""),
}
"""Columns of the page's table: name and unit as they head it."""

_PLOTTED = ("final_radius_um", "concentration_per_cm3", "nucleation_rate_per_cm3_s",
            "growth_scale", "nucleation_temperature_K", "nucleation_saturation_ratio",
            "growth_saturation_ratio", "optical_depth", "chi2_reduced")
_WATCHED = ("final_radius_um", "concentration_per_cm3", "nucleation_rate_per_cm3_s",
            "growth_scale", "nucleation_temperature_K", "nucleation_saturation_ratio",
            "chi2_reduced")
_LOGARITHMIC = ("concentration_per_cm3", "nucleation_rate_per_cm3_s", "optical_depth",
                "chi2_reduced")
_WIDE = 20.0
_UNITS = {"um": "µm", "um s-1": "µm s⁻¹", "um2 s-1": "µm² s⁻¹", "cm-3": "cm⁻³", "percent": "%",
          "cm-3 s-1": "cm⁻³ s⁻¹", "1": ""}
_WORST, _MOST_OUTLIERS = 24, 200
_POINTS, _POINTS_OF_MANY, _MANY = 256, 128, 1500
_SHORT_SPAN = 60.0


def page_data(results, live_seconds=0.0, thumbs=None):
    """Return all that the page shows.

    Parameters
    ----------
    results : Results
        The ledger.
    live_seconds : float
        How often an open page looks for news [s]; 0: never.
    thumbs : dict, optional
        Small pictures made before, by pulse and time of its fit; new ones are put into it.

    Returns
    -------
    data : dict
        Ready for JSON.
    """
    thumbs = {} if thumbs is None else thumbs
    table = _Table(results, thumbs)
    data = table.pulses()
    about, count = results.about(), len(data["trace"])
    folder = about.get("folder", "")
    place, low, high, ticks, hint = _axis(data["recorded"])
    data |= {
        "title": f"Night of {folder}" if folder else "Night",
        "summary": f"{count:,} pulse{'' if count == 1 else 's'}, fitted with scatterfit "
                   f"{about.get('version', '')}; page of {_minute(time.time())} UTC",
        "live_seconds": live_seconds,
        "verdicts": VERDICT_ORDER,
        "columns": [{"key": key, "label": label, "unit": unit}
                    for key, (label, unit) in _SHOWN.items()],
        "labels": {c.name: _SHOWN[c.name][0] if c.name in _SHOWN else c.meaning for c in COLUMNS},
        "units": {column.name: _UNITS.get(column.unit, column.unit) for column in COLUMNS},
        "place": place, "place_low": low, "place_high": high, "place_ticks": ticks,
        "axis_hint": hint,
        "show_command": f"scatterfit show {shlex.quote(results.path.name)}",
        "exclusions": [_exclusion(entry) for entry in results.exclusions()],
        "facts": _facts(results, about, table),
        "chambers": results.chambers(),
    }
    kept = np.array([item is None for item in data["excluded"]], dtype=bool)
    data["plots"] = _plots(data, kept)
    data["drift_text"] = _drift_text(data, kept)
    data["worst"] = _worst(data, kept)
    data["outliers"] = _outliers(data, kept)
    return data


class _Table:
    """The pulses as lists, one entry each, in the order in which they were recorded."""

    def __init__(self, results, thumbs):
        self.rows = [_Row(row, thumbs, points) for points in [_points(results)]
                     for row in results.sheets()]

    def pulses(self):
        codes = Counter(code for row in self.rows for code in {c for c, _ in row.said})
        examples = {code: text for row in reversed(self.rows) for code, text in row.said}
        ranked = [code for code, _ in codes.most_common()]
        index = {code: i for i, code in enumerate(ranked)}
        names = [row.trace for row in self.rows]
        return {
            "trace": names,
            "shell_names": {str(i): shlex.quote(name) for i, name in enumerate(names)
                            if shlex.quote(name) != name},
            "verdict": [VERDICT_ORDER.index(row.verdict) for row in self.rows],
            "codes": [{"code": code, "count": codes[code], "example": examples[code]}
                      for code in ranked],
            "reasons": [[[index[code], text] for code, text in row.said] for row in self.rows],
            "recorded": [row.recorded for row in self.rows],
            "excluded": [row.excluded for row in self.rows],
            "values": self._numbers(lambda column: column.name, 7, 0),
            "sigmas": self._numbers(
                lambda column: f"{column.name}_sigma" if column.has_sigma else None, 3, 1),
            "thumbs": [row.thumb for row in self.rows],
            "spans": [row.span for row in self.rows],
        }

    def _numbers(self, name_of, digits, part):
        """Return column name to its numbers, or to its sigmas, with so many digits."""
        found = {}
        for at, column in enumerate(COLUMNS):
            if name_of(column) is None:
                found[column.name] = [None] * len(self.rows)
            else:
                found[column.name] = [_short(row.numbers[at][part], digits) for row in self.rows]
        return found


class _Row:
    """What the page keeps of one pulse."""

    def __init__(self, row, thumbs, points):
        self.trace, self.verdict = row["trace"], row["verdict"]
        self.said = [(reason["code"], reason["text"]) for reason in json.loads(row["said"] or "[]")]
        self.recorded = None if row["mtime_ns"] is None else round(row["mtime_ns"] / 1e9, 3)
        self.excluded = ([row["excluded_by"], row["excluded_note"]] if row["excluded"] else None)
        self.fitted, self.seconds = row["fitted_utc"], row["fit_seconds"] or 0.0
        self.version = row["version"]
        self.overrides = json.loads(row["overrides"])
        there = set(row.keys())  # a ledger of an older version has fewer columns
        self.numbers = [tuple(row[name] if name in there else None for name in
                              (column.name, f"{column.name}_sigma")) for column in COLUMNS]
        key = row["id"], row["fitted_utc"], points
        if key not in thumbs:
            thumbs[key] = thumbnail(json.loads(row["thinned"]), points)
        self.thumb, self.span = thumbs[key]


def _points(results):
    return _POINTS if len(results) <= _MANY else _POINTS_OF_MANY


def _short(value, digits):
    return None if value is None else float(f"{value:.{digits}g}")


def _floats(values):
    return np.array(values, dtype=float)  # None becomes NaN


def _axis(recorded):
    """Return places, ends and ticks of the axis of the plots, and what it means."""
    times = _floats(recorded)
    count, known = times.size, times[np.isfinite(times)]
    apart = np.unique(np.round(known)).size
    spread = float(np.ptp(known)) if known.size else 0.0
    if known.size == count and apart > count / 2 and spread > _SHORT_SPAN:
        ticks = [[tick, _minute(tick)[11:]] for tick in np.linspace(*_ends(known), 5).tolist()]
        hint = (f"Against the time at which each trace's file was last changed, "
                f"{_minute(known.min())} to {_minute(known.max())} UTC.")
        return times.tolist(), *_ends(known), ticks, hint
    ticks = sorted({1, *np.linspace(1, max(count, 1), 5).astype(int).tolist()})
    hint = "Against the order of the files' times, as these do not tell when each was recorded."
    return list(range(1, count + 1)), 1, max(count, 2), [[t, str(t)] for t in ticks], hint


def _ends(values):
    return float(values.min()), float(values.max())


def _minute(seconds):
    return datetime.fromtimestamp(seconds, UTC).isoformat(sep=" ", timespec="minutes")[:16]


def _plots(data, kept):
    """Return the plots through the night that have anything to show."""
    plots = []
    for key in _PLOTTED:
        values = np.where(kept, _floats(data["values"][key]), np.nan)
        seen = values[np.isfinite(values)]
        if not seen.size:
            continue
        label, unit = _SHOWN[key]
        positive = bool((seen > 0).all())
        log = key in _LOGARITHMIC and positive and seen.max() > _WIDE * seen.min()
        found = drift(data["place"], np.log10(values) if log else values)
        level = [] if found is None else [
            [float(at), float(10**y if log else y)]
            for at, y in zip(found.at, found.level, strict=True)]
        plots.append({"key": key, "label": label, "unit": unit, "log": bool(log), "level": level})
    return plots


def _drift_text(data, kept):
    """Return a warning where the growth scale moves through the night."""
    found = drift(data["place"], np.where(kept, _floats(data["values"]["growth_scale"]), np.nan))
    if found is None or not found.is_certain:
        return ""
    change = format_quantity(100 * found.change, 100 * found.sigma, "percent")
    return (f"The growth scale drifts by {change} through the night, more than its scatter "
            "explains: look at humidity and temperature of the chamber.")


def _worst(data, kept):
    """Return the pulses with the largest misfit, the largest first."""
    misfit = np.where(kept, _floats(data["values"]["chi2_reduced"]), np.nan)
    ranked = np.argsort(-np.nan_to_num(misfit, nan=-1.0), kind="stable")
    return [int(i) for i in ranked[:_WORST] if math.isfinite(misfit[i])]


def _outliers(data, kept):
    """Return pulse and text for quantities far from those of the pulses around."""
    good = kept & (np.array(data["verdict"], dtype=int) < VERDICT_ORDER.index("rejected"))
    found = {}
    for key in _WATCHED:
        values = np.where(good, _floats(data["values"][key]), np.nan)
        sigmas = _floats(data["sigmas"][key])
        if key in _LOGARITHMIC:
            with np.errstate(divide="ignore", invalid="ignore"):
                values, sigmas = np.log(values), sigmas / values
        for i, distance in far_from_neighbours(values, sigmas).items():
            found.setdefault(i, []).append((abs(distance), _SHOWN[key][0], distance))
    ranked = sorted(found.items(), key=lambda item: -max(item[1])[0])
    return [[i, "; ".join(f"{label} {_times(distance)} the scatter"
                          for _, label, distance in sorted(parts, reverse=True))]
            for i, parts in ranked[:_MOST_OUTLIERS]]


def _times(distance):
    return f"{distance:+.1f} times" if abs(distance) < 100 else "far more than 100 times"


def _exclusion(entry):
    what = "excluded" if entry["excluded"] else "taken back in"
    return f"{entry['trace']}: {what} by {entry['author']}, {entry['at_utc']}: {entry['note']}"


def _facts(results, about, table):
    """Return name and text of where the numbers come from."""
    rows, found = table.rows, results.provenance()
    facts = [("Ledger", str(results.path)), ("Folder", about.get("folder", "")),
             ("Chamber file", about.get("chamber", ""))]
    if rows:
        times = sorted(row.fitted for row in rows)
        facts.append(("Fitted", f"{times[0]} to {times[-1]}, {sum(row.seconds for row in rows):.0f}"
                                f" s in all, {np.median([row.seconds for row in rows]):.3f} s "
                                "a pulse (median)"))
        used = Counter(path for row in rows for path in row.overrides)
        facts.append(("Set for single pulses", ", ".join(
            f"{path} ({plural(count, 'pulse')})" for path, count in sorted(used.items()))
            or "nothing"))
        versions = {row.version for row in rows}
        facts.append(("Versions of scatterfit", ", ".join(sorted(versions))))
    libraries = found.get("versions") or {}
    facts.append(("Libraries", ", ".join(f"{name} {number}" for name, number in libraries.items()
                                         if name != "scatterfit")))
    for name, source in (found.get("properties") or {}).items():
        facts.append((f"Property: {name.replace('_', ' ')}", str(source)))
    return [[name, text] for name, text in facts if text]
