"""The command for what pulses of one bench share."""

from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer()


@app.command()
def calibrate(
    chamber: Annotated[Path, typer.Argument(metavar="CHAMBER", help="Chamber file (TOML).")],
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Folder of traces.")],
    out: Annotated[
        Path | None, typer.Option("--out", metavar="FILE", help="Chamber file to write; "
                                  "CHAMBER's name with -calibrated by default, beside it.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print the result as JSON.")] = False,
    figure: Annotated[
        Path | None, typer.Option("--figure", metavar="FILE", help="Figure to write (.png, .pdf, "
                                  ".svg).")
    ] = None,
    free: Annotated[
        list[str] | None, typer.Option("--free", metavar="KEY", help="Learn this too, such as "
                                       "transmission.path_mm; repeatable. What is stated with a "
                                       "sigma is learnt by itself.")
    ] = None,
    hold: Annotated[
        list[str] | None, typer.Option("--hold", metavar="KEY", help="Take this as exact; "
                                       "repeatable.")
    ] = None,
    settings: Annotated[
        list[str] | None, typer.Option("--set", metavar="KEY=VALUE", help="Replace one value of "
                                       "the chamber file for all pulses; repeatable.")
    ] = None,
    limit: Annotated[
        int | None, typer.Option("--limit", metavar="N", min=1, help="Take the first N traces.")
    ] = None,
    recursive: Annotated[
        bool, typer.Option("--recursive", help="Look into folders of the folder.")
    ] = False,
    by_file_time: Annotated[
        bool, typer.Option("--by-file-time", help="Drift against the files' times in hours, not "
                           "against the order of their names.")
    ] = False,
    jobs: Annotated[
        int | None, typer.Option("--jobs", metavar="N", min=1, help="Worker processes; as many as "
                                 "there are processors by default.")
    ] = None,
):
    """Learn what many pulses of a bench share, and write a chamber file to use.

    Example: scatterfit calibrate bench.toml night --out calibrated.toml
    """
    from scatterfit.cli_calibrate import calibrate_output
    from scatterfit.files import parse_assignment

    choices = {
        "free": tuple(free or ()), "hold": tuple(hold or ()), "jobs": jobs, "limit": limit,
        "recursive": recursive, "by_file_time": by_file_time,
        "overrides": dict(parse_assignment(setting) for setting in settings or ()),
    }
    out = out or chamber.with_name(f"{chamber.stem}-calibrated.toml")
    print(calibrate_output(chamber, folder, choices, out=out, figure=figure, as_json=as_json))
