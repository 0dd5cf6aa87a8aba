"""Kernel nodes on disk: one ``.npz`` without pickles a node, in the user's cache folder.

A cache must never be in the way: what cannot be read is built again, what cannot be written is
not kept, without a word.
"""

import contextlib
import os
import re
import sys
import tempfile
import zipfile
import zlib
from collections.abc import Mapping
from functools import lru_cache
from pathlib import Path

import numpy as np

_UNSOUND = (
    OSError,
    ValueError,
    KeyError,
    EOFError,
    AttributeError,
    RuntimeError,
    MemoryError,
    zipfile.BadZipFile,
    zlib.error,
)
"""What reading a damaged or foreign file may raise."""
_MOST_FILES = 500
_MOST_IN_MEMORY = 24
_NAME = re.compile(r"[0-9a-f]{40}\.npz")


class FolderStore:
    """A folder of kernel nodes, at most 500; several processes may use it at once.

    Parameters
    ----------
    folder : path-like or None
        Where files are kept; made when the first is written. ``None`` keeps nothing.
    """

    def __init__(self, folder: str | os.PathLike | None):
        self.folder = None if folder is None else Path(folder)

    def load(self, key: str) -> dict[str, np.ndarray] | None:
        """Return the arrays saved under a key, or ``None`` where there is no sound file.

        Parameters
        ----------
        key : str
            Name made of letters and digits.

        Returns
        -------
        arrays : dict of str to ndarray, or None
            As they were saved.
        """
        if self.folder is None:
            return None
        path = self.folder / f"{key}.npz"
        try:
            status = path.stat()
            arrays = dict(_read(str(path), (status.st_mtime_ns, status.st_size, status.st_ino)))
        except _UNSOUND:
            return None
        return arrays if str(arrays.pop("key", "")) == key else None

    def save(self, key: str, arrays: Mapping[str, np.ndarray]) -> None:
        """Keep arrays under a key; a folder that cannot be written is left alone.

        The file is written beside its place and moved there in one step, so that another process
        sees a whole file or none.

        Parameters
        ----------
        key : str
            Name made of letters and digits.
        arrays : mapping of str to ndarray
            What to keep.
        """
        if self.folder is None:
            return
        written: str | None = None
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            handle, written = tempfile.mkstemp(prefix=".writing-", dir=self.folder)
            with os.fdopen(handle, "wb") as file:
                np.savez(file, **{**arrays, "key": np.array(key)})
            Path(written).replace(self.folder / f"{key}.npz")
            self._forget_oldest()
        except OSError:
            if written is not None:
                with contextlib.suppress(OSError):
                    Path(written).unlink()

    def _forget_oldest(self):
        """Keep the folder from growing without end: about 150 MB."""
        ours = [path for path in self.folder.iterdir() if _NAME.fullmatch(path.name)]
        if len(ours) > _MOST_FILES:
            ours.sort(key=lambda path: path.stat().st_mtime)
            for path in ours[: len(ours) - _MOST_FILES]:
                path.unlink(missing_ok=True)


@lru_cache(maxsize=_MOST_IN_MEMORY)
def _read(path, stamp):  # noqa: ARG001  (a file that was written anew is read anew)
    """Return the arrays of a file; a night reads the same few again and again."""
    with Path(path).open("rb") as opened:
        file = np.load(opened, allow_pickle=False)
        arrays = {name: file[name] for name in file.files}
    for array in arrays.values():
        array.flags.writeable = False
    return arrays


def default_store() -> FolderStore:
    """Return the user's store.

    ``SCATTERFIT_CACHE`` names the folder; without it, it is ``scatterfit`` in the cache folder of
    the system (``XDG_CACHE_HOME`` where that is set). Where no home is known nothing is kept.

    Returns
    -------
    store : FolderStore
        Ready to use; nothing is made on disk yet.
    """
    named = os.environ.get("SCATTERFIT_CACHE")
    if named:
        return FolderStore(Path(named))
    base = _system_cache()
    return FolderStore(None if base is None else base / "scatterfit")


def _system_cache():
    """Return the system's folder for caches, or ``None`` where no home is known."""
    named = os.environ.get("XDG_CACHE_HOME") or (
        os.environ.get("LOCALAPPDATA") if sys.platform == "win32" else None
    )
    if named:
        return Path(named)
    try:
        home = Path.home()
    except RuntimeError:
        return None
    return home / ("Library/Caches" if sys.platform == "darwin" else ".cache")
