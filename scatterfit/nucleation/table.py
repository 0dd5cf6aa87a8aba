"""Many pulses as columns: which columns mean what, and numbers checked once."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from scatterfit.apparatus.values import nearest, printable
from scatterfit.errors import InvalidInputError

TEMPERATURE = "nucleation_temperature_K"
SATURATION_RATIO = "nucleation_saturation_ratio"
RATE = "nucleation_rate_per_cm3_s"
CONCENTRATION = "concentration_per_cm3"
SEEDS = "seed_concentration_per_cm3"
SEED_DIAMETER = "seed_diameter_nm"
UPPER_LIMIT = "upper_limit_per_cm3"
RATE_LIMIT = "nucleation_rate_upper_limit_per_cm3_s"
DURATION = "nucleation_effective_ms"
COVARIANCE = "nucleation_temperature_saturation_covariance_K"
PRESSURE = "nucleation_pressure_kPa"
BACKGROUND = "background_concentration_per_cm3"
BACKGROUND_DIAMETER = "background_diameter_nm"
BACKGROUND_UNTIL = "background_detected_diameter_nm"
VIEWED_VOLUME = "viewed_volume_mm3"
BLANK = "blank"

OTHER_NAMES = {
    "background.concentration_per_cm3": BACKGROUND,
    "background.concentration_per_cm3_sigma": f"{BACKGROUND}_sigma",
    "background.diameter_nm": BACKGROUND_DIAMETER,
    "background.diameter_nm_sigma": f"{BACKGROUND_DIAMETER}_sigma",
    "background.detected_diameter_nm": BACKGROUND_UNTIL,
    "start_temperature_K": "chamber.temperature_K",
    "start_pressure_kPa": "chamber.pressure_kPa",
}
"""Key path, or an export's column, to the column that means the same and wins where both are."""

SUFFIXES = ("_sigma", "_sigma_statistical", "_sigma_systematic")
"""What may follow a measured column's name."""

_POSITIVE = (TEMPERATURE, SATURATION_RATIO, SEEDS, SEED_DIAMETER, PRESSURE, VIEWED_VOLUME,
             BACKGROUND_DIAMETER, BACKGROUND_UNTIL, "growth_temperature_K", "growth_pressure_kPa",
             "chamber.temperature_K", "chamber.pressure_kPa")
_NOT_NEGATIVE = (RATE, CONCENTRATION, UPPER_LIMIT, RATE_LIMIT, DURATION, BACKGROUND)
_WITH_SIGMA = (TEMPERATURE, SATURATION_RATIO, RATE, CONCENTRATION, SEEDS, DURATION, BACKGROUND,
               BACKGROUND_DIAMETER)
_RULES = {
    **dict.fromkeys(_POSITIVE, "positive"),
    **dict.fromkeys(_NOT_NEGATIVE, "not negative"),
    **{name + suffix: "not negative" for name in _WITH_SIGMA for suffix in SUFFIXES},
    COVARIANCE: "a number",
}
_RULES |= {other: _RULES[name] for other, name in OTHER_NAMES.items()}
_VERDICTS = ("accepted", "ambiguous", "rejected", "failed", "")
_YES, _NO = ("1", "true", "yes"), ("", "0", "false", "no")


@dataclass(frozen=True)
class Table:
    """Columns of one row a pulse, numbers in the units their names carry."""

    source: str
    """What messages call it."""
    names: tuple[str, ...]
    """What each pulse is called: its trace, or its row."""
    numbers: Mapping[str, np.ndarray]
    """Known columns, shape (n,); not a number where a cell is empty."""
    texts: Mapping[str, tuple[str, ...]]
    """Every column as text."""

    def number(self, name):
        """Return a column, all empty where there is none, shape (n,)."""
        found = self.numbers.get(name)
        return np.full(len(self.names), np.nan) if found is None else found

    def has(self, name):
        """Return whether a column holds any number."""
        return name in self.numbers and bool(np.isfinite(self.numbers[name]).any())

    def verdicts(self):
        """Return the verdict of each pulse, ``accepted`` where none is given."""
        words = self.texts.get("verdict", ("",) * len(self.names))
        return np.array([word or "accepted" for word in words])

    def blanks(self):
        """Return which pulses are marked as blanks, shape (n,) [bool]."""
        words = self.texts.get(BLANK, ("",) * len(self.names))
        return np.array([word.casefold() in _YES for word in words], dtype=bool)


