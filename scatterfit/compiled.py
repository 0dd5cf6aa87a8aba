"""Whether the innermost loops run as compiled code.

The array code of the stages is what is read and what a single pulse runs. Over a night the same
loops, compiled by numba, take a fraction of the time; loading them costs what a few pulses take,
so that whoever has many pulses asks for it. Both give the same numbers to the last digits.
"""

_choice = {"on": False}


def use_compiled(wanted=True):
    """Let the innermost loops run as compiled code from here on, or no longer.

    Parameters
    ----------
    wanted : bool
        Whether they should; numba must be there if so.

    Returns
    -------
    wanted : bool
        The same.
    """
    _choice["on"] = bool(wanted)
    return _choice["on"]


def compiled():
    """Return whether the innermost loops run as compiled code.

    Returns
    -------
    used : bool
        ``True`` after :func:`use_compiled`.

    Examples
    --------
    >>> compiled()
    False
    """
    return _choice["on"]
