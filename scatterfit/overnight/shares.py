"""Whether a file lies on a network share, where SQLite's and a watcher's usual ways fail."""

from pathlib import Path, PurePosixPath

_MOUNTS = Path("/proc/self/mountinfo")
_NETWORK = ("nfs", "cifs", "smb", "9p", "afs", "ceph", "glusterfs", "lustre", "gpfs", "beegfs",
            "panfs", "pvfs", "orangefs", "ncpfs", "davfs", "vboxsf", "virtiofs", "prl_fs", "drvfs",
            "fuse.sshfs", "fuse.s3fs", "fuse.rclone", "fuse.glusterfs", "fuse.ceph", "fuse.gvfs",
            "fuse.vmhgfs", "fuse.mergerfs", "fuse.lustre", "fuse.davfs", "fuse.gcsfuse")


def on_network_share(path):
    """Return whether a path is on a file system that another machine may write to.

    Parameters
    ----------
    path : str or Path
        A file or folder; it need not exist.

    Returns
    -------
    shared : bool
        ``False`` where the system does not say.
    """
    place = Path(path).absolute()
    if str(place).startswith("\\\\"):
        return True
    try:
        mounts = _MOUNTS.read_text(encoding="utf-8", errors="surrogateescape")
        place = place.resolve()
    except (OSError, RuntimeError):
        return False
    return is_network_kind(kind_of_mount(mounts, place.as_posix()))


def is_network_kind(kind):
    """Return whether a kind of file system reaches over a network.

    Parameters
    ----------
    kind : str
        As Linux names it.

    Returns
    -------
    shared : bool
        Whether it does.

    Examples
    --------
    >>> is_network_kind("nfs4"), is_network_kind("ext4")
    (True, False)
    """
    return kind.startswith(_NETWORK)


def kind_of_mount(mounts, path):
    r"""Return the kind of file system that a path is on.

    Parameters
    ----------
    mounts : str
        Text of ``/proc/self/mountinfo``.
    path : str
        Absolute path.

    Returns
    -------
    kind : str
        Of the nearest mount above the path, the last one where several share a place; empty
        where there is none.

    References
    ----------
    .. [1] proc(5), "/proc/pid/mountinfo": the fifth field is the place, the kind follows the
       lone hyphen; blanks in a place are written ``\040``.

    Examples
    --------
    >>> text = ("21 1 8:1 / / rw - ext4 /dev/sda rw" + chr(10)
    ...         + "40 21 0:35 / /data rw shared:9 - nfs4 box:/lab rw")
    >>> kind_of_mount(text, "/data/night/a.csv"), kind_of_mount(text, "/database")
    ('nfs4', 'ext4')
    """
    best, kind = -1, ""
    target = PurePosixPath(path)
    for line in mounts.splitlines():
        head, _, tail = line.partition(" - ")
        fields = head.split()
        if len(fields) < 5 or not tail:
            continue
        place = PurePosixPath(_unescaped(fields[4]))
        depth = len(place.parts)
        if target.is_relative_to(place) and depth >= best:
            best, kind = depth, tail.split()[0]
    return kind


def _unescaped(text):
    for code, character in (("\\040", " "), ("\\011", "\t"), ("\\012", "\n"), ("\\134", "\\")):
        text = text.replace(code, character)
    return text
