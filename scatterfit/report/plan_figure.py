"""The figure of a planned bench: the light it would show, and relative sigmas against settings.

Two journal columns wide; colours of Okabe and Ito (2008), markers tell the lines apart without any
colour. Hollow markers: the verdict would not be ``accepted``.
"""

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, NullFormatter, NullLocator

from scatterfit.measured_pulse.plan import by_factors
from scatterfit.report.plan import KEYS
from scatterfit.report.rounding import pretty_unit

WIDTH_INCH = 7.0
DOTS_PER_INCH = 250

_LOOKS = {
    "final_radius": ("#D55E00", "o"), "growth_rate": ("#0072B2", "s"),
    "concentration": ("#009E73", "^"), "nucleation_rate": ("#CC79A7", "D"),
}
_CHANNELS = ("#0072B2", "#009E73", "#CC79A7", "#E69F00")
_TURNS = {"maximum": "^", "minimum": "v"}
_COLUMNS, _ROW, _TOP, _LEGEND = 3, 1.75, 1.8, 0.32
_SMALL, _TEXT = 6.5, 7.5
_STYLE = {"labelsize": _SMALL, "length": 2.5, "width": 0.6, "direction": "in", "which": "both"}
_DENSE = 1500
_MOST_TICKS = 5


def save_plan_figure(path, plan, expectation):
    """Write the figure of a plan; the file's suffix chooses the format.

    Parameters
    ----------
    path : path-like
        Where to write.
    plan : mapping
        From ``report.plan.plan_to_dict``.
    expectation : Expectation
        Of the bench as it stands.
    """
    plan_figure(plan, expectation).savefig(path, dpi=DOTS_PER_INCH)


def plan_figure(plan, expectation):
    """Draw a plan.

    Parameters
    ----------
    plan : mapping
        From ``report.plan.plan_to_dict``.
    expectation : Expectation
        Of the bench as it stands.

    Returns
    -------
    figure : matplotlib.figure.Figure
        With an Agg canvas.
    """
    sweeps = plan["sweeps"] or _searched(plan)
    rows = -(-len(sweeps) // _COLUMNS)
    figure = Figure(figsize=(WIDTH_INCH, _LEGEND + _TOP + _ROW * rows), layout="constrained")
    FigureCanvasAgg(figure)
    figure.get_layout_engine().set(h_pad=0.03, w_pad=0.03)
    grid = figure.add_gridspec(rows + 1, _COLUMNS, height_ratios=[_TOP] + [_ROW] * rows)
    _draw_light(figure.add_subplot(grid[0, :]), expectation.pulse)
    limits = _span(sweeps)
    for place, sweep in enumerate(sweeps):
        axis = figure.add_subplot(grid[1 + place // _COLUMNS, place % _COLUMNS])
        _draw_sweep(axis, sweep, limits)
        if place % _COLUMNS == 0:
            axis.set_ylabel("sigma over value / %", fontsize=_TEXT)
    if sweeps:
        handles = [Line2D([], [], color=colour, marker=marker, ms=3.5, lw=1.0, label=KEYS[name][3])
                   for name, (colour, marker) in _LOOKS.items()]
        handles.append(Line2D([], [], color="black", ls=":", lw=0.8, label="noise alone"))
        handles.append(Line2D([], [], color="black", marker="o", mfc="white", ms=3.5, ls="none",
                              label="not accepted"))
        figure.legend(handles=handles, loc="outside lower center", ncols=6, fontsize=_SMALL,
                      frameon=False)
    return figure


def _searched(plan):
    """Return the best settings of a search as sweeps, one a key, so that they can be drawn."""
    best = plan["best"]
    return [{"key": key, "unit": "", "points": True, "settings": sorted(
        best["settings"], key=lambda one: one["setting"][key])} for key in best["limits"]]


def _draw_light(axis, pulse):
    """Draw the noiseless channels over their range, and the peaks and troughs that would show."""
    for place, channel in enumerate(pulse.channels):
        colour = _CHANNELS[place % len(_CHANNELS)]
        time, light = channel.time * 1e3, np.asarray(channel.signal)
        low, high = float(light.min()), float(light.max())
        scaled = (light - low) / (high - low or 1.0)
        every = max(1, time.size // _DENSE)
        axis.plot(time[::every], scaled[::every], color=colour, lw=0.9,
                  ls=("-", "--", "-.", ":")[place % 4], label=f"{channel.column}, {channel.label}")
        for turn in pulse.extrema:
            if turn.column == channel.column and turn.kind in _TURNS:
                axis.plot(turn.time * 1e3, np.interp(turn.time * 1e3, time, scaled), color=colour,
                          marker=_TURNS[turn.kind], ms=3.5, ls="none")
    axis.set_xlabel("time / ms", fontsize=_TEXT)
    axis.set_ylabel("light over its range", fontsize=_TEXT)
    axis.tick_params(**_STYLE)
    axis.margins(x=0.01)
    if pulse.channels:
        axis.legend(fontsize=_SMALL, frameon=False, loc="upper left", ncols=2)
        axis.set_ylim(-0.05, 1.3)


def _span(sweeps):
    """Return common limits of the relative sigmas [%]."""
    values = [v for sweep in sweeps for one in sweep["settings"] for name in KEYS
              for part in ("sigma", "sigma_statistical")
              for v in [_percent(one, name, part)] if np.isfinite(v) and v > 0.0]
    return (0.6 * min(values), 1.7 * max(values)) if values else (1e-2, 1e2)


def _percent(one, name, part="sigma"):
    quantity = one.get(KEYS[name][0])
    return 100.0 * quantity[part] / quantity["value"] if quantity else np.nan


def _draw_sweep(axis, sweep, limits):
    """Draw the relative sigmas against one key."""
    key = sweep["key"]
    x = np.array([one["setting"][key] for one in sweep["settings"]])
    fine = np.array([one.get("verdict") == "accepted" for one in sweep["settings"]], dtype=bool)
    line = "none" if sweep.get("points") else "-"
    for name, (colour, marker) in _LOOKS.items():
        y = np.array([_percent(one, name) for one in sweep["settings"]])
        axis.plot(x, y, color=colour, lw=1.0, ls=line, zorder=2)
        alone = [_percent(one, name, "sigma_statistical") for one in sweep["settings"]]
        if line != "none":
            axis.plot(x, alone, color=colour, lw=0.7, ls=":", zorder=1)
        for chosen, face in ((fine, colour), (~fine, "white")):
            axis.plot(x[chosen], y[chosen], color=colour, marker=marker, ms=3.2, mew=0.8, mfc=face,
                      ls="none", zorder=3)
    axis.set_yscale("log")
    axis.set_ylim(limits)
    if x.size and by_factors(float(x.min()), float(x.max())):
        axis.set_xscale("log")
        axis.xaxis.set_minor_locator(NullLocator())
    if x.size and line != "none":
        every = -(-x.size // _MOST_TICKS)
        axis.set_xticks(x[::every], [f"{value:g}" for value in x[::every]])
    axis.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.yaxis.set_minor_formatter(NullFormatter())
    axis.tick_params(**_STYLE)
    unit = f" / {pretty_unit(sweep['unit'])}" if sweep["unit"] else ""
    axis.set_xlabel(key.removeprefix("detector.") + unit, fontsize=_TEXT)
