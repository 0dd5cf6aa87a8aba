"""Single values of a bench, read and replaced by key path."""

from dataclasses import replace

from scatterfit.apparatus.keys import KEYS_OF
from scatterfit.apparatus.overrides import split_path


def value_in(apparatus, key):
    """Return a value of a bench.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    key : str
        Key path.

    Returns
    -------
    value : float or None
        ``None`` where the bench does not have it [SI].
    """
    table, column, name = split_path(key)
    field = KEYS_OF[table][name].field
    record = _records(apparatus, table).get(column)
    if record is None:
        return None
    if KEYS_OF[table][name].property_name:
        return record.overrides.get(field)
    return getattr(record, field)


def with_value(apparatus, key, value):
    """Return a bench with one value replaced.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    key : str
        Key path of a table that it has.
    value : float
        New value [SI].

    Returns
    -------
    changed : Apparatus
        The other bench.
    """
    table, column, name = split_path(key)
    field = KEYS_OF[table][name].field
    records = _records(apparatus, table)
    record = records[column]
    if KEYS_OF[table][name].property_name:
        record = replace(record, overrides={**record.overrides, field: value})
    else:
        record = replace(record, **{field: value})
    changed = tuple({**records, column: record}.values())
    if table == "detector":
        return replace(apparatus, detectors=changed)
    if table == "beam":
        return replace(apparatus, beam=changed[0], other_beams=changed[1:])
    return replace(apparatus, **{table: record})


def _records(apparatus, table):
    """Return the records of a table by what their key paths call them, in order."""
    if table == "detector":
        return {d.column: d for d in apparatus.detectors}
    if table == "beam":
        return {beam.name if apparatus.other_beams else "": beam for beam in apparatus.beams}
    return {"": getattr(apparatus, table)}
