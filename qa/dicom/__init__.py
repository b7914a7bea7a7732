"""DICOM in: the outside world becomes arrays with geometry; nothing past this room knows a DICOM tag."""

from collections.abc import Callable, Iterable
from pathlib import Path

from qa.dicom.identity import Header, looks_like_a_person
from qa.records import Reading

__all__ = ["Header", "looks_like_a_person", "read"]


def read(
    paths: Path | str | Iterable[Path | str],
    admit: Callable[[Header], str | None] | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Reading:
    """Read files, or folders with all that is below them, into acquisitions.

    Each file is read, parsed and decoded once. A file need not end in .dcm. Below a folder, hidden files, DICOMDIR and side
    files that are no DICOM (.txt, .json, .pdf and the like) are passed over in silence; every other file is either part of an
    acquisition or refused with a reason. Nothing that a file holds raises an exception, and no reason repeats a name, number
    or date of a person. A path, though, is repeated as it stands.

    Parameters
    ----------
    paths
        A path or several.
    admit
        Asked once a file, before its pixels are decoded; gives back None to take the file or the reason to refuse it.
        Without it, whatever looks like a patient's image is refused (`looks_like_a_person`).
    progress
        Told how many files are done, and of how many.

    Returns
    -------
    Reading
        Acquisitions in order of time; repeats (series, or temporal positions of one, of the same study, geometry, settings,
        kind and echo) are one acquisition.

    Raises
    ------
    UsageError
        A path does not exist or may not be looked into.
    """
    from qa.dicom.reading import read_files

    return read_files(paths, admit, progress)
