"""What the commands for rates and activation do: tables read, results printed and drawn."""

import json
import sys
from importlib.metadata import version

import typer

from scatterfit.errors import InvalidInputError
from scatterfit.files_table import is_ledger, read_table
from scatterfit.matter import carrier as gas_of
from scatterfit.matter import substance as substance_of
from scatterfit.units import to_si

_WATER = "water"
_MANY_VALUES = 20


def rates_output(path, substance, choices, around, how, *, compare, figure, as_json, methods):
    """Return what ``scatterfit rates`` prints, after writing its figure.

    Parameters
    ----------
    path : Path
        Ledger or table.
    substance : str or None
        Name of the vapour.
    choices : dict
        Of ``RateSettings``, in SI.
    around : dict
        ``pressure_kPa``, ``carrier`` and ``background`` (per cm3, nm) as given or ``None``.
    how : dict
        ``by``, ``ambiguous`` and ``series``.
    compare : Path or None
        Another table.
    figure : Path or None
        Where to draw.
    as_json : bool
        Whether the JSON alone is wanted.
    methods : bool
        Whether to add a paragraph on methods.

    Returns
    -------
    text : str
        Table or JSON.
    """
    from dataclasses import replace

    from scatterfit.nucleation.comparison import compare as compare_nights
    from scatterfit.nucleation.isotherm import RateSettings
    from scatterfit.nucleation.losses import Background
    from scatterfit.nucleation.rates import analyse_rates
    from scatterfit.nucleation.rates_result import rates_to_dict

    _check_figure(figure)
    table, bench = _read(path)
    _check_by(table, how["by"])
    vapour, assumed = _vapour(table, bench, substance)
    number, diameter = around["background"]
    settings = RateSettings(
        vapour, **choices, gas=_gas(bench, around["carrier"], "nitrogen"),
        pressure=_maybe(around["pressure_kPa"], "kPa"), background=None if number is None else
        Background(to_si(number, "per_cm3"), to_si(diameter, "nm")))
    found = analyse_rates(table, settings, **how)
    if found.background and bench is None and around["carrier"] is None:
        print("carrier gas not stated: nitrogen assumed for losses (--carrier NAME)",
              file=sys.stderr)
    if how["series"] and not found.series:
        print("no series of holds: no pulses of one temperature and supersaturation differ in "
              "nucleation_effective_ms", file=sys.stderr)
    if compare is not None:
        other = analyse_rates(_read(compare)[0], settings, **how)
        pairs = compare_nights(found.isotherms, other.isotherms, settings)
        found = replace(found, comparison=pairs)
    if figure is not None:
        from scatterfit.report.nucleation_figures import rates_figure

        _draw(figure, rates_figure(found))
    result = _signed(rates_to_dict(found), assumed)
    return _output(result, "rates", as_json=as_json, methods=methods)


def activation_output(path, substance, choices, carrier, how, *, compare, figure, as_json,
                      methods):
    """Return what ``scatterfit activation`` prints, after writing its figure.

    Parameters
    ----------
    path : Path
        Ledger or table.
    substance : str or None
        Name of the vapour.
    choices : dict
        Of ``ActivationSettings``, in SI.
    carrier : str or None
        Name of the carrier gas.
    how : dict
        ``by`` and ``ambiguous``.
    compare : Path or None
        Another table.
    figure : Path or None
        Where to draw.
    as_json : bool
        Whether the JSON alone is wanted.
    methods : bool
        Whether to add a paragraph on methods.

    Returns
    -------
    text : str
        Table or JSON.
    """
    from scatterfit.nucleation.activation import ActivationSettings, analyse_activation
    from scatterfit.nucleation.activation_result import activation_to_dict, with_comparison

    _check_figure(figure)
    table, bench = _read(path)
    _check_by(table, how["by"])
    vapour, assumed = _vapour(table, bench, substance)
    settings = ActivationSettings(vapour, **choices, gas=_gas(bench, carrier, None))
    found = analyse_activation(table, settings, **how)
    other = None
    if compare is not None:
        other = analyse_activation(_read(compare)[0], settings, **how)
    found = with_comparison(found, other)
    if figure is not None:
        from scatterfit.report.nucleation_figures import activation_figure

        _draw(figure, activation_figure(found))
    result = _signed(activation_to_dict(found), assumed)
    return _output(result, "activation", as_json=as_json, methods=methods)


def _read(path):
    """Return the table of a file, and the bench where it is a ledger."""
    if not is_ledger(path):
        return read_table(path), None
    from scatterfit.overnight.pulse_table import pulse_table

    return pulse_table(path)


def _check_figure(path):
    if path is None:
        return
    suffixes = (".png", ".pdf", ".svg")
    if path.suffix.lower() not in suffixes:
        message = f"--figure {path}: a figure ends in {', '.join(suffixes)}."
        raise typer.BadParameter(message)
    if not path.absolute().parent.is_dir():
        message = f"--figure {path}: there is no folder {path.parent}."
        raise typer.BadParameter(message)


def _check_by(table, column):
    if column is not None and column not in table.texts:
        from scatterfit.apparatus.values import suggestion

        message = f"--by {column}: no such column; {suggestion(column, table.texts)}"
        raise typer.BadParameter(message)
    if column is not None:
        values = len({table.texts[column][row] for row in range(len(table.names))})
        if values > max(_MANY_VALUES, len(table.names) // 2):
            message = (f"--by {column}: {values} different values in {len(table.names)} pulses; "
                       "choose a column that many pulses share")
            raise typer.BadParameter(message)


def _vapour(table, bench, name):
    """Return the vapour, and whether it was merely assumed to be water."""
    written = set(filter(None, table.texts.get("vapour.substance", ())))
    if name is None and bench is not None:
        known = substance_of(bench.vapour.substance)
        return known.with_overrides(dict(bench.vapour.overrides)), False
    if name is None and len(written) == 1:
        name = written.pop()
    return _known(substance_of, name or _WATER, "--substance"), name is None


def _gas(bench, name, default):
    if name is None and bench is not None:
        return gas_of(dict(bench.carrier))
    name = name or default
    return None if name is None else _known(gas_of, name, "--carrier")


def _known(find, name, option):
    try:
        return find(name)
    except InvalidInputError as error:
        message = f"{option} {name}: {error}"
        raise typer.BadParameter(message) from None


def _maybe(value, unit):
    return None if value is None else to_si(value, unit)


def _draw(path, figure):
    from scatterfit.report.nucleation_figures import save_figure

    save_figure(path, figure)
    print(f"wrote {path}", file=sys.stderr)


def _signed(result, assumed):
    """Return a result that says what it was made with."""
    import numpy as np

    if assumed:
        print(f"vapour not stated: {_WATER} assumed (--substance NAME)", file=sys.stderr)
    versions = {"scatterfit": version("scatterfit"), "numpy": np.__version__}
    return {**result, "substance_assumed": assumed, "provenance": {"versions": versions}}


def _output(result, kind, *, as_json, methods):
    if as_json:
        return json.dumps(result, indent=2, allow_nan=False, ensure_ascii=False)
    from scatterfit.report import nucleation_summary as summary

    text = {"rates": summary.rates_text, "activation": summary.activation_text}[kind](result)
    if methods:
        from scatterfit.report.nucleation_methods import methods_text

        text = f"{text}\n\n{methods_text(result, kind)}"
    return text
