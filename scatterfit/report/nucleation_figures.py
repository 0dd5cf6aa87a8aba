"""Figures of rates against supersaturation and of activation, one journal column wide.

Few isotherms have the colours of Okabe and Ito (2008), many a scale from dark blue to yellow that
all kinds of colour vision see in the same order; markers tell them apart without any colour.
"""

import numpy as np
from matplotlib import colormaps
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, MaxNLocator, NullFormatter

from scatterfit.errors import InvalidInputError
from scatterfit.nucleation.theory import reference_theory, theories

WIDTH_INCH = 3.5
"""One journal column, 89 mm [inch]."""
DOTS_PER_INCH = 300
SUFFIXES = (".png", ".pdf", ".svg")
"""Formats a figure can be written in."""

_OKABE_ITO = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
_MARKERS = "os^Dv<>phX"
_GREY, _BLACK = "#777777", "#000000"
_SMALL, _TEXT = 6.5, 7.5
_STYLE = {"labelsize": _SMALL, "length": 2.5, "width": 0.6, "direction": "in", "which": "both"}
_FINE = 200
_MOST_BARS = 400
_MOST_LABELS = 16
_LONGEST = 14


def check_suffix(path):
    """Refuse a figure file whose format is not known.

    Parameters
    ----------
    path : Path
        Where a figure should go.

    Raises
    ------
    InvalidInputError
        If its suffix is not one of ``SUFFIXES``.
    """
    if path.suffix.lower() not in SUFFIXES:
        message = f"{path}: a figure ends in {', '.join(SUFFIXES)}"
        raise InvalidInputError(message)


def save_figure(path, figure):
    """Write a figure; the suffix chooses the format.

    Parameters
    ----------
    path : Path
        Where.
    figure : matplotlib.figure.Figure
        What.
    """
    figure.savefig(path, dpi=DOTS_PER_INCH)


def rates_figure(rates):
    """Draw J against S by isotherm, and how it compares with theory against temperature.

    Parameters
    ----------
    rates : Rates
        The result.

    Returns
    -------
    figure : matplotlib.figure.Figure
        With an Agg canvas.
    """
    figure = _blank(5.4)
    above, below = figure.subplots(2, 1, height_ratios=[1.75, 1.0])
    drawn = [isotherm for isotherm in rates.isotherms if isotherm.pulses.names]
    looks = _looks(len(drawn))
    reference = reference_theory(rates.settings.substance)
    for isotherm, (colour, marker) in zip(drawn, looks, strict=True):
        _draw_isotherm(above, isotherm, colour, marker)
        _draw_theory(above, isotherm, reference, colour)
    _finish_rates(above, drawn, looks, reference)
    _draw_ratios(below, rates)
    _letter(above, "a")
    _letter(below, "b")
    return figure


def _blank(height):
    figure = Figure(figsize=(WIDTH_INCH, height), layout="constrained")
    FigureCanvasAgg(figure)
    figure.get_layout_engine().set(h_pad=0.03, w_pad=0.03)
    return figure


def _looks(count):
    """Return colour and marker of each of a number of series."""
    if count <= len(_OKABE_ITO):
        colours = _OKABE_ITO[:count]
    else:
        colours = [colormaps["cividis"](place) for place in np.linspace(0.0, 0.88, count)]
    return [(colour, _MARKERS[place % len(_MARKERS)]) for place, colour in enumerate(colours)]


def _draw_isotherm(axis, isotherm, colour, marker):
    seen, hidden = isotherm.measured, isotherm.censored
    rate = seen.rate * 1e-6
    style = {"ls": "none", "marker": marker, "ms": 3.0, "mew": 0.5, "color": colour,
             "mec": colour, "mfc": "white", "zorder": 3}
    if seen.errors and len(seen.names) <= _MOST_BARS:
        sigma = np.hypot(seen.errors["rate"].random, seen.errors["rate"].shared) * 1e-6
        wide = np.hypot(seen.errors["ratio"].random, seen.errors["ratio"].shared)
        low = np.minimum(sigma, 0.9 * rate)  # a bar to zero has no end on a logarithmic axis
        axis.errorbar(seen.ratio, rate, xerr=wide, yerr=[low, sigma], elinewidth=0.5, **style)
    else:
        axis.plot(seen.ratio, rate, rasterized=len(seen.names) > _MOST_BARS, **style)
    far = np.isin(seen.names, isotherm.outliers)
    if far.any():
        axis.plot(seen.ratio[far], rate[far], ls="none", marker="o", ms=7, mfc="none", mew=0.8,
                  mec=_BLACK, zorder=4)
    if hidden.names:
        axis.plot(hidden.ratio, hidden.limit * 1e-6, **{**style, "marker": "$\\downarrow$",
                                                        "ms": 5, "mfc": colour})
    if isotherm.line is not None:
        x = np.linspace(*np.log([isotherm.pulses.ratio.min(), isotherm.pulses.ratio.max()]), 2)
        axis.plot(np.exp(x), np.exp(isotherm.line.at(x)) * 1e-6, color=colour, lw=1.0, zorder=2)


