"""The figure of a calibration: what moved by how much, and each gain through the series."""

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

_WIDTH_INCH = 3.5
_COLOURS, _MARKERS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7"), "os^D"
_GREY = "#BBBBBB"
_SMALL, _TEXT = 6.5, 7.5
_ROW_INCH = 0.19
_FARTHEST = 6.0
_HALF, _POOR = 1.01, 4.0


def series_figure(result):
    """Draw a calibration.

    Parameters
    ----------
    result : mapping
        As ``Calibration.to_dict`` gives it.

    Returns
    -------
    figure : matplotlib.figure.Figure
        With an Agg canvas: values in sigmas beforehand; gain by pulse, or, where no gain is
        learnt, how far each pulse stands apart.
    """
    upper = 0.55 + _ROW_INCH * len(result["shared"])
    figure = Figure(figsize=(_WIDTH_INCH, upper + 2.1), layout="constrained")
    FigureCanvasAgg(figure)
    above, below = figure.subplots(2, 1, height_ratios=[upper, 2.1])
    _draw_shared(above, result["shared"])
    if result["gain_drift"]:
        _draw_gains(below, result)
    else:
        _draw_apart(below, result)
    for axis, letter in ((above, "a"), (below, "b")):
        axis.set_title(letter, loc="left", fontsize=_TEXT, fontweight="bold")
        axis.tick_params(labelsize=_SMALL, direction="in", width=0.6)
    if not (result["gain_drift"] and result["drift_axis"] == "hours"):
        below.xaxis.set_major_locator(MaxNLocator(integer=True))
    return figure


def _draw_shared(axis, shared):
    """Draw before as a band and after as a point, in sigmas beforehand."""
    places = np.arange(len(shared))[::-1]
    axis.axvspan(-1.0, 1.0, color=_GREY, alpha=0.45, lw=0)
    axis.axvline(0.0, color="#777777", lw=0.6)
    for place, one in zip(places, shared, strict=True):
        moved = float(np.clip(one["moved_sigmas"], -_FARTHEST, _FARTHEST))
        axis.errorbar(moved, place, xerr=one["sigma_ratio"], fmt="o", ms=3.0, lw=0.9,
                      color=_COLOURS[0], mfc="white" if one["sigma_ratio"] > 0.9 else _COLOURS[0])
    axis.set_yticks(places, [_short(one["label"]) for one in shared], fontsize=_SMALL)
    axis.set_ylim(-0.7, len(shared) - 0.3)
    axis.set_xlabel("moved by, in sigmas beforehand (band)", fontsize=_TEXT)


def _short(label):
    """Return a key without its table, a detector's with its column."""
    table, _, name = label.partition(".")
    return label if table in {"transmission", "chamber", "growth"} else name or label


def _draw_gains(axis, result):
    """Draw each gain by pulse, with the line through it."""
    for k, one in enumerate(result["gain_drift"]):
        colour, marker = _COLOURS[k % 4], _MARKERS[k % 4]
        place = np.array([p["place"] for p in one["pulses"]])
        value = np.array([p["relative_percent"]["value"] for p in one["pulses"]])
        sigma = np.array([p["relative_percent"]["sigma"] for p in one["pulses"]])
        poor = sigma > _POOR * np.median(sigma)
        axis.errorbar(place[poor], value[poor], yerr=sigma[poor], fmt=marker, ms=2.8, lw=0.5,
                      color=_GREY, mfc="white", zorder=1)
        axis.errorbar(place[~poor], value[~poor], yerr=sigma[~poor], fmt=marker, ms=2.8, lw=0.6,
                      color=colour, mfc="white", label=one["key"].split(".")[1])
        weight = sigma**-2.0
        centre, mean = weight @ place / weight.sum(), weight @ value / weight.sum()
        span = np.ptp(place)
        if span:
            ends = np.array([place.min(), place.max()])
            slope = one["change_percent"]["value"] / span
            axis.plot(ends, mean + slope * (ends - centre), color=colour, lw=0.9)
    axis.set_ylim(*_shown(result["gain_drift"]))
    axis.axhline(0.0, color="#777777", lw=0.6)
    axis.set_xlabel("hours" if result["drift_axis"] == "hours" else "pulse, by name",
                    fontsize=_TEXT)
    axis.set_ylabel("gain over the common one (%)", fontsize=_TEXT)
    if len(result["gain_drift"]) > 1:
        axis.legend(fontsize=_SMALL, frameon=False, loc="lower right", bbox_to_anchor=(1.0, 1.0),
                    ncols=2)


def _shown(drifts):
    """Return the limits that hold the better known half with bars, and all but the worst known."""
    ends = []
    for one in drifts:
        value = np.array([p["relative_percent"]["value"] for p in one["pulses"]])
        sigma = np.array([p["relative_percent"]["sigma"] for p in one["pulses"]])
        known = sigma <= _HALF * np.median(sigma)
        ends += [*(value - sigma)[known], *(value + sigma)[known], 0.0]
        ends += list(value[sigma <= _POOR * np.median(sigma)])
    room = 0.08 * (max(ends) - min(ends))
    return min(ends) - room, max(ends) + room


def _draw_apart(axis, result):
    """Draw by how many sigmas each pulse wants another bench."""
    rows = [(i + 1, row) for i, row in enumerate(result["traces"]) if row["used"]]
    axis.plot([i for i, _ in rows], [row["disagrees_by_sigmas"] for _, row in rows],
              _MARKERS[0], ms=3.0, color=_COLOURS[0], mfc="white")
    axis.axhline(0.0, color="#777777", lw=0.6)
    axis.axhline(4.0, color=_COLOURS[1], lw=0.8, ls="--")
    axis.set_xlabel("pulse, by name", fontsize=_TEXT)
    axis.set_ylabel("apart from the common\nbench (sigmas)", fontsize=_TEXT)
