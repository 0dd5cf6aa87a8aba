"""The exceptions a user of scatterfit can meet: one root, few children."""


class ScatterfitError(Exception):
    """Root of every error that scatterfit raises on purpose; its text is one line."""


class InvalidInputError(ScatterfitError, ValueError):
    """A number or an array that a function cannot work with."""


class ChamberFileError(ScatterfitError, ValueError):
    """A chamber file or an override that does not describe a bench (exit 2)."""


class TraceError(ScatterfitError, ValueError):
    """A trace that cannot be used (verdict ``failed``)."""


class KernelError(ScatterfitError):
    """A table of Mie cross sections that disagrees with the independent check."""