def _draw_theory(axis, isotherm, theory, colour):
    ratio = isotherm.pulses.ratio
    x = np.geomspace(ratio.min() / 1.02, ratio.max() * 1.02, _FINE)
    rate = np.exp(theory.log_rate(isotherm.temperature, x)) * 1e-6
    shown = rate > 0
    axis.plot(x[shown], rate[shown], color=colour, lw=0.8, ls=(0, (4, 2)), zorder=1)


def _finish_rates(axis, drawn, looks, reference):
    axis.set_xscale("log")
    axis.set_yscale("log")
    axis.set_xlabel("saturation ratio S", fontsize=_TEXT)
    axis.set_ylabel(r"nucleation rate J [cm$^{-3}$ s$^{-1}$]", fontsize=_TEXT)
    axis.xaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 5, 10]))
    axis.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.xaxis.set_minor_formatter(NullFormatter())
    _dress(axis)
    rates = np.concatenate([np.r_[one.measured.rate, one.censored.limit] for one in drawn] or [[1]])
    axis.set_ylim(rates.min() * 1e-6 / 3, rates.max() * 1e-6 * 3)
    handles = [Line2D([], [], color=colour, marker=marker, ms=3, mew=0.5, mfc="white", lw=1,
                      label=_label(isotherm))
               for isotherm, (colour, marker) in zip(drawn, looks, strict=True)]
    handles = handles[:: -(-len(handles) // _MOST_LABELS)] if handles else []
    columns = 4 if max((len(handle.get_label()) for handle in handles), default=0) < 9 else 3
    handles.append(Line2D([], [], color=_GREY, lw=0.8, ls=(0, (4, 2)), label=reference.label))
    if any(isotherm.censored.names for isotherm in drawn):
        handles.append(Line2D([], [], ls="none", marker="$\\downarrow$", ms=5, color=_GREY,
                              label="no cloud: limit"))
    if any(isotherm.outliers for isotherm in drawn):
        handles.append(Line2D([], [], ls="none", marker="o", ms=7, mfc="none", mec=_BLACK, mew=0.8,
                              label="outlier"))
    axis.legend(handles=handles, fontsize=5.5, frameon=False, loc="lower center", ncols=columns,
                bbox_to_anchor=(0.45, 1.0), handlelength=1.8, columnspacing=1.0, borderpad=0.2,
                labelspacing=0.3)


def _label(isotherm):
    text = f"{isotherm.temperature:.1f} K"
    return text if isotherm.by is None else f"{text}, {_short(isotherm.by)}"


def _short(text):
    """Return the end of a long text, where names differ."""
    return text if len(text) <= _LONGEST else f"…{text[-_LONGEST:]}"


def _draw_ratios(axis, rates):
    known = theories(rates.settings.substance)
    axis.axhline(1.0, color=_GREY, lw=0.6, zorder=0)
    for theory, colour, marker in zip(known, _OKABE_ITO, _MARKERS, strict=False):
        ratios = [(isotherm.temperature, isotherm.theory[theory.name])
                  for isotherm in rates.isotherms if theory.name in isotherm.theory]
        for kelvin, ratio in ratios:
            spread = ratio.scatter if np.isfinite(ratio.scatter) else 0.0
            value = ratio.estimate.value
            bar = np.array([[1 - 10.0**-spread], [10.0**spread - 1]]) * 10.0**value
            axis.errorbar([kelvin], [10.0**value], yerr=bar, color=colour, marker=marker, ms=3,
                          mew=0.6, elinewidth=0.5, mfc=colour if ratio.in_range else "white")
        axis.plot([], [], color=colour, marker=marker, ms=3, ls="none", label=theory.label)
    axis.set_yscale("log")
    axis.set_xlabel("temperature T [K]", fontsize=_TEXT)
    axis.set_ylabel("J measured / J computed", fontsize=_TEXT)
    _dress(axis)
    axis.margins(x=0.04, y=0.12)
    axis.xaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5, 10]))
    axis.legend(fontsize=5.5, frameon=False, loc="lower center", bbox_to_anchor=(0.45, 1.0),
                ncols=3, handletextpad=0.3, columnspacing=0.8, borderpad=0.2,
                title="open: outside the theory's range", title_fontsize=5.5)


