"""The command for a bench on paper: what it could resolve before anything is built."""

import json
import sys
from pathlib import Path
from typing import Annotated

import typer

from scatterfit.errors import ChamberFileError

app = typer.Typer()

_VARY, _WITHIN = "--vary", "--within"
_WANTED = {"radius": "final_radius", "growth": "growth_rate", "number": "concentration",
           "rate": "nucleation_rate"}
_STEPS, _MOST_STEPS = 7, 50


@app.command()
def plan(
    chamber: Annotated[Path, typer.Argument(metavar="CHAMBER", help="Chamber file (TOML).")],
    number: Annotated[float, typer.Option(min=0.01, max=1e8, help="Droplets per cm3.")] = 5000.0,
    duration_ms: Annotated[float, typer.Option(min=10, max=1e5, help="Length [ms].")] = 100.0,
    rate_khz: Annotated[float, typer.Option(min=0.1, max=1e4, help="Samples per ms.")] = 50.0,
    noise: Annotated[
        float, typer.Option(min=1e-6, max=1, help="Noise over the light at that moment.")
    ] = 0.01,
    transmission_noise: Annotated[
        float, typer.Option(min=1e-6, max=1, help="Noise of the transmitted light over its start.")
    ] = 0.002,
    hold_ms: Annotated[
        float | None, typer.Option(min=0.05, max=100, help="Nucleation hold [ms], where there is "
                                   "a pressure gauge; 1 by default.")
    ] = None,
    growth_pressure_ratio: Annotated[
        float, typer.Option(min=0.3, max=0.99, help="Pressure during growth over that before the "
                            "expansion, where there is a gauge.")
    ] = 0.78,
    settings: Annotated[
        list[str] | None, typer.Option("--set", metavar="KEY=VALUE", help="Replace one value of "
                                       "the chamber file; repeatable.")
    ] = None,
    vary: Annotated[
        list[str] | None, typer.Option(_VARY, metavar="KEY=LOW:HIGH[:STEPS]", help="Vary a key of "
                                       "the chamber file, added.angle_deg (one more detector), or "
                                       "number, noise, rate_khz, duration_ms, hold_ms, "
                                       "growth_pressure_ratio, floor; repeatable, one after the "
                                       "other; the usual ones by default.")
    ] = None,
    within: Annotated[
        list[str] | None, typer.Option(_WITHIN, metavar="KEY=LOW:HIGH", help="Search the best "
                                       "settings within limits, all of them at once; repeatable.")
    ] = None,
    wanted: Annotated[
        list[str] | None, typer.Option("--for", metavar="WHAT", help="What the best settings are "
                                       "for: radius, growth, number, rate; repeatable, all by "
                                       "default.")
    ] = None,
    best: Annotated[int, typer.Option(min=1, max=50, help="How many best settings to list.")] = 5,
    tries: Annotated[
        int, typer.Option(min=4, max=2000, help="How many settings to try with --within.")
    ] = 40,
    as_json: Annotated[bool, typer.Option("--json", help="Print the plan as JSON.")] = False,
    figure: Annotated[
        Path | None, typer.Option("--figure", metavar="FILE", help="Figure to write (.png, .pdf, "
                                  ".svg).")
    ] = None,
):
    """Show what this bench could resolve before anything is built.

    Example: scatterfit plan bench.toml --within added.angle_deg=30:150 --figure plan.pdf
    """
    pulse = {"number": number, "duration_ms": duration_ms, "rate_khz": rate_khz, "noise": noise,
             "transmission_noise": transmission_noise, "hold_ms": hold_ms,
             "growth_pressure_ratio": growth_pressure_ratio}
    choices = {"vary": _ranges(_VARY, vary), "within": _ranges(_WITHIN, within),
               "wanted": _quantities(wanted), "best": best, "tries": tries}
    print(plan_output(chamber, pulse, settings or (), choices, figure=figure, as_json=as_json))


def _ranges(option, texts):
    """Return (low, high, steps) by key of each ``KEY=LOW:HIGH[:STEPS]``."""
    found = {}
    for text in texts or ():
        key, _, numbers = text.partition("=")
        key = key.strip().replace("-", "_") if "." not in key else key.strip()
        parts = numbers.split(":")
        try:
            values = [float(part) for part in parts]
        except ValueError:
            values = []
        if not key or len(values) not in {2, 3} or (option == _WITHIN and len(values) == 3):
            form = "KEY=LOW:HIGH" + ("[:STEPS]" if option == _VARY else "")
            message = f"{option} {text}: {form} is needed, such as beam.wavelength_nm=400:700."
            raise typer.BadParameter(message)
        low, high, steps = (*values, _STEPS)[:3]
        if not low < high < float("inf"):
            message = f"{option} {text}: the second value must be above the first, and finite."
            raise typer.BadParameter(message)
        if steps != int(steps) or not 2 <= steps <= _MOST_STEPS:
            message = f"{option} {text}: 2 to {_MOST_STEPS} steps can be made."
            raise typer.BadParameter(message)
        found[key] = (low, high, int(steps))
    return found


def _quantities(words):
    """Return what the best settings are for."""
    for word in words or ():
        if word not in _WANTED:
            message = f"--for {word}: known are {', '.join(_WANTED)}."
            raise typer.BadParameter(message)
    return tuple(_WANTED[word] for word in words or _WANTED)


