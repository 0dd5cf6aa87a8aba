"""Ctrl-C: the first asks for an end after the pulses at work, the second ends at once."""

import signal
import threading


class Stopper:
    """Notes Ctrl-C, and the request of a batch system to end, in place of an exception.

    Use it in a ``with`` statement; outside of the main thread it never notes anything.

    Parameters
    ----------
    announce : callable
        Called once with no arguments at the first request.
    """

    def __init__(self, announce=lambda: None):
        self.asked = False
        self._announce = announce
        self._before = {}

    def __enter__(self):
        """Begin to take notes."""
        if threading.current_thread() is threading.main_thread():
            for number in (signal.SIGINT, signal.SIGTERM):
                self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *_):
        """Put things back as they were."""
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _note(self, _number, _frame):
        if self.asked:
            raise KeyboardInterrupt
        self.asked = True
        self._announce()
