"""Reports on disk: dated names, never overwritten, never half written."""

import contextlib
import errno
import os
import tempfile
from datetime import date
from pathlib import Path

from qa.errors import FaultError

__all__ = ["file_stem", "save_report", "why_not_written"]

_CAUSES = {
    errno.ENOSPC: "the disk is full: free some space and run the command again",
    errno.EDQUOT: "the disk quota is used up: free some space and run the command again",
    errno.EACCES: "there is no permission to write there: give this user write permission on the folder",
    errno.EPERM: "there is no permission to write there: give this user write permission on the folder",
    errno.EROFS: "the disk is read-only: make it writable or move the department folder",
    errno.ENOTDIR: "a part of the path is a file and not a folder: move that file away",
    errno.EEXIST: "a file stands where the folder should be: move that file away",
}
_ALLOWED = frozenset("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-.")
_LONGEST_NAME_BYTES = 120


def file_stem(scanner: str) -> str:
    """Turn a scanner's name into a part of a file name that every file system takes; letters of any script stay."""
    text = "".join(c if c in _ALLOWED or c.isalnum() else "-" for c in scanner).strip("-.") or "scanner"
    return text.encode()[:_LONGEST_NAME_BYTES].decode(errors="ignore")


def why_not_written(error: OSError) -> str:
    """Say what kept a file from being written, and what to do, as the end of a sentence."""
    return _CAUSES.get(error.errno or 0, f"the system says {error.strerror or error}: see to it and run the command again")


def _link_new(temporary: Path, target: Path) -> bool:
    """Give a finished file its name; False where the name is taken."""
    try:
        os.link(temporary, target)
    except FileExistsError:
        return False
    except OSError as error:
        if error.errno not in {errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK}:
            raise
        # A file system without hard links (some network shares): reserve the name first, then move over the reservation.
        try:
            os.close(os.open(target, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o644))
        except FileExistsError:
            return False
        temporary.replace(target)
    return True


def _sync_folder(folder: Path) -> None:
    """Make a new name survive a power cut, where the system lets a folder be synced."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


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
    target = year / f"{stem}.pdf"
    temporary: Path | None = None
    try:
        year.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile(dir=year, prefix=f".{stem}-", suffix=".part", delete=False) as file:
            temporary = Path(file.name)
            file.write(pdf)
            file.flush()
            os.fsync(file.fileno())
        temporary.chmod(0o644)
        number = 1
        while not _link_new(temporary, target):
            number += 1
            target = year / f"{stem}_{number}.pdf"
    except OSError as error:
        raise FaultError(f"The report {target} was not written: {why_not_written(error)}.") from error
    finally:
        if temporary is not None:
            with contextlib.suppress(OSError):
                temporary.unlink(missing_ok=True)
    _sync_folder(year)
    return target
