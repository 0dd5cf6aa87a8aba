"""From the parsed chamber file to the bench: every key known, every value possible."""

from scatterfit import matter
from scatterfit.apparatus.consistency import check_bench
from scatterfit.apparatus.keys import KEYS_OF, TABLE_BY_NAME, TABLES, allowed_names
from scatterfit.apparatus.overrides import apply_overrides
from scatterfit.apparatus.records import (
    Analysis,
    Apparatus,
    Background,
    Beam,
    Chamber,
    Correlations,
    Detector,
    GasState,
    PressureGauge,
    Pulse,
    Reference,
    Seed,
    Transmission,
    Vapour,
)
from scatterfit.apparatus.values import fail, nearest, read_sigma, read_value, suggestion
from scatterfit.errors import ChamberFileError, InvalidInputError

__all__ = ["apparatus_from_mapping", "apply_overrides", "nearest"]

_RECORDS = {
    "transmission": Transmission,
    "reference": Reference,
    "pressure": PressureGauge,
    "seed": Seed,
    "background": Background,
    "chamber": Chamber,
    "growth": GasState,
    "pulse": Pulse,
    "analysis": Analysis,
    "correlations": Correlations,
}
_FRACTION_TOLERANCE = 1e-6


def apparatus_from_mapping(mapping, where="chamber file"):
    """Check a parsed chamber file and return the bench it describes.

    Parameters
    ----------
    mapping : Mapping
        The file as TOML tables: names, numbers in the units of their keys.
    where : str
        What messages call the file.

    Returns
    -------
    bench : Apparatus
        The bench, SI inside.

    Raises
    ------
    ChamberFileError
        If a table or key is unknown, missing, of the wrong type or impossible; the message is
        one line with file, key path, value and what would do.

    Examples
    --------
    >>> bench = apparatus_from_mapping({
    ...     "beam": {"wavelength_nm": 532.0, "polarization": "parallel"},
    ...     "detector": [{"column": "side_V", "angle_deg": 90.0, "half_angle_deg": 2.0}],
    ...     "vapour": {"substance": "water", "mole_fraction": 0.012},
    ...     "gas": {"carrier": "argon"},
    ...     "chamber": {"temperature_K": 296.15},
    ...     "pressure": {"column": "gauge_kPa"},
    ... })
    >>> bench.beam.wavelength
    5.32e-07
    """
    _check_tables(mapping, where)
    sigmas = {}
    records = {}
    for name, table in mapping.items():
        if name in _RECORDS:
            fields = _read_table(name, table, name, where, sigmas)
            records[name] = _RECORDS[name](**fields)
    first, *others = _beams(mapping["beam"], where, sigmas)
    bench = Apparatus(
        **records,
        beam=first,
        other_beams=tuple(others),
        detectors=_detectors(mapping.get("detector", []), where, sigmas),
        vapour=_vapour(mapping["vapour"], where, sigmas),
        carrier=_carrier(mapping["gas"], where, sigmas),
        sigmas=sigmas,
    )
    check_bench(bench, mapping, where)
    return bench


def _check_tables(mapping, where):
    """Refuse unknown and missing tables, and tables of the wrong shape."""
    for name, content in mapping.items():
        if name not in TABLE_BY_NAME:
            _unknown_at_top(name, content, where)
        else:
            _check_shape(TABLE_BY_NAME[name], content, where)
    for table in TABLES:
        if table.required and table.name not in mapping:
            message = f"{where}: {table.name}: the table [{table.name}] is missing ({table.doc})"
            raise ChamberFileError(message)


def _check_shape(table, content, where):
    """Refuse one table where several are meant, and the other way round."""
    many = isinstance(content, list) and all(isinstance(part, dict) for part in content)
    if table.repeated and not many:
        fail(where, table.name, content, f"write one [[{table.name}]] table for each of them")
    if table.several and many and content:
        return
    if not table.repeated and not isinstance(content, dict):
        more = f", or as several, [[{table.name}]]" if table.several else ""
        fail(where, table.name, content, f"write it as one table, [{table.name}]{more}")


def _unknown_at_top(name, content, where):
    if isinstance(content, dict | list):
        fail(where, name, content, f"unknown table; {suggestion(name, TABLE_BY_NAME)}")
    paths = [f"{table}.{key}" for table in TABLE_BY_NAME for key in allowed_names(table)]
    by_key = {path.partition(".")[2]: path for path in reversed(paths)}
    match = nearest(name, by_key)
    meant = f"did you mean {by_key[match]}?" if match else "keys stand in tables such as [beam]"
    fail(where, name, content, f"unknown key; {meant}")


