"""The command line: parses, calls once, prints.

Results go to standard output, everything else to standard error. Exit 0: the work was done,
whatever the verdicts; 1: it could not be; 2: the command or the chamber file is wrong.
"""

import os
import sys
import traceback
import warnings
from pathlib import Path
from typing import Annotated

import typer

from scatterfit import cli_night, cli_nucleation, cli_plan, cli_series
from scatterfit.errors import ChamberFileError, ScatterfitError

app = typer.Typer(
    name="scatterfit",
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

CHAMBER = Annotated[Path, typer.Argument(metavar="CHAMBER", help="Chamber file (TOML).")]
TRACE = Annotated[Path, typer.Argument(metavar="TRACE", help="Trace (CSV, TSV, HDF5, netCDF).")]
SET = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="KEY=VALUE", help="Replace one value of the chamber file, for "
                 "example chamber.temperature_K=297.15; repeatable, recorded in the result."),
]
_FEWEST_SAMPLES, _MOST_SAMPLES = 20, 10_000_000
_PAIR_OPTION = "--exclude-ms"
EXCLUDE = Annotated[
    list[str] | None,
    typer.Option(_PAIR_OPTION, metavar="A B", help="Leave out the samples between two times [ms]; "
                 "repeatable, recorded in the result."),
]


def main(arguments=None):
    """Run the command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str, optional
        Words after the command's name; those of the process when absent.

    Returns
    -------
    code : int
        0, 1 or 2 as described at the top of this module.
    """
    words = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in words
    if arguments is None and not debug:  # a verdict says what a warning of a library would not
        warnings.simplefilter("ignore")
    _replace_unprintable()
    try:
        code = app(_paired(words), prog_name="scatterfit", standalone_mode=False) or 0
        sys.stdout.flush()
    except BrokenPipeError:
        code = _close_output()
    except SystemExit as leaving:  # how a broken pipe leaves the command parser
        code = _close_output() if leaving.code == 1 else leaving.code
    except Exception as error:  # noqa: BLE001 - whatever it is, a user gets one line
        if debug:
            traceback.print_exc()
        code = _explain(error)
    return code


def _explain(error):
    """Print an error as one line and return the exit code that belongs to it."""
    usage = getattr(error, "format_message", None)
    if usage is not None:
        text, code = f"{usage()} See scatterfit --help.", error.exit_code
    elif isinstance(error, ScatterfitError):
        text, code = str(error), 2 if isinstance(error, ChamberFileError) else 1
    elif isinstance(error, OSError) and error.filename is not None:
        text, code = f"{error.filename}: {error.strerror}", 1
    elif isinstance(error, typer.Abort):
        text, code = "stopped", 1
    else:
        text = f"internal error, {type(error).__name__}: {error} (scatterfit --debug shows where)"
        code = 1
    print("scatterfit:", " ".join(text.split()), file=sys.stderr)
    return code


def _replace_unprintable():
    """Let a terminal that lacks a character show a question mark instead of failing."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")


def _close_output():
    """Stop writing to a pipe that nobody reads any more."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return 0


def _paired(words):
    """Return the words with the two values of each ``--exclude-ms`` joined into one."""
    joined, rest = [], list(words)
    while rest:
        word = rest.pop(0)
        if word == "--debug":
            continue
        joined.append(word)
        if word == _PAIR_OPTION and rest:
            joined.append(" ".join(rest[:2]))
            rest = rest[2:]
    return joined


def _exclusions(pairs):
    """Return (start, end) in seconds for each ``--exclude-ms``."""
    ranges = []
    for pair in pairs or ():
        try:
            start, end = (float(word) for word in pair.split())
        except ValueError:
            message = f"{_PAIR_OPTION} {pair}: two times in ms are needed, such as 10 12.5."
            raise typer.BadParameter(message) from None
        if not start < end:
            message = f"{_PAIR_OPTION} {pair}: the second time must be later than the first."
            raise typer.BadParameter(message)
        ranges.append((start / 1e3, end / 1e3))
    return tuple(ranges)


def _show_version(wanted):
    if wanted:
        from importlib.metadata import version

        print(f"scatterfit {version('scatterfit')}")
        raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True,
                           help="Print the version and stop.")
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show where an error arose.")] = False,
):
    """Droplet radius, growth rate and number from light scattered in an expansion chamber.

    Start with: scatterfit demo
    """


