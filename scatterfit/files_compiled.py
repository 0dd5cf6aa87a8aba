"""Loads the compiled innermost loops, kept between runs in the user's cache folder."""

from functools import lru_cache

from scatterfit.compiled import use_compiled
from scatterfit.files_kernel import default_store


@lru_cache(maxsize=1)
def load_compiled():
    """Let fits in this process use compiled loops from here on.

    Worth its while from a dozen pulses on. The first time on a machine it takes some ten seconds,
    later one. Where numba is missing or broken, or there is no folder in which compiled code can
    be kept, the array code goes on: the numbers are the same.

    Returns
    -------
    used : bool
        Whether compiled loops are used.

    Examples
    --------
    In a script that fits many traces one after the other::

        scatterfit.load_compiled()
        results = [scatterfit.fit_file("bench.toml", trace) for trace in traces]
    """
    folder = default_store().folder
    if folder is None:
        return False
    try:
        _load(str(folder / "compiled"))
    except Exception:  # noqa: BLE001 - whatever is wrong with numba here, fits do without it
        return False
    return use_compiled()


def _load(folder):
    """Load the loops; where their code is kept is settled while their modules are imported."""
    from numba import config  # noqa: PLC0415  (a quarter of a second)

    before, config.CACHE_DIR = config.CACHE_DIR, config.CACHE_DIR or folder
    try:
        from scatterfit.droplet_growth.rounds_compiled import load_rounds  # noqa: PLC0415
        from scatterfit.forward.light_compiled import load_light  # noqa: PLC0415
        from scatterfit.inversion.projection_compiled import load_projection  # noqa: PLC0415
    finally:
        config.CACHE_DIR = before
    load_rounds()
    load_light()
    load_projection()
