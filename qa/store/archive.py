"""Files on disk: the archive of what was taken in, and the folder of what was refused.

Nothing is ever overwritten or lost: a file is copied under its final name only when complete, the copy is compared by hash,
and the original leaves the inbox last. A crash between two steps leaves a file in two places, never in none.
Names are built from identifiers and hashes alone, because a folder or file name given by a sender may hold a person's name.
"""

import hashlib
import os
import re
import shutil
from datetime import date
from pathlib import Path

from qa.disk import why_not_written, write_new
from qa.errors import FaultError
from qa.records import SourceFile

__all__ = ["archive_path", "clear_empty_folders", "file_away", "refuse_file", "release"]


def _safe(identifier: str) -> str:
    """Return the identifier where it is a plain one, else a hash of it: it becomes part of a path."""
    if re.fullmatch(r"[0-9.]{1,64}", identifier) and identifier.strip("."):
        return identifier
    return hashlib.sha256(identifier.encode("utf-8", "replace")).hexdigest()[:32]


def archive_path(archive: Path, scanner: str, day: date, series_uid: str, file: SourceFile) -> Path:
    """Return where a file belongs: by scanner, date and series, named by its SOP Instance UID."""
    return archive / scanner / day.isoformat() / _safe(series_uid) / f"{_safe(file.sop_instance_uid)}.dcm"


def _sha256(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _write_new(target: Path, content: bytes) -> bool:
    try:
        return write_new(target, content)
    except OSError as error:
        raise FaultError(f"{target}: could not be written: {why_not_written(error)}.") from error


def file_away(file: SourceFile, target: Path, *, move: bool) -> Path:
    """Put one file into the archive and return its place there.

    Parameters
    ----------
    file : SourceFile
        The file as it was read, with the hash of the bytes that were measured.
    target : pathlib.Path
        From `archive_path`; where another file holds that name, the hash is added to it.
    move : bool
        Take the original out of the inbox once the copy is complete and compared.

    Raises
    ------
    FaultError
        The file changed since it was read, or the disk failed.
    """
    try:
        content = file.path.read_bytes()
    except OSError as error:
        raise FaultError(f"{file.path}: could not be read again ({error.strerror}): run again.") from error
    if hashlib.sha256(content).hexdigest() != file.sha256:
        raise FaultError(
            f"{file.path}: changed while it was being measured: wait until the transfer is complete, then run again."
        )
    if not _write_new(target, content) and _sha256(target) != file.sha256:
        target = target.with_name(f"{target.stem}_{file.sha256[:12]}.dcm")
        _write_new(target, content)
    if move:
        release(file.path, file.sha256, target)
    return target


def release(original: Path, sha256: str, kept: Path) -> None:
    """Take a file out of the inbox, but only when the very same bytes are kept elsewhere.

    Raises
    ------
    FaultError
        The kept copy differs, or the inbox cannot be changed.
    """
    if original.resolve() == kept.resolve():
        return
    try:
        if _sha256(kept) != sha256:
            raise FaultError(f"{kept}: is not what was taken in: restore it from a backup; the original stays in the inbox.")
        original.unlink(missing_ok=True)
    except OSError as error:
        raise FaultError(
            f"{original}: could not be taken out of the inbox ({error.strerror}): mend its permissions."
        ) from error


def refuse_file(original: Path, refused: Path, day: date, reason: str) -> Path:
    """Move a file from the inbox to the refused folder, with its reason in a .txt beside it.

    Returns
    -------
    pathlib.Path
        Its new place, named by the hash of its content. What is not a plain file (a pipe, a link that leads nowhere) or
        cannot be read has no content to keep: it stays where it is.

    Raises
    ------
    FaultError
        The disk failed; the original stays.
    """
    if original.is_symlink() or not original.is_file() or not os.access(original, os.R_OK):
        return original
    try:
        sha256 = _sha256(original)
        suffix = original.suffix if re.fullmatch(r"\.[A-Za-z0-9]{1,5}", original.suffix) else ""
        target = refused / day.isoformat() / f"{sha256[:16]}{'.data' if suffix == '.txt' else suffix}"
        target.parent.mkdir(parents=True, exist_ok=True)
        _write_new(target.with_name(f"{sha256[:16]}.txt"), f"{reason}\n".encode())
        if target.exists() and _sha256(target) == sha256:
            original.unlink()
        else:
            shutil.move(original, target)
    except OSError as error:
        raise FaultError(
            f"{refused}: a refused file could not be moved there ({error.strerror}): mend permissions or free space."
        ) from error
    return target


def clear_empty_folders(inbox: Path) -> None:
    """Remove folders left empty below the inbox; one that still receives files is not empty and stays."""
    for folder in sorted((p for p in inbox.rglob("*") if p.is_dir() and not p.is_symlink()), reverse=True):
        try:
            folder.rmdir()
        except OSError:
            continue
