"""What must hold between the values of a bench: each may be possible, together they may not."""

from scatterfit.apparatus.correlations import check_correlations
from scatterfit.apparatus.keys import HUMIDITY
from scatterfit.apparatus.saturation import check_saturation
from scatterfit.apparatus.values import fail, suggestion
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
        If it has no optical channel, two of them in one column, a channel of no known beam, a beam
        of no channel, a cone that takes in the direct beam, no or two statements of the vapour, of
        the liquid's index or of the growth state, vapour above saturation, a reference radius
        that is not considered, or correlations that cannot be.
    """
    _check_channels(bench, where)
    _check_beams(bench, where)
    _check_indices(bench, mapping, where)
    _check_cones(bench, mapping, where)
    _check_vapour_stated_once(mapping["vapour"], where)
    _check_growth_state(bench, mapping, where)
    _check_radii(bench, mapping, where)
    check_correlations(bench, where)
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


def _check_beams(bench, where):
    """Refuse names of beams that are missing or not their own, and beams that no channel sees."""
    names = [beam.name for beam in bench.beams]
    several = len(names) > 1
    for number, name in enumerate(names):
        if several and name is None:
            message = (f"{where}: beam[{number + 1}].name is missing: each of several [[beam]] "
                       'tables needs one, e.g. name = "green"')
            raise ChamberFileError(message)
        if name in names[:number]:
            fail(where, f"beam[{number + 1}].name", name,
                 "another beam has this name; give each its own")
    seen = {channel.beam for _, channel in _channels(bench)}
    _check_whose_light(bench, names, where)
    for name in names if several else ():
        if name not in seen:
            fail(where, f"beam.{name}.name", name,
                 "no detector and no transmission names this beam; leave it out, or name it there")


def _channels(bench):
    """Return key paths of the optical channels and their records."""
    channels = [(f"detector.{d.column}", d) for d in bench.detectors]
    return channels + ([("transmission", bench.transmission)] if bench.transmission else [])


def _check_whose_light(bench, names, where):
    """Refuse channels that do not tell which beam they see."""
    channels = _channels(bench)
    without = next((path for path, channel in channels if channel.beam is None), None)
    if len(names) > 1 and without:
        message = (f"{where}: {without}.beam is missing: the bench has several beams, "
                   f"{', '.join(names)}; say whose light this is")
        raise ChamberFileError(message)
    if bench.reference is not None:
        channels.append(("reference", bench.reference))
    for path, channel in channels:
        if channel.beam is not None and channel.beam not in names:
            known = [name for name in names if name]
            remedy = (f"no beam has this name; {suggestion(channel.beam, known)}" if known else
                      "the one [beam] has no name; leave this key out, or name the beam")
            fail(where, f"{path}.beam", channel.beam, remedy)


def _check_indices(bench, mapping, where):
    """Refuse one index of the liquid for several colours, and two for one."""
    if bench.vapour.refractive_index is None:
        return
    written = mapping["vapour"]["refractive_index"]
    for beam in bench.beams:
        if beam.refractive_index is not None:
            path = bench.path_of(beam)
            fail(where, "vapour.refractive_index", written,
                 f"{path}.refractive_index says the same; leave out one of the two")
    if len({beam.wavelength for beam in bench.beams}) > 1:
        fail(where, "vapour.refractive_index", written,
             "the beams differ in wavelength, and the index with it; give refractive_index in each "
             "[[beam]], or leave it out for the built-in correlation")


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
