"""Commands for the physics of many pulses: nucleation rates, activation of seeds."""

from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer()

TABLE = Annotated[
    Path, typer.Argument(metavar="TABLE", help="Ledger (SQLite), or a table of pulses (CSV, TSV).")
]
SUBSTANCE = Annotated[
    str | None, typer.Option("--substance", metavar="NAME", help="Vapour, for theory; that of the "
                             "ledger's chamber file by default, else water.")
]
JSON = Annotated[bool, typer.Option("--json", help="Print the result as JSON.")]
FIGURE = Annotated[
    Path | None, typer.Option("--figure", metavar="FILE", help="Figure to write (.png, .pdf, "
                              ".svg).")
]
BY = Annotated[
    str | None, typer.Option("--by", metavar="COLUMN", help="Divide the pulses by a column first, "
                             "such as an override's.")
]
TOLERANCE = Annotated[
    float | None, typer.Option("--tolerance-K", metavar="K", min=1e-3, help="Largest distance of a "
                               "pulse from the middle of its isotherm; found from the data by "
                               "default.")
]
COMPARE = Annotated[
    Path | None, typer.Option("--compare", metavar="TABLE", help="Another night to compare with.")
]
AMBIGUOUS = Annotated[
    bool, typer.Option("--ambiguous", help="Take ambiguous pulses too.")
]
METHODS = Annotated[
    bool, typer.Option("--methods", help="Add a paragraph for the methods section of a paper.")
]
CARRIER = Annotated[
    str | None, typer.Option("--carrier", metavar="NAME", help="Carrier gas; that of the ledger's "
                             "chamber file by default.")
]


@app.command()
def rates(
    table: TABLE,
    substance: SUBSTANCE = None,
    as_json: JSON = False,
    figure: FIGURE = None,
    by: BY = None,
    tolerance_k: TOLERANCE = None,
    to_isotherm: Annotated[
        bool, typer.Option("--to-isotherm", help="Bring every rate to its isotherm's temperature "
                           "by theory before the fit.")
    ] = False,
    at_rate: Annotated[
        list[float] | None, typer.Option("--at-rate", metavar="J", min=1e-30, max=1e60,
                                         help="Rate per cm3 and s to quote the saturation ratio "
                                         "at; repeatable, 1e7 by default.")
    ] = None,
    convention: Annotated[
        int, typer.Option("--convention", metavar="N", min=1, max=2, help="N of the nucleation "
                          "theorem, slope = n* + N: 1 or 2.")
    ] = 1,
    hold_series: Annotated[
        bool, typer.Option("--hold-series", help="Where only the duration of the hold differs, "
                           "take J from the slope of number against duration too.")
    ] = False,
    compare: COMPARE = None,
    ambiguous: AMBIGUOUS = False,
    carrier: CARRIER = None,
    pressure_kpa: Annotated[
        float | None, typer.Option("--pressure-kPa", metavar="P", min=1e-3, help="During the hold, "
                                   "for losses; the table's column by default.")
    ] = None,
    background_per_cm3: Annotated[
        float | None, typer.Option("--background-per-cm3", metavar="N", min=0, help="Larger "
                                   "particles in the gas before the expansion, which take droplets "
                                   "and vapour away; with --background-diameter-nm. Those of the "
                                   "chamber file by default.")
    ] = None,
    background_diameter_nm: Annotated[
        float | None, typer.Option("--background-diameter-nm", metavar="D", min=0.5,
                                   help="Their diameter.")
    ] = None,
    quote_losses: Annotated[
        bool, typer.Option("--quote-losses", help="Say what they took, but do not put it back.")
    ] = False,
    methods: METHODS = False,
):
    """Take nucleation rates against supersaturation, isotherm by isotherm.

    Example: scatterfit rates night.sqlite --figure rates.pdf
    """
    if (background_per_cm3 is None) != (background_diameter_nm is None):
        message = "--background-per-cm3 and --background-diameter-nm belong together."
        raise typer.BadParameter(message)
    from scatterfit.cli_rates import rates_output

    choices = {"tolerance": tolerance_k, "to_isotherm": to_isotherm, "convention": convention,
               "put_back": not quote_losses,
               "rates": tuple(1e6 * rate for rate in at_rate or (1e7,))}
    around = {"pressure_kPa": pressure_kpa, "carrier": carrier,
              "background": (background_per_cm3, background_diameter_nm)}
    how = {"by": by, "ambiguous": ambiguous, "series": hold_series}
    print(rates_output(table, substance, choices, around, how, compare=compare, figure=figure,
                       as_json=as_json, methods=methods))


@app.command()
def activation(
    table: TABLE,
    substance: SUBSTANCE = None,
    as_json: JSON = False,
    figure: FIGURE = None,
    by: BY = None,
    tolerance_k: TOLERANCE = None,
    kappa: Annotated[
        float | None, typer.Option("--kappa", metavar="K", min=0, max=10, help="Hygroscopicity of "
                                   "soluble seeds to compare with.")
    ] = None,
    free_plateau: Annotated[
        bool | None, typer.Option("--free-plateau/--full-plateau", help="Let the curve level off "
                                  "elsewhere than at one, or never; where the data demand it by "
                                  "default.")
    ] = None,
    compare: COMPARE = None,
    ambiguous: AMBIGUOUS = False,
    carrier: CARRIER = None,
    methods: METHODS = False,
):
    """Take the activated fraction of seeds against supersaturation: onset and width.

    Example: scatterfit activation seeded.sqlite --figure activation.pdf
    """
    from scatterfit.cli_rates import activation_output

    choices = {"tolerance": tolerance_k, "kappa": kappa, "free_plateau": free_plateau}
    how = {"by": by, "ambiguous": ambiguous}
    print(activation_output(table, substance, choices, carrier, how, compare=compare,
                            figure=figure, as_json=as_json, methods=methods))