@app.command()
def demo(
    out: Annotated[Path, typer.Option(metavar="FOLDER", help="Where to write.")] = Path("demo"),
):
    """Simulate a few pulses, fit them, show the results.

    Example: scatterfit demo --out demo
    """
    from scatterfit.cli_demo import run_demo

    for line in run_demo(out):
        print(line, flush=True)


@app.command()
def new(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="File to write.")],
    force: Annotated[bool, typer.Option("--force", help="Replace a file that exists.")] = False,
):
    """Write a commented chamber file to start from.

    Example: scatterfit new bench.toml
    """
    from scatterfit.report.template import chamber_template

    if file.is_dir() or (file.exists() and not force):
        remedy = "is a folder; name a file" if file.is_dir() else "exists; --force would replace it"
        message = f"{file} {remedy}."
        raise typer.BadParameter(message)
    file.write_text(chamber_template(), encoding="utf-8")
    print(f"wrote {file}; next: scatterfit check {file}", file=sys.stderr)


@app.command()
def check(
    chamber: CHAMBER,
    trace: Annotated[Path | None, typer.Argument(metavar="[TRACE]", help="Trace.")] = None,
    settings: SET = None,
):
    """Show what the bench implies, and how a trace is understood.

    Example: scatterfit check bench.toml pulse.csv
    """
    from scatterfit.cli_check import check_text

    print(check_text(chamber, trace, settings or ()))


@app.command()
def simulate(
    chamber: CHAMBER,
    out: Annotated[Path, typer.Option(metavar="FOLDER", help="Where to write.")],
    count: Annotated[int, typer.Option(min=1, help="How many pulses.")] = 1,
    number: Annotated[float, typer.Option(min=0, max=1e8, help="Droplets per cm3.")] = 5000.0,
    duration_ms: Annotated[float, typer.Option(min=10, max=1e5, help="Length [ms].")] = 100.0,
    rate_khz: Annotated[float, typer.Option(min=0.1, max=1e4, help="Samples per ms.")] = 50.0,
    noise: Annotated[
        float, typer.Option(min=0, max=1, help="Noise over the light at that moment.")
    ] = 0.01,
    seed: Annotated[int, typer.Option(help="Seed of the random numbers.")] = 1,
):
    """Make synthetic pulses of a bench, with their truth.

    Example: scatterfit simulate bench.toml --out synthetic --count 3
    """
    from scatterfit.cli_pulse import simulate_to_folder

    samples = duration_ms * rate_khz
    if not _FEWEST_SAMPLES <= samples <= _MOST_SAMPLES:
        message = f"{samples:.3g} samples; {_FEWEST_SAMPLES} to {_MOST_SAMPLES} can be made."
        raise typer.BadParameter(message)
    settings = {"count": count, "number": 1e6 * number, "duration": duration_ms / 1e3,
                "rate": 1e3 * rate_khz, "noise": noise, "seed": seed}
    for path in simulate_to_folder(chamber, out, settings):
        print(path)


@app.command()
def fit(
    chamber: CHAMBER,
    trace: TRACE,
    out: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="Where to write JSON and figure.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print the result as JSON.")] = False,
    settings: SET = None,
    exclude_ms: EXCLUDE = None,
    monte_carlo: Annotated[
        int, typer.Option(min=0, max=100_000, metavar="N", help="Repeat the analysis N times with "
                          "inputs drawn from their sigmas.")
    ] = 0,
    seed: Annotated[int, typer.Option(help="Seed of --monte-carlo.")] = 1,
):
    """Fit one pulse: radius, growth, number, nucleation.

    Example: scatterfit fit bench.toml pulse.csv --out results
    """
    exclude = _exclusions(exclude_ms)
    from scatterfit.cli_pulse import fit_files, repeat_fit, result_text, write_result

    pulse = fit_files(chamber, trace, settings or (), exclude)
    if monte_carlo:
        pulse = repeat_fit(chamber, trace, pulse, (settings or (), exclude, monte_carlo, seed))
    result = pulse.to_dict()
    # Files first: a reader of the output that goes away must not cost them.
    written = write_result(out, trace.stem, pulse) if out is not None else []
    if as_json:
        print(result_text(result))
    else:
        from scatterfit.report.summary import summary_text

        print(summary_text(result))
    for path in written:
        print(f"wrote {path}", file=sys.stderr)
    raise typer.Exit(int(result["verdict"] == "failed"))


app.registered_commands += cli_night.app.registered_commands
app.registered_commands += cli_nucleation.app.registered_commands
app.registered_commands += cli_series.app.registered_commands
app.registered_commands += cli_plan.app.registered_commands
