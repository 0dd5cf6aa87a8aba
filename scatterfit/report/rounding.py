"""The one rule for printed numbers: two digits of uncertainty, the value to the same decimal."""

from decimal import ROUND_HALF_UP, Context, Decimal
from math import isfinite

from scatterfit.errors import InvalidInputError

NOT_DETERMINED = "not determined"
"""What stands in place of a number that the data do not give."""

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_WIDE = Context(prec=700)  # any two floats differ by at most 632 decimal places
_LARGEST_PLAIN = 5
_SMALLEST_PLAIN = -4


def format_quantity(value, sigma, unit=""):
    """Return a value with its standard uncertainty as text.

    The uncertainty keeps two significant digits and the value is rounded to the same decimal.
    A power of ten is set apart where the digits would otherwise not all be significant (last
    kept digit at a hundred or above), or where the number is large or small.

    Parameters
    ----------
    value : float or None
        Value [in unit]; ``None`` is not determined.
    sigma : float or None
        Standard uncertainty, >= 0 [in unit]; ``None`` is not known.
    unit : str
        Unit as keys spell it, for example ``um`` or ``1/cm3``; printed by ``pretty_unit``.

    Returns
    -------
    text : str
        For example ``1.7925 ± 0.0013 µm``.

    Raises
    ------
    InvalidInputError
        If the value is not finite, or the uncertainty is negative or not finite.

    Examples
    --------
    >>> format_quantity(1.79245, 0.00132, "um")
    '1.7925 ± 0.0013 µm'
    >>> format_quantity(4.1104e6, 1.234e6, "1/(cm3 s)")
    '(4.1 ± 1.2)×10⁶ cm⁻³ s⁻¹'
    >>> format_quantity(5842.7, 117.0, "1/cm3")
    '5840 ± 120 cm⁻³'
    >>> format_quantity(269.07, 0.0, "K")
    '269.07 K (no sigma stated)'
    >>> format_quantity(None, None, "um")
    'not determined'
    """
    if value is None:
        return NOT_DETERMINED
    if sigma is None:
        return f"{format_number(value, unit)} (uncertainty {NOT_DETERMINED})"
    _check_finite("value", value)
    _check_finite("sigma", sigma)
    if sigma < 0:
        message = f"sigma must not be negative, but it is {sigma:g}"
        raise InvalidInputError(message)
    if sigma == 0:
        return f"{format_number(value, unit, digits=5)} (no sigma stated)"
    place = _last_place(sigma)
    number, error = Decimal(repr(float(value))), Decimal(repr(float(sigma)))
    power = max(_rounded(number, place).adjusted(), _rounded(error, place).adjusted())
    if place < 2 and _SMALLEST_PLAIN < power < _LARGEST_PLAIN:
        return _with_unit(f"{_plain(number, place)} ± {_plain(error, place)}", unit)
    digits = f"{_plain(number.scaleb(-power), place - power)} ± "
    digits += _plain(error.scaleb(-power), place - power)
    return _with_unit(f"({digits})×10{str(power).translate(_SUPERSCRIPT)}", unit)


def format_number(value, unit="", digits=4):
    """Return a number without an uncertainty of its own as text.

    Parameters
    ----------
    value : float or None
        Value [in unit]; ``None`` is not determined.
    unit : str
        Unit as keys spell it.
    digits : int
        Significant digits kept at most; trailing zeros are dropped.

    Returns
    -------
    text : str
        For example ``99.98 ms``.

    Raises
    ------
    InvalidInputError
        If the value is not finite.

    Examples
    --------
    >>> format_number(99.98000000000027, "ms")
    '99.98 ms'
    >>> format_number(120000.0, "1/cm3")
    '1.2×10⁵ cm⁻³'
    >>> format_number(None)
    'not determined'
    """
    if value is None:
        return NOT_DETERMINED
    _check_finite("value", value)
    number = Decimal(repr(float(value)))
    if number == 0:
        return _with_unit("0", unit)
    number = _rounded(number, number.adjusted() - digits + 1)
    power = number.adjusted()
    if _SMALLEST_PLAIN < power < _LARGEST_PLAIN:
        return _with_unit(_trimmed(number), unit)
    mantissa = _trimmed(number.scaleb(-power))
    return _with_unit(f"{mantissa}×10{str(power).translate(_SUPERSCRIPT)}", unit)


def pretty_unit(unit):
    """Return a unit as print spells it.

    Parameters
    ----------
    unit : str
        Factors joined by blanks, with one ``/`` before those that divide; brackets where several
        do, digits for powers.

    Returns
    -------
    text : str
        With ``µ`` for a leading ``u``, superscripts for powers.

    Examples
    --------
    >>> pretty_unit("um2/s"), pretty_unit("1/(cm3 s)"), pretty_unit("percent")
    ('µm² s⁻¹', 'cm⁻³ s⁻¹', '%')
    """
    if unit == "percent":
        return "%"
    above, _, below = unit.partition("/")
    factors = [_factor(name, 1) for name in above.split() if name != "1"]
    factors += [_factor(name, -1) for name in below.strip("()").split()]
    return " ".join(factors)


def _factor(name, sign):
    base = name.rstrip("0123456789")
    power = sign * int(name[len(base) :] or 1)
    spelled = f"µ{base[1:]}" if base in {"um", "us"} else base
    return spelled if power == 1 else spelled + str(power).translate(_SUPERSCRIPT)


def _with_unit(digits, unit):
    return f"{digits} {pretty_unit(unit)}".rstrip()


def _check_finite(name, value):
    if not isfinite(value):
        message = f"{name} must be finite, but it is {value}; use None where there is no number"
        raise InvalidInputError(message)


def _last_place(sigma):
    """Return the decimal place of the second significant digit, after rounding to it."""
    error = Decimal(repr(float(sigma)))
    place = error.adjusted() - 1
    carried = _rounded(error, place).adjusted() > error.adjusted()
    return place + 1 if carried else place


def _rounded(number, place):
    return number.quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_UP, context=_WIDE)


def _plain(number, place):
    """Return a number rounded at a decimal place, without an exponent or a negative zero."""
    rounded = _rounded(number, place)
    return f"{abs(rounded) if rounded == 0 else rounded:f}"


def _trimmed(number):
    text = f"{number:f}"
    return text.rstrip("0").rstrip(".") if "." in text else text
