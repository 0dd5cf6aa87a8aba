"""What a terminal shows while a batch or a watch runs: a bar with rate and time left."""

import sys

from scatterfit.overnight.batch import Listener
from scatterfit.report.tally import plan_line


class Screen(Listener):
    """Shows a batch on standard error; the bar only where that is a terminal.

    Parameters
    ----------
    folder : path-like
        The folder of traces.
    """

    def __init__(self, folder):
        self._folder = folder
        self._bar = None
        self._task = None

    def __enter__(self):
        """Return the screen."""
        return self

    def __exit__(self, *_):
        """Take the bar away."""
        if self._bar is not None:
            self._bar.stop()

    def begin(self, catalogue, count):
        """Say what there is to do and start the bar."""
        print(plan_line(self._folder, catalogue), file=sys.stderr)
        if count and sys.stderr.isatty():
            self._bar = _bar()
            self._task = self._bar.add_task("", total=count)
            self._bar.start()

    def pulse(self, _outcome):
        """Move the bar on."""
        if self._bar is not None:
            self._bar.advance(self._task)

    def remark(self, text):
        """Print a line beside the bar."""
        if self._bar is not None:
            self._bar.console.print(text, markup=False, highlight=False)
        else:
            print(text, file=sys.stderr)


def _bar():
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TimeRemainingColumn

    return Progress(
        BarColumn(None), MofNCompleteColumn(), _rate_column(), TimeRemainingColumn(),
        console=Console(file=sys.stderr), speed_estimate_period=10.0,
    )


def _rate_column():
    from rich.progress import ProgressColumn
    from rich.text import Text

    class Rate(ProgressColumn):
        """Pulses a second."""

        def render(self, task):
            """Return the rate as text."""
            speed = task.finished_speed or task.speed
            return Text("" if speed is None else f"{speed:.1f}/s")

    return Rate()
