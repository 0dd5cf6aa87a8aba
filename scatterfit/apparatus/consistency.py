"""What must hold between the values of a bench: each may be possible, together they may not."""

import math

from scatterfit import matter
from scatterfit.apparatus.keys import HUMIDITY, KEYS_OF
from scatterfit.apparatus.values import fail
from scatterfit.errors import ChamberFileError

_SATURATION_TOLERANCE = 0.02
_SIGMAS_ALLOWED = 2.0
_TEMPERATURE_STEP = 0.1


def check_bench(bench, mapping, where):
    """Refuse a bench whose values contradict each other.

    Parameters
    ----------
    bench : Apparatus
        The bench, each value checked on its own.
    mapping : Mapping
        The parsed chamber file, for the values as written.
    where : str
        What messages call the file.

    Raises
    ------
    ChamberFileError
        If it has no optical channel, two of them in one column, a cone that takes in the direct
        beam, no or two statements of the vapour or of the growth state, vapour above saturation,
        or a reference radius that is not considered.
    """
    _check_channels(bench, where)
    _check_cones(bench, mapping, where)
    _check_vapour_stated_once(mapping["vapour"], where)
    _check_growth_state(bench, mapping, where)
    _check_radii(bench, mapping, where)
    if bench.chamber.pressure is not None:
        check_saturation(bench, bench.chamber.pressure, where)


def columns_of(bench):
    """Return the trace columns that a bench names.

    Parameters
    ----------
    bench : Apparatus
        The bench.

    Returns
    -------
    columns : list of tuple of str
        Pairs of key path and column: detectors, transmission, reference, pressure.
    """
    named = [(f"detector.{d.column}.column", d.column) for d in bench.detectors]
    for name in ("transmission", "reference", "pressure"):
        record = getattr(bench, name)
        if record is not None:
            named.append((f"{name}.column", record.column))
    return named


def _check_channels(bench, where):
    if not bench.detectors and bench.transmission is None:
        message = (f"{where}: detector: a bench needs at least one [[detector]] or a "
                   "[transmission]")
        raise ChamberFileError(message)
    seen = {}
    for path, column in columns_of(bench):
        if column in seen:
            other = "another detector" if path == seen[column] else seen[column]
            fail(where, path, column, f"the same column is named by {other}; give each its own")
        seen[column] = path


def _check_cones(bench, mapping, where):
    for detector, table in zip(bench.detectors, mapping.get("detector", []), strict=True):
        if detector.half_angle > detector.angle:
            remedy = (f"the cone would take in the direct beam: at an angle of "
                      f"{table['angle_deg']:g} deg the half angle must be at most that")
            path = f"detector.{detector.column}.half_angle_deg"
            fail(where, path, table["half_angle_deg"], remedy)


def _check_vapour_stated_once(table, where):
    stated = [name for name in HUMIDITY if name in table]
    if len(stated) == 1:
        return
    choice = "give exactly one of " + ", ".join(HUMIDITY)
    if stated:
        remedy = f"{stated[0]} says the same; {choice}"
        fail(where, f"vapour.{stated[1]}", table[stated[1]], remedy)
    message = f"{where}: vapour: how much there is of it is missing; {choice}"
    raise ChamberFileError(message)


def _check_growth_state(bench, mapping, where):
    if bench.pressure is not None and bench.growth is not None:
        remedy = "the state during growth follows from [pressure]; leave out one of the two tables"
        fail(where, "growth", mapping["growth"], remedy)
    if bench.pressure is None and bench.growth is None:
        message = (f"{where}: growth: without a [pressure] trace the table [growth] is needed, "
                   "with temperature_K and pressure_kPa")
        raise ChamberFileError(message)
    if bench.pressure is None and bench.chamber.pressure is None:
        message = (f"{where}: chamber.pressure_kPa is missing: without a [pressure] trace the "
                   "pressure before the expansion must be stated")
        raise ChamberFileError(message)