def table_from_columns(columns, source="table", rows=None):
    """Return a table of pulses from its columns, checked.

    Parameters
    ----------
    columns : Mapping of str to sequence
        Column name to one cell a pulse: numbers, texts, or ``None`` where there is nothing.
    source : str
        What messages call the table.
    rows : sequence of int, optional
        Number of each pulse's row for messages; counted from one when absent.

    Returns
    -------
    table : Table
        The pulses; columns that are not known are kept as text.

    Raises
    ------
    InvalidInputError
        If a cell of a known column is not a number it could hold; the message names row and
        column.

    Examples
    --------
    >>> table = table_from_columns({"nucleation_temperature_K": [260.0, "250", None]})
    >>> table.numbers["nucleation_temperature_K"].tolist(), table.names
    ([260.0, 250.0, nan], ('row 1', 'row 2', 'row 3'))
    """
    count = len(next(iter(columns.values()), ()))
    rows = range(1, count + 1) if rows is None else rows
    texts = {name: tuple(map(_text, cells)) for name, cells in columns.items()
             if name not in _RULES}
    numbers = {name: _numbers(cells, name, source, rows) for name, cells in columns.items()
               if name in _RULES}
    for name, cells in columns.items():
        if name in _RULES:
            texts[name] = _Texts(cells)
    for other, name in OTHER_NAMES.items():
        if other in numbers:
            own = numbers.get(name, numbers[other])
            numbers[name] = np.where(np.isfinite(own), own, numbers[other])
    _check_words(texts, "verdict", _VERDICTS, source, rows)
    _check_words(texts, BLANK, _YES + _NO, source, rows)
    labels = texts.get("trace", ("",) * count)
    names = tuple(label or f"row {row}" for label, row in zip(labels, rows, strict=True))
    return Table(source, names, numbers, texts)


class _Texts(tuple):
    """Cells of a number column, made into text only when they are asked for."""

    __slots__ = ()

    def __getitem__(self, place):
        return _text(super().__getitem__(place))


def check_columns(table, needed):
    """Refuse a table that lacks a column.

    Parameters
    ----------
    table : Table
        The table.
    needed : sequence of str
        Columns that must be there.

    Raises
    ------
    InvalidInputError
        If one is missing, with the nearest of those there are.
    """
    for name in needed:
        if name not in table.numbers:
            match = nearest(name, table.texts)
            there = ", ".join(table.texts)
            hint = f"did you mean {match}?" if match else f"there are {there}"
            message = f"{table.source}: no column {name}; {hint}"
            raise InvalidInputError(printable(message))


def group_rows(table, column):
    """Return the rows of each value of a column.

    Parameters
    ----------
    table : Table
        The table.
    column : str or None
        Name of the column; ``None`` puts all rows together.

    Returns
    -------
    groups : dict
        Value as text (``None`` without a column) to indices, in order of appearance.

    Raises
    ------
    InvalidInputError
        If there is no such column.
    """
    count = len(table.names)
    if column is None:
        return {None: np.arange(count)}
    if column not in table.texts:
        match = nearest(column, table.texts)
        hint = f"did you mean {match}?" if match else f"there are {', '.join(table.texts)}"
        message = f"{table.source}: --by {column}: no such column; {hint}"
        raise InvalidInputError(printable(message))
    groups = {}
    cells = table.texts[column]
    for row in range(count):
        groups.setdefault(cells[row], []).append(row)
    return {value: np.array(rows) for value, rows in groups.items()}


def _text(cell):
    return "" if cell is None else str(cell).strip()


def _numbers(cells, name, source, rows):
    """Return a column as floats, after checking every cell."""
    try:
        values = np.array([np.nan if cell is None or cell == "" else float(cell) for cell in cells])
    except (TypeError, ValueError):
        values = np.array([_number(cell, name, source, row)
                           for cell, row in zip(cells, rows, strict=True)])
    rule = _RULES[name]
    bad = np.isinf(values)
    if rule == "positive":
        bad |= values <= 0
    elif rule == "not negative":
        bad |= values < 0
    if bad.any():
        first = int(np.flatnonzero(bad)[0])
        _refuse(cells[first], name, source, rows[first], f"must be finite and {rule}")
    return values


def _number(cell, name, source, row):
    text = _text(cell)
    if not text:
        return np.nan
    try:
        return float(text)
    except ValueError:
        _refuse(cell, name, source, row, "must be a number, or empty where there is none")


def _refuse(cell, name, source, row, remedy):
    message = f"{source}: row {row}, column {name} = {_text(cell)}: {remedy}"
    raise InvalidInputError(printable(message))


def _check_words(texts, name, known, source, rows):
    for row, word in zip(rows, texts.get(name, ()), strict=False):
        if word.casefold() not in known:
            words = ", ".join(filter(None, known))
            _refuse(word, name, source, row, f"must be one of {words}, or empty")