def _dress(axis):
    axis.tick_params(**_STYLE, top=True, right=True)
    for spine in axis.spines.values():
        spine.set_linewidth(0.6)


def _letter(axis, letter):
    axis.text(0.02, 0.97, letter, transform=axis.transAxes, va="top", weight="bold",
              fontsize=_TEXT + 1)


def activation_figure(activation):
    """Draw the activated fraction against supersaturation, with the fitted curves.

    Parameters
    ----------
    activation : Activation
        The result.

    Returns
    -------
    figure : matplotlib.figure.Figure
        With an Agg canvas.
    """
    figure = _blank(2.9)
    axis = figure.subplots()
    looks = _looks(len(activation.runs))
    for run, (colour, marker) in zip(activation.runs, looks, strict=True):
        _draw_run(axis, run, colour, marker)
    for level in (0.0, 1.0):
        axis.axhline(level, color=_GREY, lw=0.5, zorder=0)
    axis.set_xlabel("saturation ratio S", fontsize=_TEXT)
    axis.set_ylabel("activated fraction of the seeds", fontsize=_TEXT)
    _dress(axis)
    handles = [Line2D([], [], color=colour, marker=marker, ms=3, mew=0.5, mfc="white", lw=1,
                      label=_run_label(run))
               for run, (colour, marker) in zip(activation.runs, looks, strict=True)]
    if any(run.kelvin for run in activation.runs):
        handles.append(Line2D([], [], color=_GREY, lw=0.8, ls=(0, (4, 2)), label="Kelvin limit"))
    if any(run.koehler for run in activation.runs):
        handles.append(Line2D([], [], color=_GREY, lw=0.8, ls=":", label="Koehler"))
    axis.legend(handles=handles, fontsize=5.5, frameon=False, loc="lower center", ncols=3,
                bbox_to_anchor=(0.45, 1.0), handlelength=1.8, columnspacing=1.0, borderpad=0.2)
    return figure


def _run_label(run):
    parts = [f"{run.temperature:.1f} K"]
    if run.diameter is not None:
        parts.append(f"{run.diameter * 1e9:.3g} nm")
    if run.by is not None:
        parts.append(_short(run.by))
    return ", ".join(parts)


def _draw_run(axis, run, colour, marker):
    data = run.pulses.data
    ratio = np.exp(data.x)
    low, high = run.intervals()
    style = {"ls": "none", "marker": marker, "ms": 3.0, "mew": 0.5, "color": colour,
             "mec": colour, "mfc": "white", "zorder": 3}
    if ratio.size <= _MOST_BARS:
        bars = [np.maximum(data.fraction - low, 0), np.maximum(high - data.fraction, 0)]
        axis.errorbar(ratio, data.fraction, yerr=bars, elinewidth=0.5, **style)
    else:
        axis.plot(ratio, data.fraction, rasterized=True, **style)
    if run.curve is not None:
        x = np.linspace(data.x.min(), data.x.max(), _FINE)
        middle = run.curve.at(x)
        if run.curve.resolved:
            sigma = run.curve.sigma_at(x)
            axis.fill_between(np.exp(x), middle - sigma, middle + sigma, color=colour, alpha=0.25,
                              lw=0, zorder=1)
        axis.plot(np.exp(x), middle, color=colour, lw=1.0, zorder=2)
    for threshold, line in ((run.kelvin, (0, (4, 2))), (run.koehler, ":")):
        if threshold is not None:
            axis.axvline(threshold, color=colour, lw=0.8, ls=line, zorder=1)
