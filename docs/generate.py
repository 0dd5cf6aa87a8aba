"""Write the generated parts of the documentation; a test checks that they are up to date.

Run from the checkout: ``python docs/generate.py``.
"""

from pathlib import Path

from typer.main import get_command

from scatterfit.apparatus.keys import TABLES, key_table
from scatterfit.cli import app

DOCS = Path(__file__).resolve().parent
START, END = "<!-- generated: {} -->", "<!-- end of generated -->"


def command_line():
    """Return the description of every command, as the command line's own help has it."""
    group = get_command(app)
    blocks = [_options("scatterfit", group)]
    blocks += [_options(f"scatterfit {name}", command) for name, command in group.commands.items()]
    return "\n\n".join(blocks)


def _options(name, command):
    words = [p.metavar or p.name.upper() for p in command.params if p.param_type_name == "argument"]
    help_text, _, example = command.help.partition("\n\n")
    kind, _, call = " ".join(example.split()).partition(": ")
    lines = [f"## `{' '.join([name, *words])}`", "", " ".join(help_text.split()), ""]
    lines += [f"{kind}: `{call}`", ""]
    lines += ["| option | meaning | default |", "|---|---|---|"]
    for parameter in command.params:
        spelled = parameter.metavar or parameter.name.upper()
        if parameter.param_type_name == "option":
            flag = getattr(parameter, "is_flag", False)
            spelled = f"{', '.join(parameter.opts)}{'' if flag else f' {_value(parameter)}'}"
        lines.append(f"| `{spelled}` | {parameter.help} | {_default(parameter)} |")
    return "\n".join(lines)


def _value(parameter):
    return parameter.metavar or "N"


def _default(parameter):
    if parameter.required:
        return "required"
    empty = parameter.default in (None, False, "", ()) or callable(parameter.default)
    return "" if empty else f"`{parameter.default}`"


def chamber_keys():
    """Return one table of keys for each table of the chamber file."""
    return "\n\n".join(_table(table) for table in TABLES)


def _table(table):
    heading = f"`{table.heading}`" + (f" or `[[{table.name}]]`" if table.several else "")
    needed = "required" if table.required else "optional"
    lines = [f"### {heading}: {table.doc} ({needed})", ""]
    lines += ["| key | meaning | values | example | sigma |", "|---|---|---|---|---|"]
    for key in (key for key in key_table() if key.table == table.name):
        values = str(key.bounds) if key.kind == "number" else key.kind
        if key.required:
            values += ", required"
        elif key.default is not None:
            values += f", {key.default:g} when absent"
        sigma = "yes" if key.takes_sigma else ""
        doc = key.doc.replace("|", "\\|")
        lines.append(f"| `{key.name}` | {doc} | {values} | `{key.example}` | {sigma} |")
    return "\n".join(lines)


PARTS = {"command-line.md": ("command line", command_line),
         "chamber-file.md": ("keys", chamber_keys)}
"""Page to the name of its generated part and the function that makes it."""


def renewed(page):
    """Return a page's text with its generated part made anew."""
    text = (DOCS / page).read_text(encoding="utf-8")
    name, make = PARTS[page]
    before, start, rest = text.partition(START.format(name))
    _, end, after = rest.partition(END)
    if not start or not end:
        message = f"{page}: the marks {START.format(name)} and {END} are needed"
        raise ValueError(message)
    return f"{before}{start}\n\n{make()}\n\n{end}{after}"


if __name__ == "__main__":
    for name in PARTS:
        (DOCS / name).write_text(renewed(name), encoding="utf-8")
