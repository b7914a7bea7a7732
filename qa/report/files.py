"""Reports on disk: dated names, never overwritten, never half written."""

from datetime import date
from pathlib import Path

from qa.disk import why_not_written, write_new
from qa.errors import FaultError

__all__ = ["file_stem", "save_report"]

_ALLOWED = frozenset("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-.")
_LONGEST_NAME_BYTES = 120


def file_stem(scanner: str) -> str:
    """Turn a scanner's name into a part of a file name that every file system takes; letters of any script stay."""
    text = "".join(c if c in _ALLOWED or c.isalnum() else "-" for c in scanner).strip("-.") or "scanner"
    return text.encode()[:_LONGEST_NAME_BYTES].decode(errors="ignore")


def save_report(folder: Path, scanner: str, day: date, pdf: bytes) -> Path:
    """Write a report as ``folder/YEAR/SCANNER_DATE.pdf``.

    A name that is taken is never written over: the second report of a day becomes ``SCANNER_DATE_2.pdf`` and so on. The file
    appears complete or not at all, whatever happens while it is written and however many write at once.

    Parameters
    ----------
    folder : pathlib.Path
        The department's `reports` folder; made where it is missing.
    scanner : str
        The scanner's name.
    day : date
        The day the report is dated with.
    pdf : bytes
        The document.

    Returns
    -------
    pathlib.Path
        Where it lies.

    Raises
    ------
    qa.errors.FaultError
        The disk is full, permission is missing, or the system failed otherwise.
    """
    year = folder / f"{day.year:04d}"
    stem = f"{file_stem(scanner)}_{day.isoformat()}"
    target, number = year / f"{stem}.pdf", 1
    try:
        while not write_new(target, pdf):
            number += 1
            target = year / f"{stem}_{number}.pdf"
    except OSError as error:
        raise FaultError(f"The report {target} was not written: {why_not_written(error)}.") from error
    return target
