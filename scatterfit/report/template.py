"""A commented chamber file to start from, made from the table of keys."""

import textwrap

from scatterfit.apparatus.keys import TABLES, key_table

WIDTH = 88
"""Columns of the comments."""

HEAD = """\
scatterfit chamber file: one bench, every key with its unit in its name.

The numbers below are an example that passes `scatterfit check`; put yours in their place. Lines
that start with `# ` and hold a key are optional: take the `# ` away to use one. Any numeric key
NAME may have a sibling NAME_sigma, its standard uncertainty in the same unit; it enters the
uncertainty of the result.

Take care: laser light blinds, also by reflection; a vessel under pressure or vacuum can burst;
alcohol and hydrocarbon vapours burn. Local codes and people licensed for such work decide what
is safe on your bench. This file and this program do not.
"""

NOTES = {
    "beam": "Two colours or two polarizations: write a [[beam]] table for each, with a name, which "
    "the key beam of each detector and of the transmission then states.",
    "vapour": "Say how much vapour there is by exactly one of mole_fraction, "
    "partial_pressure_kPa, saturation_ratio and dew_point_K. The keys from refractive_index on "
    "replace what the program knows of the substance.",
    "pressure": "Without a gauge: delete this table, give chamber.pressure_kPa and use [growth].",
    "detector": "Repeat this table for each detector. At least one detector or the transmission "
    "is needed.",
}
"""What the keys alone do not say, by table."""

_ACTIVE_TABLES = ("beam", "detector", "transmission", "pressure", "vapour", "gas", "chamber")
_ACTIVE_KEYS = {
    "detector": ("gain_V_m", "time_constant_ms", "full_scale_V"),
    "vapour": ("mole_fraction",),
    "chamber": ("pressure_kPa", "path_mm"),
}
_SIGMAS = {
    ("chamber", "temperature_K"): "0.1",
    ("chamber", "pressure_kPa"): "0.5",
    ("vapour", "mole_fraction"): "0.0001",
    ("detector", "angle_deg"): "0.1",
}


def chamber_template():
    """Return the text of a commented chamber file with an example bench.

    Returns
    -------
    text : str
        TOML; every key that exists appears once, those not needed commented out.

    Examples
    --------
    >>> "wavelength_nm = 532.0" in chamber_template()
    True
    """
    blocks = [_comment(HEAD)]
    blocks += [_table(table) for table in TABLES]
    return "\n".join(blocks)


def _table(table):
    active = table.name in _ACTIVE_TABLES
    lines = [_line(active, table.heading, table.doc)]
    for key in (key for key in key_table() if key.table == table.name):
        wanted = key.required or key.name in _ACTIVE_KEYS.get(table.name, ())
        lines.append(_line(active and wanted, f"{key.name} = {key.example}", key.doc))
        sigma = _SIGMAS.get((table.name, key.name))
        if sigma:
            text = f"{key.name}_sigma = {sigma}"
            lines.append(_line(active and wanted, text, "its standard uncertainty"))
    note = _comment(NOTES[table.name] + "\n") if table.name in NOTES else ""
    return note + "\n".join(lines) + "\n"


def _line(active, text, doc):
    start = text if active else f"# {text}"
    return f"{start:<34} # {doc}"


def _comment(text):
    lines = []
    for paragraph in text.split("\n\n"):
        lines += [*textwrap.wrap(paragraph, WIDTH), ""]
    return "".join(f"# {line}".rstrip() + "\n" for line in lines[:-1])
