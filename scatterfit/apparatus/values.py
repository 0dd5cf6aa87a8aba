"""One value of the chamber file: from what was written to SI, or one line that says what is wrong.

Messages have the form ``WHERE: KEY.PATH = VALUE: what would do``.
"""

import math

from scatterfit.errors import ChamberFileError
from scatterfit.units import PRESSURE_UNITS, VOLTAGE_UNITS, column_unit, to_si

POLARIZATIONS = {"perpendicular": math.pi / 2, "parallel": 0.0, "unpolarized": None}
"""Word to angle of the electric field from the scattering plane [rad]."""

_INDEX_PARTS = (("n", 1.0, 4.0), ("k", 0.0, 10.0))
_SHOWN_LENGTH = 60
_LARGEST = 1.7e308


def nearest(word, known):
    """Return the known word that a mistyped one is closest to.

    Parameters
    ----------
    word : str
        What was written.
    known : iterable of str
        What could have been meant.

    Returns
    -------
    match : str or None
        The closest known word; ``None`` where none is close.

    Examples
    --------
    >>> nearest("wavelenght_nm", ["wavelength_nm", "polarization"])
    'wavelength_nm'
    >>> nearest("colour", ["wavelength_nm", "polarization"]) is None
    True
    """
    from difflib import get_close_matches  # noqa: PLC0415 - only an error needs it

    folded = {candidate.casefold(): candidate for candidate in known}
    close = get_close_matches(str(word).casefold(), folded, n=1, cutoff=0.6)
    return folded[close[0]] if close else None


def suggestion(word, known):
    """Return the end of a message about an unknown word.

    Parameters
    ----------
    word : str
        What was written.
    known : iterable of str
        What could have been meant.

    Returns
    -------
    text : str
        The nearest known word, or all of them where none is near.

    Examples
    --------
    >>> suggestion("paralel", ["perpendicular", "parallel"])
    'did you mean parallel?'
    """
    known = list(known)
    match = nearest(word, known)
    return f"did you mean {match}?" if match else f"known are {', '.join(known)}"


def shown(value):
    """Return a value as it would be written in the file, on one line and not too long.

    Parameters
    ----------
    value : object
        A parsed value.

    Returns
    -------
    text : str
        The value in the file's notation.

    Examples
    --------
    >>> shown(True), shown("water"), shown([1.33, 0.0])
    ('true', '"water"', '[1.33, 0.0]')
    """
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = f'"{value}"'
    elif isinstance(value, dict):
        text = "{" + ", ".join(f"{k} = {shown(v)}" for k, v in value.items()) + "}"
    elif isinstance(value, list | tuple):
        text = "[" + ", ".join(shown(v) for v in value) + "]"
    else:
        text = str(value)
    text = printable(text)
    return text if len(text) <= _SHOWN_LENGTH else text[: _SHOWN_LENGTH - 3] + "..."


def printable(text):
    r"""Return a text on one line, with what cannot be printed as escapes.

    Parameters
    ----------
    text : str
        Any text.

    Returns
    -------
    text : str
        The same with line breaks and control characters spelled out.

    Examples
    --------
    >>> print(printable("two" + chr(10) + "lines"))
    two\nlines
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)


def fail(where, path, value, remedy):
    """Raise the error of one value.

    Parameters
    ----------
    where : str
        File, or file and line, that the value stands in.
    path : str
        Key path.
    value : object
        What was written.
    remedy : str
        What would do.

    Raises
    ------
    ChamberFileError
        Always.
    """
    message = f"{where}: {path} = {shown(value)}: {remedy}"
    raise ChamberFileError(printable(message))


def read_value(key, value, where, path):
    """Check one value of the chamber file and convert it to SI.

    Parameters
    ----------
    key : Key
        What the file may say there.
    value : object
        What it says.
    where : str
        File, or file and line, for messages.
    path : str
        Key path, for messages.

    Returns
    -------
    converted : object
        Number [SI], text, pair of numbers [SI], complex index [-] or carrier as written.

    Raises
    ------
    ChamberFileError
        If the value has the wrong type or is outside the key's bounds.

    Examples
    --------
    >>> from scatterfit.apparatus.keys import KEYS_OF
    >>> key = KEYS_OF["beam"]["wavelength_nm"]
    >>> read_value(key, 532.0, "bench.toml", "beam.wavelength_nm")
    5.32e-07
    """
    return _READERS[key.kind](key, value, where, path)


def read_sigma(key, value, where, path):
    """Check a standard uncertainty and convert it to SI.

    Parameters
    ----------
    key : Key
        The key whose value it belongs to.
    value : object
        What the file says.
    where : str
        File, or file and line, for messages.
    path : str
        Key path of the sigma, for messages.

    Returns
    -------
    sigma : float or tuple of float
        Standard uncertainty [SI]; of n and k where two are given for a refractive index.

    Raises
    ------
    ChamberFileError
        If it is not a number, negative or not finite.

    Examples
    --------
    >>> from scatterfit.apparatus.keys import KEYS_OF
    >>> key = KEYS_OF["chamber"]["pressure_kPa"]
    >>> read_sigma(key, 0.1, "bench.toml", "chamber.pressure_kPa_sigma")
    100.0
    """
    if key.kind == "index" and isinstance(value, list):
        if len(value) != 2:
            fail(where, path, value, "must be one number or [sigma of n, sigma of k]")
        return tuple(read_sigma(key, part, where, path) for part in value)
    number = _number(value, where, path)
    if number < 0:
        fail(where, path, value, "a standard uncertainty must not be negative")
    return to_si(number, key.unit)


def _number(value, where, path):
    """Return a finite float, refusing what merely looks like one."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        hint = "must be a number"
        if isinstance(value, str):
            hint += ", not a text"
            if value.replace(",", ".", 1).replace(".", "", 1).strip("+-").isdigit():
                hint += "; write it without quotes and with a decimal point"
        fail(where, path, value, hint)
    if not abs(value) <= _LARGEST:
        fail(where, path, value, "must be a finite number")
    return float(value)


