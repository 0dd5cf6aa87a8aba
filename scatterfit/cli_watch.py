"""What the watch command does: a line for each pulse, a page kept up to date."""

import json
import sys
import time
from contextlib import closing
from pathlib import Path

from scatterfit.cli_progress import Screen
from scatterfit.errors import ScatterfitError
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.pool import LocalPool
from scatterfit.overnight.watch import Watcher
from scatterfit.report.page import write_page
from scatterfit.report.tally import plan_line, pulse_line, tally_line

_QUIET_SECONDS = 0.3
_REST_FACTOR = 3.0
_LIVE_SECONDS = 2.0
_thumbs = {}


def watch_folder(plan, out, watching, page=None):
    """Watch a folder until Ctrl-C and print the tally.

    Parameters
    ----------
    plan : Plan
        How the pulses are fitted.
    out : Path
        The ledger.
    watching : Watching
        How the folder is watched.
    page : Path, optional
        Page to keep up to date.
    """
    screen = _Lines(plan.folder)
    keeper = PageKeeper(out, page, screen) if page is not None else None
    watcher = Watcher(plan, out, watching, listener=screen,
                      news=keeper.keep if keeper is not None else None)
    how = "looking at it again and again" if watcher.polls else "told by the system"
    print(f"watching {plan.folder} ({how}); Ctrl-C ends it", file=sys.stderr)
    try:
        watcher.run()
    finally:
        if keeper is not None:
            keeper.close()
    with closing(Ledger(out)) as ledger:
        print(tally_line(*ledger.tally()), flush=True)


class _Lines(Screen):
    """Prints a line for each pulse; counts what was stored."""

    def __init__(self, folder):
        super().__init__(folder)
        self.stored = 0

    def begin(self, catalogue, _count):
        """Say what there is to do."""
        print(plan_line(self._folder, catalogue), file=sys.stderr)

    def pulse(self, outcome):
        """Print what came of a pulse."""
        self.stored += 1
        print(pulse_line(outcome.row, json.loads(outcome.result)["reasons"]), flush=True)


class PageKeeper:
    """Writes the page of a ledger again when there are news, in a process of its own.

    Parameters
    ----------
    ledger, page : Path
        From where, and to where.
    screen : _Lines
        Counts the pulses stored, and is told what goes wrong.
    """

    def __init__(self, ledger, page, screen):
        self._ledger, self._page, self._screen = Path(ledger), Path(page), screen
        self._pool = LocalPool(1, numerics=False)
        self._written = -1
        self._future = None
        self._begun = self._next = 0.0
        self._complained = None

    def keep(self):
        """Write the page again where that is due; returns at once."""
        now = time.monotonic()
        if self._future is not None:
            if not self._future.done():
                return
            self._take(self._future)
            self._future = None
            # A page of thousands of pulses takes a while; most of the time is left for fits.
            self._next = now + max(_QUIET_SECONDS, _REST_FACTOR * (now - self._begun))
        if self._screen.stored != self._written and now >= self._next:
            self._written, self._begun = self._screen.stored, now
            self._future = self._pool.submit(write_live_page, self._ledger, self._page)

    def _take(self, future):
        """Say what went wrong with a page, once."""
        try:
            future.result()
        except (ScatterfitError, OSError, RuntimeError) as error:
            if str(error) != self._complained:
                self._screen.remark(str(error))
            self._complained = str(error)

    def close(self):
        """Write the page a last time, as one that waits for no more news."""
        if self._future is not None:
            self._take(self._future)
        self._pool.shutdown()
        try:
            write_page(self._ledger, self._page)
        except ScatterfitError as error:
            self._screen.remark(str(error))


def write_live_page(ledger, page):
    """Write a page that looks for news of itself, in a process that remembers its pictures.

    Parameters
    ----------
    ledger, page : Path
        From where, and to where.
    """
    write_page(ledger, page, live_seconds=_LIVE_SECONDS, thumbs=_thumbs)
