"""The figure of one pulse: traces with their fit, residuals, radius against time, verdict.

Drawn at the width of one journal column. The colours are those of Okabe and Ito (2008), which
people with any of the common kinds of colour vision can tell apart, and every distinction made by
colour is made by shape or position too.
"""

import textwrap
from itertools import zip_longest

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.legend_handler import HandlerTuple
from matplotlib.lines import Line2D

from scatterfit.report.rounding import format_number, format_quantity
from scatterfit.report.summary import VERDICTS

WIDTH_INCH = 3.5
"""One journal column, 89 mm [inch]."""

DOTS_PER_INCH = 300

_BLUE, _GREEN, _PURPLE, _ORANGE = "#0072B2", "#009E73", "#CC79A7", "#E69F00"
_CHANNEL_COLOURS = (_BLUE, _GREEN, _PURPLE, _ORANGE)
_FIT, _LEFT_OUT, _RADIUS = "#000000", "#BBBBBB", "#D55E00"
_MARKERS = {"maximum": "^", "minimum": "v", "shoulder": "s"}
_VERDICT_COLOURS = {
    "accepted": _GREEN,
    "ambiguous": _ORANGE,
    "rejected": _RADIUS,
    "failed": _RADIUS,
}
_STYLE = {"labelsize": 6.5, "length": 2.5, "width": 0.6, "direction": "in"}
_HEIGHTS = {"signal": 1.15, "residual": 0.45, "radius": 1.35}
_SMALL, _TEXT = 6.5, 7.5
_LEFT_INCH, _RIGHT_INCH, _LABEL_INCH = 0.62, 0.12, 0.36
_MARGIN, _GAP, _LINE_INCH, _AXIS_INCH, _LEGEND_INCH = 0.05, 0.05, 0.145, 0.24, 0.14
_LEGEND_COLUMNS = 3
_NAME_LENGTH, _COLUMN_LENGTH, _LINE_LENGTH = 44, 20, 54


def save_pulse_figure(path, result, channels):
    """Write the figure of one pulse; the file's suffix chooses the format.

    Parameters
    ----------
    path : path-like
        Where to write, for example ``pulse.png`` or ``pulse.pdf``.
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.
    channels : sequence of records
        ``MeasuredPulse.channels``: each with ``column``, ``label``, ``time`` [s], ``signal`` and
        ``fit`` [V], ``residual`` [standard deviations of the noise] and ``used``.
    """
    pulse_figure(result, channels).savefig(path, dpi=DOTS_PER_INCH)