def _read_number(key, value, where, path):
    number = _number(value, where, path)
    if not key.bounds.hold(number):
        unit = f" ({key.unit})" if key.unit else ""
        fail(where, path, value, f"must be {key.bounds}{unit}")
    return to_si(number, key.unit)


def _read_text(_key, value, where, path):
    if not isinstance(value, str) or not value.strip():
        fail(where, path, value, "must be a text in quotes")
    return value.strip()


def _read_column(key, value, where, path):
    name = _read_text(key, value, where, path)
    units = PRESSURE_UNITS if key.table == "pressure" else VOLTAGE_UNITS
    if column_unit(name, units) is None:
        endings = " or ".join(f"_{unit}" for unit in units)
        fail(where, path, value, f"the column's name must carry its unit and end in {endings}")
    return name


def _read_range(key, value, where, path):
    if not isinstance(value, list) or len(value) != 2:
        fail(where, path, value, "must be two numbers, [first, last]")
    first, last = (_number(part, where, path) for part in value)
    if first >= last:
        fail(where, path, value, "the first number must be below the second")
    return to_si(first, key.unit), to_si(last, key.unit)


def _read_polarization(key, value, where, path):
    if isinstance(value, str):
        if value not in POLARIZATIONS:
            words = ", ".join(f'"{word}"' for word in POLARIZATIONS)
            match = nearest(value, POLARIZATIONS)
            meant = f'; did you mean "{match}"?' if match else ""
            fail(where, path, value, f"must be {words} or a number of degrees{meant}")
        return POLARIZATIONS[value]
    return _read_number(key, value, where, path)


def _read_index(_key, value, where, path):
    parts = value if isinstance(value, list) else [value, 0.0]
    if len(parts) != 2:
        fail(where, path, value, "must be one number n, or [n, k]")
    numbers = [_number(part, where, path) for part in parts]
    for number, (name, low, high) in zip(numbers, _INDEX_PARTS, strict=True):
        if not low <= number <= high:
            fail(where, path, value, f"{name} must be at least {low:g} and at most {high:g}")
    return complex(*numbers)


def _read_carrier(_key, value, where, path):
    if isinstance(value, str):
        return _read_text(_key, value, where, path)
    if not isinstance(value, dict) or not value:
        fail(where, path, value, 'must be a name, or a table such as {argon = 0.7, helium = 0.3}')
    return value


def _read_paths(_key, value, where, path):
    if not isinstance(value, list) or not all(isinstance(part, str) for part in value):
        fail(where, path, value, 'must be key paths, such as ["chamber.temperature_K"]')
    return tuple(value)


def _read_matrix(_key, value, where, path):
    if not isinstance(value, list) or not all(isinstance(row, list) for row in value):
        fail(where, path, value, "must be rows of numbers, such as [[1.0, 0.9], [0.9, 1.0]]")
    return tuple(tuple(_number(part, where, path) for part in row) for row in value)


_READERS = {
    "number": _read_number,
    "text": _read_text,
    "column": _read_column,
    "range": _read_range,
    "polarization": _read_polarization,
    "index": _read_index,
    "carrier": _read_carrier,
    "key paths": _read_paths,
    "matrix": _read_matrix,
}
