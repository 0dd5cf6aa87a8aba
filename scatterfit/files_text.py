"""Values written as text: in the ``#`` lines of a trace, in ``pulses.csv``, after ``--set``."""

import tomllib

from scatterfit.errors import ChamberFileError


def delimiter_of(header_line):
    """Return what separates the columns of a table.

    Parameters
    ----------
    header_line : str
        The line of column names.

    Returns
    -------
    delimiter : str
        Tab, semicolon or comma, whichever of them comes first in this list.

    Examples
    --------
    >>> delimiter_of("time_ms;scatter1_V")
    ';'
    """
    return next((mark for mark in "\t;" if mark in header_line), ",")


def parse_scalar(text, *, decimal_comma=False):
    """Return the value that a piece of text stands for.

    Numbers, and everything that TOML can write, become that; any other text stays a text, so
    that ``water`` and ``7732-18-5`` need no quotes.

    Parameters
    ----------
    text : str
        What was written after ``=`` or in a cell.
    decimal_comma : bool
        Whether ``297,15`` is a number.

    Returns
    -------
    value : object
        Number, text, list, table or truth value.

    Examples
    --------
    >>> parse_scalar("2e5"), parse_scalar("[1.33, 0.0]"), parse_scalar("water # or heavy water")
    (200000.0, [1.33, 0.0], 'water')
    >>> parse_scalar("297,15", decimal_comma=True)
    297.15
    """
    text = text.strip()
    number = text.replace(",", ".", 1) if decimal_comma else text
    for candidate in (number, number.partition("#")[0].strip()):
        if "_" not in candidate:
            try:
                return float(candidate)
            except ValueError:
                pass
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except (tomllib.TOMLDecodeError, KeyError):
        return text.partition(" #")[0].strip()


def parse_assignment(text, where="--set"):
    """Return key path and value of ``KEY=VALUE``.

    Parameters
    ----------
    text : str
        Such as ``chamber.temperature_K=297.15``.
    where : str
        What messages call the origin.

    Returns
    -------
    path : str
        Key path, not checked.
    value : object
        The value.

    Raises
    ------
    ChamberFileError
        If there is no key or no ``=``.

    Examples
    --------
    >>> parse_assignment("chamber.temperature_K=297.15")
    ('chamber.temperature_K', 297.15)
    """
    path, equals, written = text.partition("=")
    if not equals or not path.strip() or not written.strip():
        message = f"{where} {text!r}: must be KEY=VALUE, such as chamber.temperature_K=297.15"
        raise ChamberFileError(message)
    return path.strip(), parse_scalar(written)