def pulse_figure(result, channels):
    """Draw one pulse.

    Parameters
    ----------
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.
    channels : sequence of records
        ``MeasuredPulse.channels``; without any, only the verdict is drawn.

    Returns
    -------
    figure : matplotlib.figure.Figure
        With an Agg canvas; the panels share the time axis.
    """
    panels = _panels(result, channels)
    title, colours = _title_lines(result), _colours(channels)
    handles = _legend_handles(result, channels, colours) if panels else {}
    frame = _Frame(panels, len(title), -(-len(handles) // _LEGEND_COLUMNS))
    figure = Figure(figsize=(WIDTH_INCH, frame.height))
    FigureCanvasAgg(figure)
    _title(figure, result, title)
    axes = []
    for rectangle, (kind, channel) in zip(frame.rectangles, panels, strict=True):
        axis = figure.add_axes(rectangle, sharex=axes[0] if axes else None)
        _DRAW[kind](axis, result, channel, colours)
        _dress(axis)
        axes.append(axis)
    if axes:
        _time_axis(axes, channels)
        _legend(figure, handles)
    return figure


class _Frame:
    """Where everything stands, in parts of the figure; found by sums, which costs no drawing."""

    def __init__(self, panels, title_lines, legend_rows):
        inner = [_HEIGHTS[kind] for kind, _ in panels]
        top = _MARGIN + title_lines * _LINE_INCH + _GAP
        bottom = _AXIS_INCH + legend_rows * _LEGEND_INCH + _MARGIN
        self.height = top + sum(inner) + _GAP * len(inner) + (bottom if inner else 0.0)
        width = (WIDTH_INCH - _LEFT_INCH - _RIGHT_INCH) / WIDTH_INCH
        self.rectangles, edge = [], self.height - top
        for height in inner:
            edge -= height
            self.rectangles.append((
                _LEFT_INCH / WIDTH_INCH, edge / self.height, width, height / self.height
            ))
            edge -= _GAP


def _panels(result, channels):
    """Return (kind, channel) from top to bottom."""
    panels = []
    for channel in channels:
        panels.append(("signal", channel))
        if _has_fit(channel):
            panels.append(("residual", channel))
    if channels and result["curve"] and result["curve"]["time_ms"]:
        panels.append(("radius", None))
    return panels


def _has_fit(channel):
    return channel.fit is not None and bool(np.isfinite(channel.fit).any())


def _colours(channels):
    pairs = zip_longest(channels, _CHANNEL_COLOURS[: len(channels)], fillvalue=_CHANNEL_COLOURS[-1])
    return {channel.column: colour for channel, colour in pairs}


def _draw_signal(axis, _result, channel, colours):
    time, used = 1e3 * channel.time, channel.used
    points = {"ls": "none", "marker": ".", "ms": 1.6, "mew": 0, "rasterized": True}
    axis.plot(time[~used], channel.signal[~used], color=_LEFT_OUT, **points)
    axis.plot(time[used], channel.signal[used], color=colours[channel.column], **points)
    if _has_fit(channel):
        axis.plot(time, channel.fit, color=_FIT, lw=0.7)
    axis.locator_params(axis="y", nbins=4)
    axis.set_ylabel(f"{channel.label}\n{_shortened(channel.column, _COLUMN_LENGTH)} [V]",
                    fontsize=_SMALL)


def _draw_residual(axis, _result, channel, colours):
    time, used = 1e3 * channel.time[channel.used], channel.used
    axis.axhspan(-2, 2, color="#000000", alpha=0.08, lw=0)
    axis.axhline(0, color=_FIT, lw=0.5)
    colour = colours[channel.column]
    axis.plot(time, channel.residual[used], ls="none", marker=".", ms=1.2, mew=0, color=colour,
              rasterized=True)
    reach = max(4.0, 1.1 * float(np.nanmax(np.abs(channel.residual[used]), initial=0.0)))
    axis.set_ylim(-reach, reach)
    step = max(3, round(reach / 2))
    axis.set_yticks([-step, 0, step])
    axis.set_ylabel("residual\n[noise]", fontsize=_SMALL)


def _draw_radius(axis, result, _channel, colours):
    curve = result["curve"]
    time, radius, sigma = (np.asarray(curve[key], float)
                           for key in ("time_ms", "radius_um", "sigma_um"))
    axis.fill_between(time, radius - sigma, radius + sigma, color=_RADIUS, alpha=0.3, lw=0)
    axis.plot(time, radius, color=_RADIUS, lw=1.0)
    for point in result["extrema"]:
        axis.plot(point["time_ms"], point["radius_um"], ls="none", ms=4, mew=0.7, mfc="white",
                  marker=_MARKERS[point["kind"]], mec=colours.get(point["column"], _FIT))
    axis.set_ylim(0, None)
    axis.locator_params(axis="y", nbins=4)
    axis.set_ylabel("radius\n[µm]", fontsize=_SMALL)


_DRAW = {"signal": _draw_signal, "residual": _draw_residual, "radius": _draw_radius}


def _dress(axis):
    axis.tick_params(**_STYLE, top=True, right=True, labelbottom=False)
    axis.yaxis.set_label_coords(-_LABEL_INCH / (WIDTH_INCH - _LEFT_INCH - _RIGHT_INCH), 0.5)
    for spine in axis.spines.values():
        spine.set_linewidth(0.6)


def _time_axis(axes, channels):
    first = min(float(channel.time[0]) for channel in channels)
    last = max(float(channel.time[-1]) for channel in channels)
    axes[-1].set_xlim(1e3 * first, 1e3 * last)
    axes[-1].tick_params(labelbottom=True)
    axes[-1].set_xlabel("time [ms]", fontsize=_TEXT, labelpad=1.5)


def _title(figure, result, lines):
    """Write trace, verdict and what was found above the panels."""
    top = 1 - _MARGIN / figure.get_figheight()
    figure.suptitle("\n".join(lines), x=0.06, y=top, ha="left", va="top", fontsize=_TEXT,
                    linespacing=1.3)
    square = figure.text(0.02, top, "■", va="top", fontsize=_TEXT)
    square.set_color(_VERDICT_COLOURS[result["verdict"]])


def _title_lines(result):
    lines = [line for part in _headline(result) for line in textwrap.wrap(part, _LINE_LENGTH)]
    return [f"{result['verdict']}: {_shortened(result['trace'])}", *lines]


def _shortened(name, length=_NAME_LENGTH):
    """Return a name cut at the front where it is too long for its place."""
    return name if len(name) <= length else f"…{name[1 - length:]}"


def _headline(result):
    radius, number = result["final_radius_um"], result["concentration_per_cm3"]
    codes = ", ".join(reason["code"] for reason in result["reasons"])
    if radius is None:
        limit = result["upper_limit_per_cm3"]
        lines = [f"reasons: {codes}" if codes else VERDICTS[result["verdict"]]]
        if limit is not None:
            lines.append(f"number < {format_number(limit, '1/cm3', 2)} (95 percent)")
        return lines
    end = format_number(result["final_ms"], "ms")
    lines = [f"radius {format_quantity(radius['value'], radius['sigma'], 'um')} at {end}"]
    number = number or {"value": None, "sigma": None}
    lines.append(f"number {format_quantity(number['value'], number['sigma'], '1/cm3')}")
    return lines + ([f"reasons: {codes}"] if codes else [])


def _legend_handles(result, channels, colours):
    """Return what the legend names."""
    dot = {"ls": "none", "marker": "."}
    handles = {"measured": tuple(Line2D([], [], color=c, **dot) for c in colours.values())}
    if not all(channel.used.all() for channel in channels):
        handles["not fitted"] = Line2D([], [], color=_LEFT_OUT, **dot)
    if any(_has_fit(channel) for channel in channels):
        handles["fit"] = Line2D([], [], color=_FIT, lw=0.8)
    if result["curve"] and result["curve"]["time_ms"]:
        handles["radius, band ±1 σ"] = Line2D([], [], color=_RADIUS, lw=1)
    kinds = {point["kind"] for point in result["extrema"]}
    for kind in (kind for kind in _MARKERS if kind in kinds):
        marker = {"marker": _MARKERS[kind], "ls": "none", "mfc": "white", "mec": _FIT, "ms": 4}
        handles[kind] = Line2D([], [], **marker)
    return handles


def _legend(figure, handles):
    figure.legend(handles.values(), handles.keys(), loc="lower center",
                  bbox_to_anchor=(0.5, 0.5 * _MARGIN / figure.get_figheight()),
                  ncols=min(_LEGEND_COLUMNS, len(handles)), fontsize=_SMALL, frameon=False,
                  handler_map={tuple: HandlerTuple(ndivide=None)}, handletextpad=0.5,
                  columnspacing=1.2, borderpad=0.0, borderaxespad=0.0)
