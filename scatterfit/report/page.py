"""One self-contained HTML page about a night, from its ledger alone.

Script, style and data stand in the page, which loads nothing and works without a network. Names
and texts reach it as data and are shown as text, so that markup in a file name stays a name.
"""

import html
import json
import os
import re
from contextlib import suppress
from importlib import resources
from pathlib import Path

from scatterfit.apparatus.values import printable
from scatterfit.errors import ScatterfitError
from scatterfit.overnight.results import open_results
from scatterfit.report.page_data import page_data

_MARKS = re.compile("@(FRAMES|TITLE|CSS|JS|DATA)@")
_UNSAFE = {"<": "\\u003c", ">": "\\u003e", "&": "\\u0026", "\u2028": "\\u2028",
           "\u2029": "\\u2029"}


class PageError(ScatterfitError):
    """A page that cannot be written."""


def write_page(ledger, path, *, live_seconds=0.0, thumbs=None):
    """Write the page of a night, in one step so that a reader sees it whole.

    Parameters
    ----------
    ledger : str or Path
        The ledger.
    path : str or Path
        The page.
    live_seconds : float
        How often an open page looks for news in this file [s]; 0: never.
    thumbs : dict, optional
        Small pictures made for an earlier page of the ledger; new ones are put into it.

    Returns
    -------
    path : Path
        The page.

    Raises
    ------
    LedgerError
        If the ledger cannot be read.
    PageError
        If the page cannot be written.
    """
    path = Path(path)
    text = page_text(page_data(open_results(ledger, excluded=True), live_seconds, thumbs))
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        part.write_text(text, encoding="utf-8", newline="\n")
        part.replace(path)
    except OSError as error:
        message = f"{path}: cannot be written: {error.strerror or error}"
        raise PageError(printable(message)) from error
    finally:
        with suppress(OSError):
            part.unlink(missing_ok=True)
    return path


def page_text(data):
    """Return the page as HTML.

    Parameters
    ----------
    data : mapping
        As `page_data` gives it.

    Returns
    -------
    text : str
        A whole document.
    """
    parts = {
        "FRAMES": "file: 'self'" if data["live_seconds"] else "'none'",
        "TITLE": html.escape(data["title"]),
        "CSS": _file("page.css"),
        "JS": _file("page.js"),
        "DATA": embedded_json(data),
    }
    return _MARKS.sub(lambda mark: parts[mark.group(1)], _file("page.html"))


def embedded_json(data):
    r"""Return JSON that may stand in a script element, whatever its texts hold.

    Parameters
    ----------
    data : object
        What JSON can hold.

    Returns
    -------
    text : str
        Without any character that could end the element.

    Examples
    --------
    >>> embedded_json({"trace": "</script>"})
    '{"trace":"\\u003c/script\\u003e"}'
    """
    text = json.dumps(data, allow_nan=False, ensure_ascii=False, separators=(",", ":"))
    return re.sub("[<>&\u2028\u2029]", lambda found: _UNSAFE[found.group()], text)


def _file(name):
    folder = resources.files("scatterfit.report") / "page_files"
    return (folder / name).read_text(encoding="utf-8")
