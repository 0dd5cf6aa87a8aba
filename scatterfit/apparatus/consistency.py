"""What must hold between the values of a bench: each may be possible, together they may not."""

from scatterfit.apparatus.keys import HUMIDITY
from scatterfit.apparatus.saturation import check_saturation
from scatterfit.apparatus.values import fail
from scatterfit.errors import ChamberFileError


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
