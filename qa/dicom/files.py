"""Which files there are: folders searched recursively, each file once, nothing that could hang."""

import os
import stat
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from qa.dicom.refusal import RefusalError
from qa.errors import UsageError

__all__ = ["LARGEST_FILE", "Found", "find", "read_bytes"]

LARGEST_FILE = 2**31
"""Bytes; a larger file is refused unread."""

_SIDE_FILES = frozenset(
    [
        ".bmp",
        ".bval",
        ".bvec",
        ".cfg",
        ".conf",
        ".csv",
        ".css",
        ".db",
        ".dtd",
        ".doc",
        ".docx",
        ".gif",
        ".gz",
        ".htm",
        ".html",
        ".ini",
        ".ipynb",
        ".jpeg",
        ".jpg",
        ".js",
        ".json",
        ".license",
        ".lock",
        ".log",
        ".mat",
        ".md",
        ".nii",
        ".npy",
        ".npz",
        ".odt",
        ".parquet",
        ".pdf",
        ".png",
        ".pptx",
        ".ps",
        ".py",
        ".rst",
        ".rtf",
        ".sh",
        ".sql",
        ".svg",
        ".tar",
        ".tif",
        ".tiff",
        ".toml",
        ".tsv",
        ".txt",
        ".xls",
        ".xlsx",
        ".xml",
        ".yaml",
        ".yml",
        ".zip",
    ]
)
_SIDE_NAMES = frozenset({"dicomdir", "thumbs.db", "desktop.ini", "license", "readme", "lockfile", "version", "makefile"})
_PREFIX = b"DICM"
# The first element of a data set without preamble: group 0002 or 0008 in little endian, or in big endian.
_BARE_STARTS = (b"\x08\x00", b"\x02\x00", b"\x00\x08", b"\x00\x02")


@dataclass(frozen=True)
class Found:
    """A file to try; `asked_for` when the caller named it, so that it is never passed over in silence."""

    path: Path
    asked_for: bool


def find(paths: Path | str | Iterable[Path | str]) -> list[Found]:
    """List the files under some paths, in order of path, each once.

    Hidden files and folders, DICOMDIR and the like are left out below a folder, links that lead in a circle are followed once.

    Raises
    ------
    UsageError
        A path does not exist.
    """
    wanted = [Path(paths)] if isinstance(paths, str | Path) else [Path(p) for p in paths]
    found: dict[tuple[int, int] | str, Found] = {}
    for path in wanted:
        try:
            is_folder = stat.S_ISDIR(path.stat().st_mode)
        except (OSError, ValueError) as error:
            if isinstance(error, PermissionError):
                raise UsageError(f"{path} cannot be looked into: permission is denied") from None
            raise UsageError(f"{path} does not exist: give a folder of DICOM files, or such a file") from None
        for each in _walk(path) if is_folder else [Found(path, asked_for=True)]:
            key = _identity(each.path)
            if key not in found or (each.asked_for, str(found[key].path)) > (found[key].asked_for, str(each.path)):
                found[key] = each
    return sorted(found.values(), key=lambda each: str(each.path))


def _identity(path: Path) -> tuple[int, int] | str:
    """Return what two paths to one file share."""
    try:
        facts = path.stat()
    except OSError:
        return str(path)
    return facts.st_dev, facts.st_ino


def _walk(folder: Path) -> Iterator[Found]:
    seen: set[tuple[int, int]] = set()
    for where, folders, files in os.walk(folder, followlinks=True):
        here = os.stat(where)  # noqa: PTH116 (os.walk yields text; a Path each would cost more than the call)
        if (here.st_dev, here.st_ino) in seen:
            folders.clear()
            continue
        seen.add((here.st_dev, here.st_ino))
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        for name in files:
            if not name.startswith(".") and name.lower() not in _SIDE_NAMES:
                yield Found(Path(where, name), asked_for=False)


def read_bytes(file: Found) -> bytes | None:
    """Read a whole file once; None where it is a side file (a text, a picture, a table) to be passed over in silence.

    Raises
    ------
    RefusalError
        It is no DICOM file, or cannot be read.
    """
    try:
        facts = file.path.stat()
        if not stat.S_ISREG(facts.st_mode):
            raise RefusalError("not a regular file")
        is_side_file = not file.asked_for and file.path.suffix.lower() in _SIDE_FILES
        if facts.st_size > LARGEST_FILE and not is_side_file:
            raise RefusalError(f"larger than {LARGEST_FILE // 2**30} GiB: too large for a phantom series")
        with file.path.open("rb") as stream:
            start = stream.read(132)
            if start[128:] != _PREFIX:
                if is_side_file:
                    return None
                if not start:
                    raise RefusalError("the file is empty")
                if not start.startswith(_BARE_STARTS):
                    raise RefusalError("not a DICOM file")
            stream.seek(0)
            return stream.read()
    except FileNotFoundError:
        raise RefusalError("the link leads nowhere, or the file has gone") from None
    except PermissionError:
        raise RefusalError("it may not be read: permission is denied") from None
    except OSError as error:
        raise RefusalError(f"it could not be read: {os.strerror(error.errno or 0)}") from None
