"""What ``scatterfit calibrate`` does: traces read, the bench estimated, a chamber file written."""

import json
import re
import sys
from contextlib import contextmanager
from math import floor, log10
from pathlib import Path

from scatterfit.errors import ChamberFileError, InvalidInputError, ScatterfitError, TraceError

_MANY = 50


def calibrate_output(chamber, folder, choices, *, out, figure, as_json):
    """Return what ``scatterfit calibrate`` prints, after writing its files.

    Parameters
    ----------
    chamber, folder : Path
        Chamber file and folder of traces.
    choices : dict
        ``free``, ``hold``: key paths; ``jobs``, ``limit``: numbers or ``None``; ``recursive``,
        ``by_file_time``: bool; ``overrides``: key path to value.
    out : Path
        Chamber file to write.
    figure : Path or None
        Where to draw.
    as_json : bool
        Whether the JSON alone is wanted.

    Returns
    -------
    text : str
        Summary or JSON.

    Raises
    ------
    InvalidInputError
        If the folder holds no trace, or nothing can be learnt.
    """
    from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
    from scatterfit.files import read_chamber_mapping
    from scatterfit.measured_series.calibrate import calibrate
    from scatterfit.measured_series.choice import chosen
    from scatterfit.report.nucleation_figures import check_suffix
    from scatterfit.report.series import series_text

    if figure is not None:
        check_suffix(figure)
    _check_out(out, chamber)
    mapping = apply_overrides(read_chamber_mapping(chamber), choices["overrides"], "--set")
    bench = apparatus_from_mapping(mapping, str(chamber))
    choice = chosen(bench, choices["free"], choices["hold"])
    files = traces_of(folder, choices["recursive"], choices["limit"])
    pulses, failed = read_pulses(chamber, folder, files, choices["overrides"])
    settings = settings_of(files, choices["by_file_time"])
    with workers(choices["jobs"], len(pulses)) as settings["map"]:
        found, _ = calibrate(bench, pulses, choice, settings)
    found = _with_failed(found, failed, [name for name, _ in files])
    result = found.to_dict() | {"chamber": str(chamber), "folder": str(folder)}
    if out is not None:
        write_calibrated(out, chamber, found, (bench, pulses, choices["overrides"]))
        result["written"] = str(out)
    if figure is not None:
        from scatterfit.report.nucleation_figures import save_figure
        from scatterfit.report.series_figure import series_figure

        save_figure(figure, series_figure(result))
        print(f"wrote {figure}", file=sys.stderr)
    if as_json:
        return json.dumps(result, indent=2, allow_nan=False, ensure_ascii=False)
    return series_text(result)


def _check_out(out, chamber):
    """Refuse to write over the chamber file itself or into a folder."""
    if out is None:
        return
    if out.is_dir():
        message = f"--out {out}: is a folder; name a file"
        raise InvalidInputError(message)
    if out.exists() and Path(chamber).exists() and out.samefile(chamber):
        message = f"--out {out}: is the chamber file itself; name another, and compare the two"
        raise InvalidInputError(message)
    if not out.absolute().parent.is_dir():
        message = f"--out {out}: there is no folder {out.absolute().parent}"
        raise InvalidInputError(message)


def traces_of(folder, recursive, limit):
    """Return the traces of a folder in the order of their names, numbers as numbers.

    Parameters
    ----------
    folder : Path
        Where they are.
    recursive : bool
        Whether to look into its folders too.
    limit : int or None
        How many of them to take.

    Returns
    -------
    files : list of tuple
        Name and path of each.

    Raises
    ------
    InvalidInputError
        If there is none.
    """
    from scatterfit.overnight.catalogue import traces_in

    jobs = sorted(traces_in(folder, recursive=recursive), key=lambda job: [
        (int(part), "") if part.isdigit() else (0, part)
        for part in re.split(r"(\d+)", job.trace)])
    if not jobs:
        message = f"{folder}: no trace in it (.csv, .tsv, .txt, .h5, .nc)"
        raise InvalidInputError(message)
    return [(job.trace, job.file(folder)) for job in jobs[:limit]]


def read_pulses(chamber, folder, files, overrides):
    """Return the pulses that can be read, and why the others cannot.

    Parameters
    ----------
    chamber, folder : Path
        Chamber file and folder of traces.
    files : sequence of tuple
        Name and path of each trace.
    overrides : dict
        Key path to value, above all other sources.

    Returns
    -------
    pulses : list of SeriesPulse
        In the same order.
    failed : dict of str to str
        Name to what is wrong.

    Raises
    ------
    InvalidInputError
        If none can be read.
    """
    from scatterfit.files import load_pulse
    from scatterfit.measured_series.look import SeriesPulse

    pulses, failed = [], {}
    for name, path in files:
        try:
            bench, trace, _ = load_pulse(chamber, path, overrides, folder=folder)
        except (TraceError, ChamberFileError) as error:
            failed[name] = str(error)
            continue
        pulses.append(SeriesPulse(name, bench, trace.time, dict(trace.columns)))
    if not pulses:
        name, text = next(iter(failed.items()))
        message = f"{folder}: none of {len(failed)} traces can be read; {name}: {text}"
        raise InvalidInputError(message)
    return pulses, failed


