"""A bench on paper: settings, and what each would resolve."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.overrides import known_paths, split_path
from scatterfit.apparatus.values import fail, suggestion
from scatterfit.errors import ScatterfitError
from scatterfit.forward.simulate import Scenario
from scatterfit.measured_pulse.expected import Expectation, expect

PULSE_KEYS = {
    "number": ("number", 1e6, (1e-2, 1e8), "1/cm3"),
    "duration_ms": ("duration", 1e-3, (10.0, 1e5), "ms"),
    "rate_khz": ("rate", 1e3, (0.1, 1e4), "kHz"),
    "noise": ("noise", 1.0, (1e-6, 1.0), ""),
    "floor": ("floor", 1.0, (1e-6, 1.0), ""),
    "transmission_noise": ("transmission_noise", 1.0, (1e-6, 1.0), ""),
    "hold_ms": ("hold", 1e-3, (0.05, 100.0), "ms"),
    "growth_pressure_ratio": ("growth_pressure_ratio", 1.0, (0.3, 0.99), ""),
}
"""Key of the assumed pulse to its field of :class:`Scenario`, its factor to SI, range and unit."""

ADDED = "added"
"""Table of a detector that the bench does not have yet."""
ADDED_COLUMN = "added_V"

_MOST = PULSE_KEYS["number"][2][1]
_SAMPLES = (20, 2_000_000)
_ADDED_DEFAULTS = {"angle_deg": 90.0, "half_angle_deg": 2.0}
_NOT_COPIED = ("gain_V_m", "gain_V_m_sigma", "volume_mm3", "volume_mm3_sigma", "column")


@dataclass(frozen=True)
class Outcome:
    """One setting and what it would resolve."""

    setting: Mapping[str, float]
    """Key path to value, in the unit of the key; empty for the bench as it stands."""
    expectation: Expectation | None
    """``None`` where such a pulse cannot be made."""
    error: str = ""
    """Why it cannot."""


@dataclass(frozen=True)
class Paper:
    """A bench on paper."""

    mapping: Mapping
    """The parsed chamber file."""
    scenario: Scenario
    """The pulse that is assumed."""
    where: str
    """What messages call the chamber file."""
    store: object = field(default=None, compare=False)
    """Where kernel tables are kept."""
    rivals: bool = True
    """Whether rivals in other lobes are looked for."""


def bench_and_pulse(paper, setting):
    """Return the bench and the pulse of a setting.

    Parameters
    ----------
    paper : Paper
        The bench as it stands.
    setting : mapping of str to float
        Key paths of the chamber file, keys of ``PULSE_KEYS`` or ``added.KEY`` for a detector that
        is to be added, to values in the units of the keys.

    Returns
    -------
    apparatus : Apparatus
        Checked.
    scenario : Scenario
        The pulse.

    Raises
    ------
    ChamberFileError
        If a key is not known or a value could not hold.

    Examples
    --------
    >>> bench = {"beam": {"wavelength_nm": 532.0, "polarization": "parallel"},
    ...          "detector": [{"column": "a_V", "angle_deg": 30.0, "half_angle_deg": 2.0}],
    ...          "vapour": {"substance": "water", "mole_fraction": 0.01},
    ...          "gas": {"carrier": "argon"}, "pressure": {"column": "p_kPa"},
    ...          "chamber": {"temperature_K": 296.0, "pressure_kPa": 90.0}}
    >>> paper = Paper(bench, Scenario(5e9), "bench.toml")
    >>> setting = {"noise": 0.02, "detector.a_V.angle_deg": 40.0, "added.angle_deg": 90.0}
    >>> apparatus, pulse = bench_and_pulse(paper, setting)
    >>> [round(float(np.degrees(d.angle))) for d in apparatus.detectors], pulse.noise
    ([40, 90], 0.02)
    """
    pulse, added, bench = {}, {}, {}
    for key, value in setting.items():
        if key in PULSE_KEYS:
            pulse[PULSE_KEYS[key][0]] = _pulse_value(paper, key, value)
        elif key.startswith(f"{ADDED}."):
            added[key.removeprefix(f"{ADDED}.")] = value
        else:
            _check_path(paper, key, value)
            bench[key] = value
    mapping = apply_overrides(paper.mapping, bench, paper.where)
    if added:
        mapping = _with_added(mapping, added, paper.where)
    apparatus = apparatus_from_mapping(mapping, paper.where)
    scenario = replace(paper.scenario, **pulse)
    samples = scenario.duration * scenario.rate
    if not _SAMPLES[0] <= samples <= _SAMPLES[1]:
        fail(paper.where, "rate_khz", scenario.rate / 1e3,
             f"{samples:.3g} samples; {_SAMPLES[0]} to {_SAMPLES[1]} can be planned")
    if apparatus.pressure is not None and apparatus.chamber.pressure is None:
        fail(paper.where, "chamber.pressure_kPa", "missing",
             "a bench without a trace needs it: state the pressure before the expansion")
    if "hold" in pulse and apparatus.pressure is None:
        fail(paper.where, "hold_ms", setting["hold_ms"],
             "a bench without [pressure] states its hold: vary pulse.hold_ms")
    return apparatus, scenario


def _pulse_value(paper, key, value):
    """Return a value of the assumed pulse in SI."""
    _, factor, (low, high), _ = PULSE_KEYS[key]
    if not low <= value <= high:
        fail(paper.where, key, value, f"{low:g} to {high:g} can be planned")
    return factor * value


def _check_path(paper, key, value):
    """Refuse a key that is neither the chamber file's nor the pulse's."""
    if split_path(key) is None:
        columns, beams = (_names(paper.mapping, *where) for where in (
            ("detector", "column"), ("beam", "name")))
        paths = [*PULSE_KEYS, *known_paths(columns or ["COLUMN"], beams),
                 f"{ADDED}.angle_deg", f"{ADDED}.half_angle_deg"]
        close = suggestion(key, paths)
        known = close if close.startswith("did") else (
            f"a key path such as beam.wavelength_nm, {ADDED}.angle_deg, or one of "
            + ", ".join(PULSE_KEYS))
        fail(paper.where, key, value, f"unknown key; {known}")


def _names(mapping, table, key):
    """Return what the members of an array of tables are called, as far as it is sound."""
    members = mapping.get(table, [])
    found = [one.get(key) for one in members if isinstance(one, dict)] if isinstance(
        members, list) else []
    return [name for name in found if isinstance(name, str)]


def _with_added(mapping, added, where):
    """Return the chamber file with one more detector, like the first but not calibrated."""
    detectors = list(mapping.get("detector", []))
    if added.keys() & set(_NOT_COPIED[-1:]):
        fail(where, f"{ADDED}.column", added["column"], "it fills a column of its own")
    like = {key: value for key, value in (detectors[0] if detectors else {}).items()
            if key not in _NOT_COPIED}
    new = {**_ADDED_DEFAULTS, **like, **added, "column": ADDED_COLUMN}
    return {**mapping, "detector": [*detectors, new]}


def outcome(paper, setting):
    """Return what one setting would resolve.

    Parameters
    ----------
    paper : Paper
        The bench as it stands.
    setting : mapping of str to float
        What is different, as for :func:`bench_and_pulse`.

    Returns
    -------
    outcome : Outcome
        With an error where such a bench or pulse cannot be.
    """
    try:
        apparatus, scenario = bench_and_pulse(paper, setting)
        return Outcome(dict(setting), expect(apparatus, scenario, paper.store, paper.rivals))
    except ScatterfitError as error:
        return Outcome(dict(setting), None, str(error))


def steps_between(low, high, count):
    """Return values between two limits: by equal factors where they differ tenfold or more.

    Parameters
    ----------
    low, high : float
        First and last value [any].
    count : int
        How many.

    Returns
    -------
    values : list of float
        Rounded to four digits [any].

    Examples
    --------
    >>> steps_between(20.0, 60.0, 3), steps_between(1.0, 100.0, 3)
    ([20.0, 40.0, 60.0], [1.0, 10.0, 100.0])
    """
    values = np.geomspace(low, high, count) if by_factors(low, high) else np.linspace(
        low, high, count)
    return [float(f"{value:.4g}") for value in values]


def by_factors(low, high):
    """Return whether a range is stepped through by equal factors.

    Parameters
    ----------
    low, high : float
        Its ends [any].

    Returns
    -------
    factors : bool
        Where the ends differ tenfold or more.
    """
    return low > 0.0 and high / low >= 10.0


def default_sweeps(paper):
    """Return what is varied where the user does not say: one key at a time.

    Parameters
    ----------
    paper : Paper
        The bench as it stands.

    Returns
    -------
    sweeps : dict of str to list of float
        Key to values, in the unit of the key.
    """
    apparatus, scenario = bench_and_pulse(paper, {})
    sweeps = {}
    for detector in apparatus.detectors:
        path = f"detector.{detector.column}"
        sweeps[f"{path}.angle_deg"] = steps_between(15.0, 135.0, 7)
        if detector is apparatus.detectors[0]:
            sweeps[f"{path}.half_angle_deg"] = [0.5, 1.0, 2.0, 4.0]
            if detector.volume:
                held = detector.volume * 1e9
                sweeps[f"{path}.volume_mm3"] = steps_between(0.01 * held, held, 3)
    sweeps["added.angle_deg"] = steps_between(15.0, 135.0, 7)
    if apparatus.detectors:
        for name in _names(paper.mapping, "beam", "name") or [""]:
            path = f"beam.{name}" if name else "beam"
            sweeps[f"{path}.wavelength_nm"] = [405.0, 532.0, 632.8]
            sweeps[f"{path}.polarization"] = [0.0, 45.0, 90.0]
        sweeps["noise"] = [_round(scenario.noise * f) for f in (0.3, 1.0, 3.0)]
    if apparatus.transmission is not None:
        sweeps["transmission_noise"] = [_round(scenario.transmission_noise * f)
                                        for f in (0.1, 0.3, 1.0)]
    sweeps["rate_khz"] = [_round(1e-3 * scenario.rate * f) for f in (0.1, 0.3, 1.0)]
    sweeps["number"] = [_round(1e-6 * scenario.number * f) for f in (0.01, 0.1, 1.0, 10.0)
                        if PULSE_KEYS["number"][2][0] <= 1e-6 * scenario.number * f <= _MOST]
    return sweeps


def _round(value):
    return float(f"{value:.3g}")
