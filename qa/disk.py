"""Files that appear complete or not at all, and never in the place of another."""

import contextlib
import errno
import os
import tempfile
from pathlib import Path

__all__ = ["why_not_written", "write_new"]

_CAUSES = {
    errno.ENOSPC: "the disk is full: free some space and run the command again",
    errno.EDQUOT: "the disk quota is used up: free some space and run the command again",
    errno.EACCES: "there is no permission to write there: give this user write permission on the folder",
    errno.EPERM: "there is no permission to write there: give this user write permission on the folder",
    errno.EROFS: "the disk is read-only: make it writable or move the department folder",
    errno.ENOTDIR: "a part of the path is a file and not a folder: move that file away",
    errno.EEXIST: "a file stands where the folder should be: move that file away",
}


def why_not_written(error: OSError) -> str:
    """Say what kept a file from being written, and what to do, as the end of a sentence."""
    return _CAUSES.get(error.errno or 0, f"the system says {error.strerror or error}: see to it and run the command again")


def write_new(target: Path, content: bytes) -> bool:
    """Write a file that must not exist yet: complete and on disk before it has its name.

    Parameters
    ----------
    target : pathlib.Path
        Its folder is made where it is missing.
    content : bytes
        All of it.

    Returns
    -------
    bool
        False where `target` exists already; it is then left as it is.

    Raises
    ------
    OSError
        The disk is full, or the folder cannot be written to; nothing is left behind.
    """
    temporary: Path | None = None
    target.parent.mkdir(parents=True, exist_ok=True)
    try:
        with tempfile.NamedTemporaryFile(dir=target.parent, prefix=".", suffix=".part", delete=False) as file:
            temporary = Path(file.name)
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        temporary.chmod(0o644)
        if not _link_new(temporary, target):
            return False
    finally:
        if temporary is not None:
            with contextlib.suppress(OSError):
                temporary.unlink(missing_ok=True)
    _sync_folder(target.parent)
    return True


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