def plan_output(path, pulse, settings, choices, *, figure=None, as_json=False):
    """Return what ``scatterfit plan`` prints, after writing its figure.

    Parameters
    ----------
    path : Path
        Chamber file.
    pulse : dict
        Assumed pulse, by key of ``PULSE_KEYS``; ``hold_ms`` may be ``None``.
    settings : sequence of str
        ``KEY=VALUE`` of values to replace.
    choices : dict
        ``vary`` and ``within`` (key to low, high, steps), ``wanted``, ``best``, ``tries``.
    figure : Path, optional
        Where to draw.
    as_json : bool
        Whether the JSON alone is wanted.

    Returns
    -------
    text : str
        Tables or JSON.

    Raises
    ------
    ChamberFileError
        If the chamber file, a key or a value is wrong.
    """
    from scatterfit.measured_pulse import plan as on_paper
    from scatterfit.report.plan import plan_text, plan_to_dict

    if figure is not None:
        from scatterfit.report.nucleation_figures import SUFFIXES

        if figure.suffix.lower() not in SUFFIXES:
            message = f"{figure}: a figure ends in {', '.join(SUFFIXES)}."
            raise typer.BadParameter(message)
    paper = _paper(path, pulse, settings)
    held = pulse["hold_ms"]
    stated = {} if held is None else {"hold_ms": (held, held, 1)}
    _check_ranges(paper, {**stated, **choices["vary"], **choices["within"]})
    tell = _Progress()
    base = on_paper.outcome(paper, {})
    if base.expectation is None:
        raise ChamberFileError(base.error)
    sweeps = _sweeps(paper, choices, tell)
    best, tried = _best(paper, base, sweeps, choices, tell)
    tell.end()
    about = {"chamber": str(path), "wanted": choices["wanted"], "tried": tried,
             "pulse": {key: value for key, value in pulse.items() if value is not None},
             "limits": {key: (low, high) for key, (low, high, _) in choices["within"].items()}}
    found = plan_to_dict(base, sweeps, best, about)
    if figure is not None:
        from scatterfit.report.plan_figure import save_plan_figure

        save_plan_figure(figure, found, base.expectation)
        print(f"wrote {figure}", file=sys.stderr)
    if as_json:
        return json.dumps(found, indent=2, allow_nan=False, ensure_ascii=False)
    return plan_text(found)


def _paper(path, pulse, settings):
    """Return the bench on paper with the pulse that is assumed."""
    from scatterfit.apparatus.check import apply_overrides
    from scatterfit.files import parse_assignment, read_chamber_mapping
    from scatterfit.forward.simulate import Scenario
    from scatterfit.measured_pulse.plan import PULSE_KEYS, Paper

    overrides = dict(parse_assignment(setting) for setting in settings)
    mapping = apply_overrides(read_chamber_mapping(path), overrides, "--set")
    values = {PULSE_KEYS[key][0]: PULSE_KEYS[key][1] * value
              for key, value in pulse.items() if value is not None}
    return Paper(mapping, Scenario(**values), str(path), _MemoryStore())


def _check_ranges(paper, ranges):
    """Refuse a range whose ends no bench could have."""
    from scatterfit.measured_pulse.plan import bench_and_pulse

    bench_and_pulse(paper, {})
    for key, (low, high, _) in ranges.items():
        for value in (low, high):
            bench_and_pulse(paper, {key: value})


def _sweeps(paper, choices, tell):
    """Return outcomes by key: of what is varied, the usual keys where nothing else is asked."""
    from scatterfit.measured_pulse.plan import default_sweeps, outcome, steps_between

    values = {key: steps_between(*ends) for key, ends in choices["vary"].items()}
    if not values and not choices["within"]:
        values = default_sweeps(paper)
    tell.expect(sum(map(len, values.values())) + bool(choices["within"]) * choices["tries"])
    found = {}
    for key, several in values.items():
        found[key] = []
        for value in several:
            found[key].append(outcome(paper, {key: value}))
            tell(found[key][-1])
    return found


def _best(paper, base, sweeps, choices, tell):
    """Return the best outcomes of a search within limits, or of those at hand, and how many.

    Where the user asks for nothing, less noise or more droplets are no choice of settings.
    """
    from scatterfit.measured_pulse.best_settings import merit, search_best
    from scatterfit.measured_pulse.plan import PULSE_KEYS

    if choices["within"]:
        limits = {key: (low, high) for key, (low, high, _) in choices["within"].items()}
        tried = search_best(paper, limits, choices["wanted"], choices["tries"], tell)
    else:
        tried = [base, *(one for key, several in sweeps.items() for one in several
                         if choices["vary"] or key not in PULSE_KEYS)]
    made = [one for one in tried if one.expectation is not None]
    made.sort(key=lambda one: merit(one, choices["wanted"]))
    return made[:choices["best"]], len(tried)


class _MemoryStore(dict):
    """Kernel tables of one run: a sweep would push a night's out of the user's folder."""

    load = dict.get
    save = dict.__setitem__


class _Progress:
    """How many settings are done, on a terminal."""

    def __init__(self):
        self._done, self._count = 0, 0

    def expect(self, count):
        """Take note of how many there will be."""
        self._count = count

    def __call__(self, _outcome):
        """Count one."""
        self._done += 1
        if sys.stderr.isatty():
            print(f"\r{self._done} of {self._count} settings", end="", file=sys.stderr, flush=True)

    def end(self):
        """Leave the line."""
        if self._done and sys.stderr.isatty():
            print(file=sys.stderr)
