"""Units at the edge: what a name's suffix says, and the way to SI and back.

Every key of the chamber file and every column of a trace carries its unit as a suffix:
``wavelength_nm``, ``gain_V_m``, ``scatter1_mV``. Inside, all is SI.
"""

import math

from scatterfit.errors import InvalidInputError

UNITS = {
    "nm": (1.0, 1e9),
    "um": (1.0, 1e6),
    "mm": (1.0, 1e3),
    "mm3": (1.0, 1e9),
    "deg": (math.pi, 180.0),
    "V": (1.0, 1.0),
    "mV": (1.0, 1e3),
    "V_m": (1.0, 1.0),
    "s": (1.0, 1.0),
    "ms": (1.0, 1e3),
    "us": (1.0, 1e6),
    "Pa": (1.0, 1.0),
    "hPa": (1e2, 1.0),
    "mbar": (1e2, 1.0),
    "kPa": (1e3, 1.0),
    "bar": (1e5, 1.0),
    "Torr": (101325.0, 760.0),
    "K": (1.0, 1.0),
    "per_cm3": (1e6, 1.0),
    "kg_m3": (1.0, 1.0),
    "N_m": (1.0, 1.0),
    "mm2_s": (1.0, 1e6),
    "kJ_mol": (1e3, 1.0),
    "J_mol_K": (1.0, 1.0),
    "mW_m_K": (1.0, 1e3),
    "uPa_s": (1.0, 1e6),
    "g_mol": (1.0, 1e3),
    "": (1.0, 1.0),
}
"""Suffix to (numerator, denominator) of its size in SI.

Two numbers, so that 532 nm is 532 / 1e9 m, correctly rounded, and not 532 times an inexact 1e-9.
The torr is 1/760 of the standard atmosphere (BIPM, SI brochure, 8th edition, table 8).
"""

TIME_UNITS = ("s", "ms", "us")
"""Suffixes a time column may have."""

VOLTAGE_UNITS = ("V", "mV")
"""Suffixes an optical column may have."""

PRESSURE_UNITS = ("kPa", "Pa", "hPa", "mbar", "bar", "Torr")
"""Suffixes a pressure column may have."""


def to_si(value, unit):
    """Convert from a unit of the edge to SI.

    Parameters
    ----------
    value : float or ndarray
        Size in ``unit`` [unit].
    unit : str
        A suffix of ``UNITS``.

    Returns
    -------
    converted : float or ndarray
        The same size [SI].

    Raises
    ------
    InvalidInputError
        If the unit is not a known one.

    Examples
    --------
    >>> to_si(532.0, "nm")
    5.32e-07
    >>> to_si(760.0, "Torr")
    101325.0
    """
    numerator, denominator = _scale(unit)
    return value * numerator / denominator


def from_si(value, unit):
    """Convert from SI to a unit of the edge, the inverse of `to_si`.

    Parameters
    ----------
    value : float or ndarray
        Size in SI [SI].
    unit : str
        A suffix of ``UNITS``.

    Returns
    -------
    converted : float or ndarray
        The same size [unit].

    Raises
    ------
    InvalidInputError
        If the unit is not a known one.

    Examples
    --------
    >>> from_si(70000.0, "kPa")
    70.0
    """
    numerator, denominator = _scale(unit)
    return value * denominator / numerator


def _scale(unit):
    try:
        return UNITS[unit]
    except KeyError:
        message = f"unit {unit!r} is not known; known are {', '.join(filter(None, UNITS))}"
        raise InvalidInputError(message) from None


def column_unit(name, allowed):
    """Return the unit that a trace column's name ends in.

    Parameters
    ----------
    name : str
        Column name, such as ``scatter1_V``.
    allowed : tuple of str
        Suffixes to look for, such as ``VOLTAGE_UNITS``.

    Returns
    -------
    unit : str or None
        The suffix without its underscore; ``None`` where the name ends in none of them.

    Examples
    --------
    >>> column_unit("scatter1_mV", VOLTAGE_UNITS)
    'mV'
    >>> column_unit("scatter1", VOLTAGE_UNITS) is None
    True
    """
    stem, _, unit = name.rpartition("_")
    return unit if stem and unit in allowed else None
