"""Commands for many pulses: a night's batch, its ledger, tables and pages."""

import sys
from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer()

CHAMBER = Annotated[Path, typer.Argument(metavar="CHAMBER", help="Chamber file (TOML).")]
FOLDER = Annotated[Path, typer.Argument(metavar="FOLDER", help="Folder of traces.")]
RESULTS = Annotated[Path, typer.Argument(metavar="RESULTS", help="Ledger (SQLite).")]
PULSE = Annotated[str, typer.Argument(metavar="TRACE", help="Name of the pulse in the ledger, or "
                                      "its end where no other has the same.")]
OUT = Annotated[Path, typer.Option("--out", metavar="RESULTS", help="Ledger to write (SQLite).")]
RECURSIVE = Annotated[bool, typer.Option("--recursive", help="Look into folders of the folder.")]
JOBS = Annotated[int | None, typer.Option("--jobs", metavar="N", min=1, help="Worker processes; "
                                          "as many as there are processors by default.")]
LIMIT_S = Annotated[float, typer.Option("--time-limit-s", metavar="S", min=0.1,
                                        help="Longest time for one pulse [s].")]
SET = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="KEY=VALUE", help="Replace one value of the chamber file for "
                 "all pulses; repeatable, recorded in the results."),
]


@app.command()
def batch(
    chamber: CHAMBER,
    folder: FOLDER,
    out: OUT,
    recursive: RECURSIVE = False,
    jobs: JOBS = None,
    cluster: Annotated[
        str | None, typer.Option("--cluster", metavar="ADDRESS", help="Scheduler of a running "
                                 "Dask cluster, such as tcp://host:8786, in place of processes "
                                 "here.")
    ] = None,
    limit: Annotated[
        int | None, typer.Option("--limit", metavar="N", min=1, help="Fit at most N pulses now.")
    ] = None,
    retry_failed: Annotated[
        bool, typer.Option("--retry-failed", help="Fit again what failed before.")
    ] = False,
    dry_run: Annotated[
        bool, typer.Option("--dry-run", help="Only say what there is to do.")
    ] = False,
    time_limit_s: LIMIT_S = 120.0,
    settings: SET = None,
):
    """Fit every trace of a folder; given again, do what is missing or changed.

    Example: scatterfit batch bench.toml night --out night.sqlite
    """
    from scatterfit.cli_batch import batch_to_ledger
    from scatterfit.overnight.batch import Choice

    plan = _plan(chamber, folder, settings, time_limit_s)
    choice = Choice(recursive, limit, retry_failed, jobs)
    raise typer.Exit(batch_to_ledger(plan, out, choice, cluster=cluster, dry=dry_run))


@app.command()
def watch(
    chamber: CHAMBER,
    folder: FOLDER,
    out: OUT,
    page: Annotated[
        Path | None, typer.Option("--page", metavar="FILE.html", help="Page of the night to keep "
                                  "up to date; an open one shows news by itself.")
    ] = None,
    recursive: RECURSIVE = False,
    jobs: JOBS = None,
    poll: Annotated[
        bool | None, typer.Option("--poll/--no-poll", help="Look at the files again and again, in "
                                  "place of being told by the system; by default on network "
                                  "shares.")
    ] = None,
    settle_s: Annotated[
        float, typer.Option("--settle-s", metavar="S", min=0.05, help="A file that stands still "
                            "for so long is complete [s].")
    ] = 0.3,
    time_limit_s: LIMIT_S = 120.0,
    settings: SET = None,
):
    """Fit each trace of a folder as it is written, until Ctrl-C.

    Example: scatterfit watch bench.toml night --out night.sqlite --page night.html
    """
    from scatterfit.cli_watch import watch_folder
    from scatterfit.overnight.watch import Watching

    plan = _plan(chamber, folder, settings, time_limit_s)
    watch_folder(plan, out, Watching(recursive, jobs, settle_s, poll), page)


@app.command()
def show(
    results: RESULTS,
    trace: PULSE,
    out: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="Where to write the figure and the "
                                  "JSON; the figure goes to the current folder by default.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print the result as JSON.")] = False,
):
    """Show one pulse of a ledger again, with its figure.

    Example: scatterfit show night.sqlite p0042.csv
    """
    from scatterfit.cli_batch import show_pulse

    for line in show_pulse(results, trace, out, as_json=as_json):
        print(line)


@app.command()
def exclude(
    results: RESULTS,
    trace: PULSE,
    note: Annotated[str, typer.Option(metavar="TEXT", help="Why; kept in the ledger.")],
    author: Annotated[
        str | None, typer.Option(metavar="NAME", help="Who; the user's login by default.")
    ] = None,
    undo: Annotated[bool, typer.Option("--undo", help="Take the pulse back in.")] = False,
):
    """Exclude one pulse of a ledger by hand, or take it back in.

    Example: scatterfit exclude night.sqlite p0042.csv --note "window fogged"
    """
    from scatterfit.cli_batch import exclude_pulse

    print(exclude_pulse(results, trace, author, note, undo=undo), file=sys.stderr)


@app.command()
def export(
    results: RESULTS,
    file: Annotated[
        Path, typer.Argument(metavar="FILE", help="Table to write: .csv, .parquet or .nc.")
    ],
):
    """Write the pulses of a ledger as a table, one row a trace.

    Example: scatterfit export night.sqlite night.csv
    """
    from scatterfit.cli_batch import export_table

    print(export_table(results, file), file=sys.stderr)


@app.command()
def report(
    results: RESULTS,
    file: Annotated[Path, typer.Argument(metavar="FILE", help="Page to write (HTML).")],
):
    """Write one self-contained page about a night.

    Example: scatterfit report night.sqlite night.html
    """
    from scatterfit.report.page import write_page

    print(f"wrote {write_page(results, file)}", file=sys.stderr)


def _plan(chamber, folder, settings, time_limit):
    """Return how pulses are to be fitted."""
    from scatterfit.files_text import parse_assignment
    from scatterfit.overnight.jobs import Plan

    overrides = dict(parse_assignment(setting) for setting in settings or ())
    return Plan(chamber, folder, overrides, time_limit)
