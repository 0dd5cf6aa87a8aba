"""A chamber file with some values replaced: the user's own text and comments stay."""

import json
import re
import tomllib

from scatterfit.apparatus.overrides import apply_overrides, split_path
from scatterfit.errors import InvalidInputError

_HEADER = re.compile(r"^\s*\[\[?\s*([A-Za-z_]+)\s*\]\]?\s*(#.*)?$")
_MARK = "# calibrate: "
_WORD = re.compile(r"^[A-Za-z0-9_-]+$")


def revised_chamber(text, changes, correlations, remarks=()):
    """Return a chamber file's text with values replaced and correlations stated.

    Lines that are not touched stay as they are, with their comments. A file whose layout does not
    allow that (dotted keys, tables on one line) is written anew, without comments.

    Parameters
    ----------
    text : str
        The file, TOML.
    changes : dict of str to float
        Key path to new value in the key's unit; ``_sigma`` siblings among them.
    correlations : tuple
        Key paths, and rows of correlation coefficients [-].
    remarks : sequence of str
        Lines for the head of the file; those of an earlier calibration go.

    Returns
    -------
    revised : str
        TOML.

    Raises
    ------
    InvalidInputError
        If the text is not TOML.
    """
    try:
        before = tomllib.loads(text)
    except ValueError as error:
        message = f"not a TOML file: {error}"
        raise InvalidInputError(message) from error
    changes = {path: float(number_text(value)) if isinstance(value, float) else value
               for path, value in changes.items()}
    wanted = apply_overrides(before, changes)
    wanted.pop("correlations", None)
    if correlations[0]:
        wanted["correlations"] = {"of": list(correlations[0]),
                                  "matrix": [list(row) for row in correlations[1]]}
    lines = [line for line in text.splitlines() if not line.startswith(_MARK)]
    lines = _without_table(lines, "correlations")
    for path, value in changes.items():
        lines = _replaced(lines, split_path(path), _value(value))
    if correlations[0]:
        lines += ["", *_correlation_lines(*correlations)]
    head = [f"{_MARK}{remark}" for remark in remarks]
    revised = "\n".join([*head, *lines]).rstrip("\n") + "\n"
    if _parsed(revised) == wanted:
        return revised
    return "\n".join([*head, *_written(wanted)]) + "\n"


def number_text(value):
    """Return a number as TOML spells it, with at most ten digits.

    Parameters
    ----------
    value : float
        Any finite number [any].

    Returns
    -------
    text : str
        With a decimal point or an exponent.

    Examples
    --------
    >>> number_text(60000.0), number_text(0.1 + 0.2), number_text(1.25e-12)
    ('60000.0', '0.3', '1.25e-12')
    """
    return repr(float(f"{float(value):.10g}"))


def _parsed(text):
    try:
        return tomllib.loads(text)
    except ValueError:
        return None


def _blocks(lines):
    """Return (table, first line after its header, end) of every table."""
    starts = [(match.group(1), i) for i, line in enumerate(lines)
              if (match := _HEADER.match(line))]
    ends = [i for _, i in starts[1:]] + [len(lines)]
    return [(name, i + 1, end) for (name, i), end in zip(starts, ends, strict=True)]


def _without_table(lines, table):
    """Return the lines without a table."""
    for name, start, end in reversed(_blocks(lines)):
        if name == table:
            lines = lines[: start - 1] + lines[end:]
    while lines and not lines[-1].strip():
        lines = lines[:-1]
    return lines


def _replaced(lines, parts, text):
    """Return the lines with one value replaced, or added to its table."""
    table, column, name = parts
    for found, start, end in _blocks(lines):
        if found != table or (column and _column(lines[start:end]) != column):
            continue
        for i in range(start, end):
            match = re.match(rf"^(\s*{name}\s*=\s*)([^#]*?)(\s*)(#.*)?$", lines[i])
            if match:
                new = f"{match.group(1)}{text}{match.group(3)}{match.group(4) or ''}"
                return [*lines[:i], new, *lines[i + 1:]]
        place = _place(lines, start, end, name)
        return [*lines[:place], f"{name} = {text}", *lines[place:]]
    return [*lines, "", f"[{table}]", f"{name} = {text}"]


def _place(lines, start, end, name):
    """Return where a new key goes: after its own value if it is a sigma, else at the end."""
    stem = name.removesuffix("_sigma")
    for i in range(start, end):
        if stem != name and re.match(rf"^\s*{stem}\s*=", lines[i]):
            return i + 1
    while end > start and (not lines[end - 1].strip() or lines[end - 1].lstrip().startswith("#")):
        end -= 1
    return end


def _column(lines):
    """Return which column a detector fills."""
    table = _parsed("\n".join(lines)) or {}
    return str(table.get("column", "")).strip()


def _correlation_lines(keys, rows):
    """Return the lines of the table of correlations."""
    lines = ["[correlations]", "of = ["]
    lines += [f"  {json.dumps(key, ensure_ascii=False)}," for key in keys]
    lines += ["]", "matrix = ["]
    lines += [f"  [{', '.join(number_text(value) for value in row)}]," for row in rows]
    return [*lines, "]"]


def _written(mapping):
    """Return the lines of a mapping written anew."""
    lines = []
    for table, content in mapping.items():
        several = content if isinstance(content, list) else [content]
        for one in several:
            lines += [f"[[{table}]]" if isinstance(content, list) else f"[{table}]"]
            lines += [f"{_key(name)} = {_value(value)}" for name, value in one.items()]
            lines += [""]
    return lines[:-1]


def _key(name):
    return name if _WORD.match(name) else json.dumps(name, ensure_ascii=False)


def _value(value):
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_key(k)} = {_value(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_value(part) for part in value) + "]"
    return repr(float(value)) if isinstance(value, float) else repr(value)