def settings_of(files, by_file_time):
    """Return the settings of the joint estimate that come from the edge.

    Parameters
    ----------
    files : sequence of tuple
        Name and path of each trace.
    by_file_time : bool
        Whether drift is against the files' times.

    Returns
    -------
    settings : dict
        Store, progress, and the places of the pulses on the axis of the drift.
    """
    from scatterfit.files_kernel import default_store

    places = {name: float(i + 1) for i, (name, _) in enumerate(files)}
    if by_file_time:
        times = {name: path.stat().st_mtime for name, path in files}
        first = min(times.values())
        places = {name: (when - first) / 3600.0 for name, when in times.items()}

    def progress(turn, size):
        if sys.stderr.isatty():
            print(f"round {turn}: largest step {size:.2g} sigma", file=sys.stderr)

    return {"store": default_store(), "progress": progress, "places": places,
            "axis": "hours" if by_file_time else "pulse"}


@contextmanager
def workers(jobs, count):
    """Give a function like ``map``, over worker processes where there is more than one.

    Parameters
    ----------
    jobs : int or None
        Most worker processes; as many as there are processors by default.
    count : int
        Pulses.

    Yields
    ------
    map : callable
        In the order of its input.

    Raises
    ------
    ScatterfitError
        If a worker process ends.
    """
    from concurrent.futures import BrokenExecutor

    from scatterfit.overnight.pool import LocalPool, processors

    most = min(jobs or processors(), count)
    if most < 2:
        yield map
        return
    # Each pulse is fitted once and then asked again in every round.
    pool = LocalPool(most, compiled=count >= _MANY)
    try:
        yield pool.map
    except BrokenExecutor as error:
        message = "a worker process ended; is there enough memory? --jobs 1 needs the least"
        raise ScatterfitError(message) from error
    finally:
        pool.kill()


def _with_failed(found, failed, order):
    """Return the calibration with rows for traces that could not be read."""
    from dataclasses import replace

    from scatterfit.measured_series.record import Row

    rows = {row.name: row for row in found.rows}
    rows |= {name: Row(name, False, (("unusable", text),)) for name, text in failed.items()}
    return replace(found, rows=tuple(rows[name] for name in order))


def write_calibrated(out, chamber, found, known):
    """Write the chamber file with what was learnt.

    Parameters
    ----------
    out, chamber : Path
        File to write, and the one it is made from.
    found : Calibration
        What was learnt.
    known : tuple
        The bench as stated, the pulses, and overrides for all of them.
    """
    from scatterfit.apparatus.check import apparatus_from_mapping
    from scatterfit.files import read_chamber_mapping
    from scatterfit.files_chamber import revised_chamber
    from scatterfit.files_write import write_text

    bench, pulses, overrides = known
    changes, dropped = dict(overrides), set()
    if any(pulse.apparatus.carrier != bench.carrier for pulse in pulses):
        dropped.add("vapour.diffusivity_mm2_s")
    for one in found.shared:
        if one.written and one.key not in dropped:
            changes |= {one.key: _rounded(one.after, one.sigma),
                        f"{one.key}_sigma": _rounded(one.sigma, one.sigma)}
    keep = [i for i, key in enumerate(found.keys) if key not in dropped]
    rows = [[round(float(found.correlation[i, j]), 4) for j in keep] for i in keep]
    used = sum(row.used for row in found.rows)
    remarks = [f"what [correlations] names is from {used} of {len(found.rows)} pulses; before:"]
    remarks += [f"{s.key} = {_rounded(s.before, s.before_sigma)}, moved by {s.moved:+.1f} sigma"
                for s in found.shared if s.key in changes]
    text = Path(chamber).read_bytes().decode("utf-8-sig")
    text = revised_chamber(text, changes, ([found.keys[i] for i in keep], rows), remarks)
    write_text(out, text)
    apparatus_from_mapping(read_chamber_mapping(out), str(out))
    print(f"wrote {out}", file=sys.stderr)


def _rounded(value, sigma):
    """Return a number with three digits of its uncertainty."""
    return round(value, 2 - floor(log10(sigma))) if sigma > 0.0 else value
