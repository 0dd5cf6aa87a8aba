"""What the commands for many pulses do: a ledger filled, shown, exported."""

import getpass
import sys
from contextlib import closing
from functools import partial
from pathlib import Path

from scatterfit.cli_progress import Screen
from scatterfit.overnight.batch import look_at_folder, run_batch
from scatterfit.overnight.columns import KEPT_BY_HAND, NUMBERS, RECORD, TEXTS
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.results import open_results
from scatterfit.report.tally import dry_lines, plan_line, plural, tally_line


def batch_to_ledger(plan, out, choice, *, cluster=None, dry=False):
    """Fit the traces of a folder into a ledger and print the tally.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted.
    out : Path
        The ledger.
    choice : Choice
        Which traces.
    cluster : str, optional
        Address of a Dask scheduler.
    dry : bool
        Whether only to say what there is to do.

    Returns
    -------
    code : int
        Exit code: 1 where a user ended it early.
    """
    if dry:
        catalogue = look_at_folder(plan, out, choice)
        print(plan_line(plan.folder, catalogue))
        for line in dry_lines(catalogue):
            print(line)
        return 0
    crew = None
    if cluster is not None:
        from scatterfit.overnight.cluster import cluster_crew

        crew = partial(cluster_crew, address=cluster)
    with Screen(plan.folder) as screen:
        report = run_batch(plan, out, choice, crew=crew, listener=screen)
    if report.fitted:
        rate = report.fitted / max(report.seconds, 1e-9)
        done = f"fitted {plural(report.fitted, 'pulse')} in {report.seconds:.1f} s"
        print(f"{done}, {rate:.1f} a second", file=sys.stderr)
    left = report.catalogue.todo - report.fitted
    if report.stopped or left > 0:
        print(f"{plural(max(left, 0), 'pulse')} still to do: the same command goes on",
              file=sys.stderr)
    with closing(Ledger(out)) as ledger:
        print(tally_line(*ledger.tally()))
    return int(report.stopped)


def show_pulse(results, trace, out=None, *, as_json=False):
    """Yield the lines that show one pulse of a ledger, and write its figure.

    Parameters
    ----------
    results : Path
        The ledger.
    trace : str
        Name of the pulse.
    out : Path, optional
        Folder for figure and JSON.
    as_json : bool
        Whether to give the JSON in place of the summary.

    Yields
    ------
    line : str
        For standard output.
    """
    from scatterfit.cli_pulse import result_text, write_result
    from scatterfit.report.figures import save_pulse_figure
    from scatterfit.report.summary import summary_text

    opened = open_results(results)
    pulse = opened.pulse(trace)
    result = pulse.to_dict()
    name = Path(pulse.trace).stem
    if as_json:
        yield result_text(result)
    else:
        yield summary_text(result)
        yield from _exclusion_lines(opened, pulse.trace)
    if out is not None:
        paths = write_result(out, name, pulse)
    elif as_json:
        return
    else:
        paths = [Path(f"{name}.png")]
        save_pulse_figure(paths[0], result, pulse.channels)
    for path in paths:
        print(f"wrote {path}", file=sys.stderr)


def _exclusion_lines(results, trace):
    """Yield what was said by hand about a pulse."""
    for entry in results.exclusions():
        if entry["trace"] == trace:
            what = "excluded" if entry["excluded"] else "taken back in"
            yield f"\n{what} by {entry['author']}, {entry['at_utc']}: {entry['note']}"


def exclude_pulse(results, trace, author, note, *, undo=False):
    """Exclude a pulse by hand, or take it back in.

    Parameters
    ----------
    results : Path
        The ledger.
    trace : str
        Name of the pulse.
    author : str or None
        Who; the user's login where ``None``.
    note : str
        Why.
    undo : bool
        Whether to take it back in.

    Returns
    -------
    line : str
        What was done.
    """
    name = open_results(results).name_of(trace)
    author = author or getpass.getuser()
    with closing(Ledger(results)) as ledger:
        ledger.exclude(name, author, note, excluded=not undo)
    return f"{name}: {'taken back in' if undo else 'excluded'} by {author}"


def export_table(results, file):
    """Write the pulses of a ledger as a table.

    Parameters
    ----------
    results : Path
        The ledger.
    file : Path
        The table; its ending chooses the format.

    Returns
    -------
    line : str
        What was done.
    """
    from scatterfit.files_export import write_table

    opened = open_results(results, excluded=True)
    columns = {name: [] for name in opened.columns()}
    for row in opened.rows():
        for name, cells in columns.items():
            cells.append(row.get(name))
    meanings = dict(NUMBERS) | {name: ("", text) for name, text
                                in (TEXTS | KEPT_BY_HAND | RECORD).items()}
    write_table(file, columns, meanings, opened.about())
    return f"wrote {file}: {plural(len(columns['trace']), 'row')}"
