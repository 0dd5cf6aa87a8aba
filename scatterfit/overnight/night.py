"""What a batch and a watch do before their first pulse: check the bench, bind ledger to folder."""

from pathlib import Path

from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.values import printable
from scatterfit.files import read_chamber_mapping
from scatterfit.overnight.catalogue import NoTraceError
from scatterfit.overnight.jobs import hash_of, set_outside, version
from scatterfit.overnight.ledger_file import LedgerError


def check_plan(plan):
    """Refuse a chamber file or a folder that no pulse could be fitted with.

    Parameters
    ----------
    plan : Plan
        How the pulses are to be fitted.

    Returns
    -------
    chamber_sha256 : str
        Hash of the chamber file.

    Raises
    ------
    ChamberFileError
        If the chamber file, with the plan's overrides, does not describe a bench, or the
        folder's ``pulses.csv`` cannot be understood.
    NoTraceError
        If there is no such folder.
    """
    mapping = read_chamber_mapping(plan.chamber)
    apparatus_from_mapping(mapping, str(plan.chamber))
    if plan.overrides:
        changed = apply_overrides(mapping, plan.overrides, "--set")
        apparatus_from_mapping(changed, f"{plan.chamber} with --set")
    if not Path(plan.folder).is_dir():
        what = "is a file" if Path(plan.folder).exists() else "there is no such folder"
        message = printable(f"{plan.folder}: {what}; name the folder that holds the traces")
        raise NoTraceError(message)
    set_outside(Path(plan.folder) / "any", plan.folder, {})  # reads pulses.csv
    return hash_of(plan.chamber)


def bind(ledger, plan, chamber_sha256):
    """Note in the ledger which folder and chamber file it belongs to.

    Parameters
    ----------
    ledger : Ledger
        Open for writing.
    plan : Plan
        How the pulses are to be fitted.
    chamber_sha256 : str
        Hash of the chamber file.

    Raises
    ------
    LedgerError
        If the ledger holds the pulses of another folder: names of traces would mix.
    """
    folder = Path(plan.folder).resolve()
    known = ledger.recall("folder")
    if known is not None and Path(known) != folder and Path(known).is_dir() \
            and not Path(known).samefile(folder):
        message = printable(f"{ledger.path}: holds the pulses of {known}, not of {folder}; choose "
                            "another file with --out")
        raise LedgerError(message)
    text = Path(plan.chamber).read_text(encoding="utf-8-sig", errors="replace")
    ledger.keep_chamber(chamber_sha256, Path(plan.chamber).name, text)
    ledger.remember(folder=printable(str(folder)), chamber_sha256=chamber_sha256,
                    chamber=printable(str(plan.chamber)), version=version())