def _read_table(table, content, prefix, where, sigmas):
    """Return the fields of one table in SI, and add its uncertainties to ``sigmas``."""
    keys = KEYS_OF[table]
    fields = {}
    for name, value in content.items():
        path = f"{prefix}.{name}"
        key = keys.get(name)
        if key is not None:
            fields[key.field] = read_value(key, value, where, path)
        elif not _read_sibling(keys, name, content, where, prefix, sigmas):
            fail(where, path, value, f"unknown key; {suggestion(name, allowed_names(table))}")
    for key in keys.values():
        if key.required and key.name not in content:
            message = f"{where}: {prefix}.{key.name} is missing: {key.doc}, e.g. {key.example}"
            raise ChamberFileError(message)
    return fields


def _read_sibling(keys, name, content, where, prefix, sigmas):
    """Add the uncertainty that a ``NAME_sigma`` states; return whether it is one."""
    key = keys.get(name.removesuffix("_sigma")) if name.endswith("_sigma") else None
    if key is None or not key.takes_sigma:
        return False
    path, value = f"{prefix}.{key.name}", content[name]
    sigma = read_sigma(key, value, where, f"{path}_sigma")
    stated = content.get(key.name)
    if stated is None and not key.has_value_without:
        fail(where, f"{path}_sigma", value, f"there is no {path} that it could belong to")
    if stated == "unpolarized":
        fail(where, f"{path}_sigma", value, "unpolarized light has no angle to be uncertain of")
    parts = sigma if isinstance(sigma, tuple) else (sigma,)
    for part, ending in zip(parts, ("", "_k"), strict=False):
        if part > 0:
            sigmas[path + ending] = part
    return True


def _beams(content, where, sigmas):
    """Return every beam; sigmas of several carry their names."""
    if isinstance(content, dict) or len(content) == 1:
        table = content if isinstance(content, dict) else content[0]
        return [Beam(**_read_table("beam", table, "beam", where, sigmas))]
    return [Beam(**_read_table("beam", table, prefix, where, sigmas))
            for prefix, table in _named("beam", "name", content)]


def _detectors(tables, where, sigmas):
    return tuple(Detector(**_read_table("detector", table, prefix, where, sigmas))
                 for prefix, table in _named("detector", "column", tables))


def _named(kind, key, tables):
    """Yield tables of an array with the start of their key paths, by name where they have one."""
    for number, table in enumerate(tables, start=1):
        name = table.get(key)
        named = isinstance(name, str) and name.strip()
        yield f"{kind}.{name.strip()}" if named else f"{kind}[{number}]", table


def _vapour(content, where, sigmas):
    fields = _read_table("vapour", content, "vapour", where, sigmas)
    overrides = {key.property_name: fields.pop(key.field) for key in KEYS_OF["vapour"].values()
                 if key.property_name and key.field in fields}
    try:
        substance = matter.substance(fields.pop("substance"))
    except InvalidInputError as error:
        fail(where, "vapour.substance", content["substance"], str(error))
    return Vapour(substance=substance.name, overrides=overrides, **fields)


def _carrier(content, where, sigmas):
    """Return mole fractions of the dry gas by canonical name."""
    fractions = _read_table("gas", content, "gas", where, sigmas)["carrier"]
    if isinstance(fractions, dict):
        fractions = _fractions(fractions, where, sigmas)
    try:
        return dict(matter.carrier(fractions).composition)
    except InvalidInputError as error:
        fail(where, "gas.carrier", content["carrier"], str(error))


def _fractions(table, where, sigmas):
    fractions = {}
    for name, value in table.items():
        path = f"gas.carrier.{name}"
        number = not isinstance(value, bool) and isinstance(value, int | float)
        if not (number and 0 <= value <= 1):
            fail(where, path, value, "a mole fraction must be a number, at least 0 and at most 1")
        if name.removesuffix("_sigma") not in table:
            fail(where, path, value, f"there is no {path.removesuffix('_sigma')}")
        if name.endswith("_sigma"):
            sigmas[path.removesuffix("_sigma")] = float(value)
        else:
            fractions[name] = float(value)
    total = sum(fractions.values())
    if abs(total - 1) > _FRACTION_TOLERANCE:
        remedy = f"mole fractions of the dry gas must add up to 1; these add up to {total:.8g}"
        fail(where, "gas.carrier", table, remedy)
    return {name: fraction for name, fraction in fractions.items() if fraction > 0}
