"""A pulse's own values in place of the chamber file's, addressed by key path."""

from scatterfit.apparatus.keys import HUMIDITY, KEYS_OF, TABLE_BY_NAME, allowed_names
from scatterfit.apparatus.values import fail, nearest, read_sigma, read_value, suggestion

_NAMED_BY = {"detector": "column", "beam": "name"}
"""Tables of which there may be several, and the key that tells them apart."""


def split_path(path):
    """Split a key path into table, column of a detector, and key.

    Parameters
    ----------
    path : str
        Such as ``chamber.temperature_K`` or ``detector.scatter1_V.gain_V_m``.

    Returns
    -------
    parts : tuple of str or None
        Table, column (a detector's, the name of one of several beams, the gas for
        ``gas.carrier.GAS``; empty for the rest) and key; ``None`` where no key of the chamber
        file has this path.

    Examples
    --------
    >>> split_path("detector.scatter1_V.gain_V_m")
    ('detector', 'scatter1_V', 'gain_V_m')
    >>> split_path("beam.red.wavelength_nm")
    ('beam', 'red', 'wavelength_nm')
    >>> split_path("gas.carrier.helium")
    ('gas', 'helium', 'carrier')
    >>> split_path("chamber.colour") is None
    True
    """
    table, _, rest = path.partition(".")
    if table not in TABLE_BY_NAME:
        return None
    column, key = "", rest
    if table in _NAMED_BY:
        column, _, key = rest.rpartition(".")
        if key == _NAMED_BY[table] or not (column or table == "beam"):
            return None
    elif rest.startswith("carrier.") and table == "gas":
        key, _, column = rest.partition(".")
    return (table, column, key) if key in allowed_names(table) else None


def check_override(path, value, where):
    """Refuse an override that could not hold on any bench.

    Parameters
    ----------
    path : str
        Key path.
    value : object
        Its value, in the unit of the key.
    where : str
        File, or file and line, for messages.

    Raises
    ------
    ChamberFileError
        If the key path is not known, or the value has the wrong type or is out of bounds.

    Examples
    --------
    >>> check_override("chamber.temperature_K", 296.15, "pulse.csv, line 1")
    """
    parts = split_path(path)
    if parts is None:
        fail(where, path, value, f"unknown key path; {_path_meant(path)}")
    table, column, name = parts
    if table == "gas" and column:
        return
    if name in KEYS_OF[table]:
        read_value(KEYS_OF[table][name], value, where, path)
    else:
        read_sigma(KEYS_OF[table][name.removesuffix("_sigma")], value, where, path)


def _path_meant(path):
    match = nearest(path, paths_like(path))
    return f"did you mean {match}?" if match else (
        "a key path reads TABLE.KEY, or detector.COLUMN.KEY, such as chamber.temperature_K")


def paths_like(path):
    """Return every key path, with the column or the beam's name that a mistyped one holds.

    Parameters
    ----------
    path : str
        What was written.

    Returns
    -------
    paths : list of str
        Key paths.

    Examples
    --------
    >>> "beam.red.wavelength_nm" in paths_like("beam.red.wavelenght_nm")
    True
    """
    column = path.removeprefix("detector.").rpartition(".")[0] or "COLUMN"
    name = path.partition(".")[2].rpartition(".")[0] if path.startswith("beam.") else ""
    return known_paths([column], [name] if name else [])


def known_paths(columns=("COLUMN",), beams=()):
    """Return every key path, with the given columns for detectors.

    Parameters
    ----------
    columns : sequence of str
        Columns of the bench's detectors.
    beams : sequence of str
        Names of the bench's beams, where it has several.

    Returns
    -------
    paths : list of str
        Key paths.

    Examples
    --------
    >>> "detector.scatter1_V.gain_V_m" in known_paths(["scatter1_V"])
    True
    """
    paths = []
    for table in TABLE_BY_NAME:
        names = allowed_names(table)
        if table == "detector":
            paths += [f"detector.{c}.{name}" for c in columns for name in names[1:]]
        else:
            names = [name for name in names if name != _NAMED_BY.get(table)]
            paths += [f"{table}.{name}" for name in names]
        if table == "beam":
            paths += [f"beam.{beam}.{name}" for beam in beams for name in names]
    return paths


def apply_overrides(mapping, overrides, where="overrides"):
    """Return a chamber file's mapping with some values replaced.

    One of the four ways to state the vapour replaces whichever the file uses.

    Parameters
    ----------
    mapping : Mapping
        The parsed chamber file; it stays as it is.
    overrides : Mapping of str to object
        Key path to value, in the unit of the key.
    where : str
        What messages call the origin of the overrides.

    Returns
    -------
    changed : dict
        A new mapping, to be checked as a whole by `apparatus_from_mapping`.

    Raises
    ------
    ChamberFileError
        If a key path is not known, names a detector or a beam that the bench does not have, or
        its value could not hold on any bench.

    Examples
    --------
    >>> before = {"chamber": {"temperature_K": 296.15, "path_mm": 120.0}}
    >>> apply_overrides(before, {"chamber.temperature_K": 297.0})
    {'chamber': {'temperature_K': 297.0, 'path_mm': 120.0}}
    """
    changed = {name: _copy(content) for name, content in mapping.items()}
    _make_room_for_vapour(changed, overrides)
    for path, value in overrides.items():
        check_override(path, value, where)
        table, column, name = split_path(path)
        if table == "detector" or (table == "beam" and (column or _many(changed.get("beam")))):
            _named_table(changed, path, value, where)[name] = value
        else:
            _put(changed, table, column, name, value)
    return changed


def _put(mapping, table, column, name, value):
    content = mapping.setdefault(table, {})
    if not isinstance(content, dict):  # said by the check of the whole
        return
    if column:
        if not isinstance(content.get(name), dict):
            content[name] = {}
        content = content[name]
    content[column or name] = value


def _copy(content):
    if isinstance(content, list):
        return [_copy(part) for part in content]
    if isinstance(content, dict):
        return {name: _copy(part) for name, part in content.items()}
    return content


def _make_room_for_vapour(mapping, overrides):
    """Drop the file's statement of the vapour where an override makes another."""
    stated = [name for name in HUMIDITY if f"vapour.{name}" in overrides]
    if stated and isinstance(mapping.get("vapour"), dict):
        for name in set(HUMIDITY) - set(stated):
            mapping["vapour"].pop(name, None)
            mapping["vapour"].pop(f"{name}_sigma", None)


def _many(content):
    """Return whether beams are an array of tables."""
    return isinstance(content, list)


def _named_table(mapping, path, value, where):
    """Return the detector's or beam's table that an override's key path names."""
    kind, wanted, key = split_path(path)
    content = mapping.get(kind, [])
    tables = [table for table in (content if _many(content) else [content])
              if isinstance(table, dict)]
    names = [str(table[_NAMED_BY[kind]]).strip() for table in tables if _NAMED_BY[kind] in table]
    if not wanted and len(tables) == 1:
        return tables[0]
    for table in tables:
        if wanted and str(table.get(_NAMED_BY[kind])).strip() == wanted:
            return table
    if kind == "detector":
        remedy = f"no detector fills column {wanted}; " + (
            suggestion(wanted, names) if names else "the bench has no detectors")
    elif wanted:
        remedy = f"no beam is named {wanted}; " + (
            suggestion(wanted, names) if names else f"there is one beam: write beam.{key}")
    else:
        choice = " or ".join(f"beam.{name}.{key}" for name in names)
        remedy = f"the bench has several beams; write {choice}"
    return fail(where, path, value, remedy)
