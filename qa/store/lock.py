"""Never two runs at once in one department folder.

The lock is the operating system's, on an open file: it goes when the process goes, however it ends, so that no stale lock is
left after a crash or a power cut. What stands in the file only tells a person who holds it.
"""

import contextlib
import os
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import datetime
from importlib import import_module
from pathlib import Path
from typing import Any

from qa.errors import FaultError

__all__ = ["LOCK_NAME", "run_lock"]

LOCK_NAME = ".evenfield.lock"
_POLL_S = 0.2


@contextmanager
def run_lock(folder: Path, now: datetime, *, wait_s: float = 0.0) -> Iterator[None]:
    """Hold the department folder's lock for as long as the block lasts.

    Parameters
    ----------
    folder : pathlib.Path
        The department folder.
    now : datetime.datetime
        When this run began; another run that meets the lock tells it.
    wait_s : float
        How long to wait for another run to end.

    Raises
    ------
    FaultError
        Another run is at work, or the folder cannot be written to.
    """
    path = folder / LOCK_NAME
    try:
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
    except OSError as error:
        raise FaultError(f"{path}: cannot be opened ({error.strerror}): check the folder and its permissions.") from error
    try:
        until = time.monotonic() + wait_s
        while not _try(descriptor):
            if time.monotonic() >= until:
                raise FaultError(f"{folder}: another run is at work here{_holder(path)}: nothing was done; try again later.")
            time.sleep(min(_POLL_S, max(wait_s, 0.01)))
        text = f"process {os.getpid()} on {socket.gethostname()} since {now.isoformat(timespec='seconds')}\n"
        with contextlib.suppress(OSError):  # a full disk may keep the text from being written; the lock holds all the same
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, text.encode("utf-8", "replace"), 0) if hasattr(os, "pwrite") else os.write(
                descriptor, text.encode("utf-8", "replace")
            )
        yield
    finally:
        with contextlib.suppress(OSError):
            os.ftruncate(descriptor, 0)
        os.close(descriptor)


def _holder(path: Path) -> str:
    try:
        said = path.read_text("utf-8", errors="replace").strip()
    except OSError:
        return ""
    return f" ({said[:200]})" if said else ""


def _try(descriptor: int) -> bool:
    """Take the lock if nobody holds it."""
    try:
        import fcntl
    except ImportError:
        return _try_windows(descriptor)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True


def _try_windows(descriptor: int) -> bool:
    msvcrt: Any = import_module("msvcrt")
    try:
        # One byte far beyond the text, which stays readable for others.
        os.lseek(descriptor, 1 << 30, os.SEEK_SET)
        msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
    except OSError:
        return False
    finally:
        os.lseek(descriptor, 0, os.SEEK_SET)
    return True
