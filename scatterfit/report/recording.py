"""How a trace was understood, as plain text."""

import numpy as np

from scatterfit.inversion.noise import estimate_noise
from scatterfit.report.bench import table
from scatterfit.report.rounding import format_number
from scatterfit.units import PRESSURE_UNITS, TIME_UNITS, VOLTAGE_UNITS, column_unit

_EVEN = 1e-3
_START_SHARE = 50
_FEWEST_START = 20


def recording_section(bench, trace, used):
    """Return how a trace was understood.

    Parameters
    ----------
    bench : Apparatus
        The bench as it was for this pulse.
    trace : Trace
        The recording.
    used : mapping
        Values of this pulse's own, by key path.

    Returns
    -------
    text : str
        Titled tables: sampling, columns with unit, start level and noise, own values.
    """
    named = _named(bench)
    parts = [table(f"Trace {trace.source}", _sampling(trace))]
    parts += [_column(name, role, bench, trace) for name, role in named.items()]
    times = {f"time_{unit}" for unit in TIME_UNITS}
    unused = [name for name in trace.header if name not in named and name not in times]
    if unused:
        parts.append("Columns not named in the chamber file, ignored: " + ", ".join(unused))
    if used:
        parts.append(table("This pulse's own values", [(key, str(used[key])) for key in used]))
    return "\n\n".join(parts)


def _named(bench):
    """Return the columns the bench names, with what they are."""
    roles = {detector.column: "scattered light" for detector in bench.detectors}
    for record, role in ((bench.transmission, "transmitted light"),
                         (bench.reference, "laser power"), (bench.pressure, "pressure")):
        if record is not None:
            roles[record.column] = role
    return roles


def _sampling(trace):
    steps = np.diff(trace.time)
    step = float(np.median(steps))
    even = bool(np.all(np.abs(steps - step) < _EVEN * step))
    spacing = f"every {format_number(1e3 * step, 'ms')}" + ("" if even else " (median, uneven)")
    first, last = (format_number(1e3 * float(trace.time[i]), "ms", 6) for i in (0, -1))
    return [("samples", f"{trace.time.size}, from {first} to {last}, {spacing}")]


def _column(name, role, bench, trace):
    values = trace.columns[name]
    finite = np.isfinite(values)
    good = values[finite]
    is_pressure = role == "pressure"
    scale, unit = (1e-3, "kPa") if is_pressure else (1.0, "V")
    start = good[: max(good.size // _START_SHARE, _FEWEST_START)]
    level = float(np.median(start))
    noise = float(np.sqrt(estimate_noise(good, level).floor))
    rows = [
        ("unit in the file", column_unit(name, VOLTAGE_UNITS + PRESSURE_UNITS)),
        ("level at the start", f"{format_number(scale * level, unit, 5)}  "
                               f"(median of {start.size} samples)"),
        ("noise of a sample", format_number(scale * noise, unit, 2)),
        ("smallest, largest", f"{format_number(scale * float(good.min()), unit)}, "
                              f"{format_number(scale * float(good.max()), unit)}"),
    ]
    if not finite.all():
        rows.append(("empty or not finite", f"{int((~finite).sum())} samples, left out"))
    rows += _stated_pressure(bench, level) if is_pressure else _stated_light(name, bench, good)
    return table(f"{name}: {role}", rows)


def _stated_pressure(bench, level):
    measured = level + bench.pressure.offset
    stated = bench.chamber.pressure
    if stated is None:
        return [("start pressure used", f"{format_number(measured / 1e3, 'kPa', 5)} (measured)")]
    apart = format_number((measured - stated) / 1e3, "kPa", 2)
    return [("stated pressure", f"{format_number(stated / 1e3, 'kPa', 5)}; measured less stated: "
                                f"{apart}")]


def _stated_light(name, bench, good):
    records = (*bench.detectors, bench.transmission, bench.reference)
    record = next(record for record in records if record is not None and record.column == name)
    rows = []
    if record.dark is not None:
        rows.append(("stated dark level", format_number(record.dark, "V")))
    full_scale = getattr(record, "full_scale", None)
    if full_scale is not None:
        clipped = int(np.count_nonzero(good >= full_scale - estimate_noise(good, 0.0).step))
        rows.append(("at full scale", f"{clipped} samples of {format_number(full_scale, 'V')}"))
    return rows
