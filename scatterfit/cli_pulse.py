"""Reading, fitting, simulating and writing pulses for the commands."""

import json
import sys
from pathlib import Path

import scatterfit
from scatterfit.files import parse_assignment, write_json, write_trace


def fit_files(chamber, trace, settings=(), exclude=()):
    """Fit one pulse from its files.

    Parameters
    ----------
    chamber : path-like
        Chamber file.
    trace : path-like
        Trace.
    settings : sequence of str
        ``KEY=VALUE`` of values to replace.
    exclude : sequence of pairs of float
        Start and end of ranges of time to leave out [s].

    Returns
    -------
    pulse : MeasuredPulse
        The result; verdict ``failed`` where the trace could not be used.
    """
    overrides = dict(parse_assignment(setting) for setting in settings)
    return scatterfit.fit_file(chamber, trace, overrides=overrides, exclude=exclude)


def repeat_fit(chamber, trace, pulse, how):
    """Repeat an analysis with inputs drawn from their sigmas, with progress on a terminal.

    Parameters
    ----------
    chamber : path-like
        Chamber file.
    trace : path-like
        Trace.
    pulse : MeasuredPulse
        Its result.
    how : tuple
        Settings, excluded ranges [s], trials and seed.

    Returns
    -------
    pulse : MeasuredPulse
        With the spread of the repetitions.
    """
    from scatterfit.files_fit import repeated

    settings, exclude, trials, seed = how

    def progress(done):
        if sys.stderr.isatty():
            print(f"\r{done} of {trials} repetitions", end="\n" if done == trials else "",
                  file=sys.stderr, flush=True)

    return repeated(chamber, trace, pulse, {
        "overrides": dict(parse_assignment(setting) for setting in settings),
        "exclude": exclude, "trials": trials, "seed": seed, "progress": progress,
    })


def result_text(result):
    """Return a result as JSON text.

    Parameters
    ----------
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.

    Returns
    -------
    text : str
        JSON, without a closing newline.
    """
    return json.dumps(result, indent=2, allow_nan=False, ensure_ascii=False)


def write_result(folder, name, pulse):
    """Write the JSON and the figure of a pulse.

    Parameters
    ----------
    folder : path-like
        Where to write; made if it is not there.
    name : str
        Name of the files, without ending.
    pulse : MeasuredPulse
        The result.

    Returns
    -------
    paths : list of Path
        The files written.
    """
    from scatterfit.report.figures import save_pulse_figure  # loads matplotlib

    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    result = pulse.to_dict()
    paths = [folder / f"{name}.json", folder / f"{name}.png"]
    write_json(paths[0], result)
    save_pulse_figure(paths[1], result, pulse.channels)
    return paths


def simulate_to_folder(chamber, folder, settings):
    """Write synthetic pulses of a bench, their truth and a copy of the chamber file.

    Parameters
    ----------
    chamber : path-like
        Chamber file.
    folder : path-like
        Where to write; made if it is not there.
    settings : mapping
        ``count``, ``number``, ``duration``, ``rate``, ``noise`` and ``seed`` as
        ``scatterfit.simulate`` takes them.

    Yields
    ------
    path : Path
        Each file written: the chamber file, the traces, the truth.
    """
    bench = scatterfit.read_chamber(chamber)
    folder = Path(folder)
    pulses = scatterfit.simulate(bench, **settings)
    folder.mkdir(parents=True, exist_ok=True)
    copy = folder / Path(chamber).name
    if not (copy.exists() and copy.samefile(chamber)):
        copy.write_bytes(Path(chamber).read_bytes())
    yield copy
    truth = {}
    for index, pulse in enumerate(pulses, start=1):
        path = folder / f"pulse-{index:03d}.csv"
        write_trace(path, pulse.time, pulse.columns)
        truth[path.name] = dict(pulse.truth)
        yield path
    write_json(folder / "truth.json", truth)
    yield folder / "truth.json"
