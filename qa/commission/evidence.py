"""The report on disk: a new file of the name that was asked for, never written over another."""

from pathlib import Path

from qa.disk import why_not_written, write_new
from qa.errors import FaultError, UsageError

__all__ = ["check_target", "write_evidence"]


def check_target(path: Path) -> None:
    """Refuse a name that cannot be written before hours of measuring are spent on it.

    Raises
    ------
    UsageError
        The file exists, or its folder does not.
    """
    if path.exists():
        raise UsageError(f"--report: {path} exists and is not written over: give another name.")
    if not path.parent.is_dir():
        raise UsageError(f"--report: there is no folder {path.parent}: make it first.")


def write_evidence(path: Path, pdf: bytes) -> None:
    """Write the report to a new file, whole or not at all.

    Raises
    ------
    FaultError
        The disk is full, permission is missing, or a file of that name has come up meanwhile.
    """
    try:
        if not write_new(path, pdf):
            raise FaultError(f"The report {path} was not written: a file of that name has come up meanwhile: name another.")
    except OSError as error:
        raise FaultError(f"The report {path} was not written: {why_not_written(error)}.") from error