def _check_radii(bench, mapping, where):
    analysis = bench.analysis
    if analysis.reference_radius > analysis.max_radius:
        table = mapping.get("analysis", {})
        name = "reference_radius_um" if "reference_radius_um" in table else "max_radius_um"
        value = table[name]
        remedy = (f"growth rates are quoted at {analysis.reference_radius * 1e6:g} um, the largest "
                  f"radius considered is {analysis.max_radius * 1e6:g} um; lower the first or "
                  "raise the second")
        fail(where, f"analysis.{name}", value, remedy)


def saturation_before(bench, pressure):
    """Return the saturation ratio before the expansion, over the liquid.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    pressure : float
        Chamber pressure before the expansion [Pa].

    Returns
    -------
    ratio : float
        Vapour pressure over that of the liquid at the chamber's temperature [-].
    """
    vapour, temperature = bench.vapour, bench.chamber.temperature
    if vapour.saturation_ratio is not None:
        return vapour.saturation_ratio
    substance = matter.substance(vapour.substance)
    scale = vapour.overrides.get("saturation_pressure_scale", 1.0)
    saturated = scale * substance.saturation_pressure(temperature)
    if vapour.dew_point is not None:
        return scale * substance.saturation_pressure(vapour.dew_point) / saturated
    if vapour.partial_pressure is not None:
        return vapour.partial_pressure / saturated
    return vapour.mole_fraction * pressure / saturated


def check_saturation(bench, pressure, where):
    """Refuse vapour above saturation before the expansion, or above the pressure itself.

    Two percent are allowed, for what vapour pressures of different sources differ by, and two
    standard uncertainties of what is stated.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    pressure : float
        Chamber pressure before the expansion [Pa].
    where : str
        What messages call the file.

    Raises
    ------
    ChamberFileError
        If the vapour would condense before the expansion.
    """
    key, value, unit = _stated_vapour(bench.vapour)
    path = f"vapour.{key.name}"
    written = float(f"{value:.6g}")
    partial = bench.vapour.partial_pressure
    if partial is not None and partial >= pressure:
        remedy = f"must be below the chamber's pressure, {pressure / 1e3:.6g} kPa"
        fail(where, path, written, remedy)
    ratio = saturation_before(bench, pressure)
    allowed = 1 + _SATURATION_TOLERANCE + _SIGMAS_ALLOWED * _saturation_sigma(bench, pressure)
    if ratio > allowed:
        most = f"{value / ratio:.4g}{unit}" if key.name != "dew_point_K" else (
            f"{bench.chamber.temperature:.6g}{unit}")
        remedy = (f"vapour above saturation before the expansion: saturation ratio {ratio:.3g} at "
                  f"{bench.chamber.temperature:.6g} K and {pressure / 1e3:.6g} kPa; at most {most} "
                  "is possible there")
        fail(where, path, written, remedy)


def _stated_vapour(vapour):
    """Return the key that states the vapour, its value in the key's unit, and that unit."""
    from scatterfit.units import from_si  # noqa: PLC0415

    for name in HUMIDITY:
        key = KEYS_OF["vapour"][name]
        value = getattr(vapour, key.field)
        if value is not None:
            return key, from_si(value, key.unit), f" {key.unit}" if key.unit else ""
    message = "the vapour is not stated"
    raise ChamberFileError(message)


def _saturation_sigma(bench, pressure):
    """Return the standard uncertainty of the saturation ratio from the stated sigmas [-]."""
    from dataclasses import replace  # noqa: PLC0415

    here = saturation_before(bench, pressure)
    sigmas, total = bench.sigmas, 0.0
    key, _, _ = _stated_vapour(bench.vapour)
    stated = getattr(bench.vapour, key.field)
    changes = {
        f"vapour.{key.name}": lambda s: (replace(
            bench, vapour=replace(bench.vapour, **{key.field: stated + s})), pressure),
        "chamber.temperature_K": lambda s: (replace(bench, chamber=replace(
            bench.chamber, temperature=bench.chamber.temperature + s)), pressure),
        "chamber.pressure_kPa": lambda s: (bench, pressure + s),
    }
    for path, change in changes.items():
        if path in sigmas:
            total += (saturation_before(*change(sigmas[path])) - here) ** 2
    return math.sqrt(total)
