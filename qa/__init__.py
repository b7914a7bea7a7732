"""Evenfield keeps MR scanners honest: phantom images in, figures with uncertainty out.

The public face, for a notebook::

    from qa import read, measure
    outcomes = measure(read("folder"), phantom="sphere-170")

gives the same figures as `evenfield measure`, as frozen records (`qa.records.Outcome`).
"""

import sys
from types import ModuleType
from typing import TYPE_CHECKING, Any

from qa.version import __version__

if TYPE_CHECKING:
    from collections.abc import Iterable
    from pathlib import Path

    from qa.phantoms import Phantom
    from qa.records import Outcome, Reading

__all__ = ["__version__", "measure", "read"]


def read(paths: "Path | str | Iterable[Path | str]") -> "Reading":
    """Read folders and files of DICOM images.

    Parameters
    ----------
    paths : path or iterable of paths
        Folders are searched recursively.

    Returns
    -------
    qa.records.Reading
        Acquisitions, and what was refused with the reason.

    Raises
    ------
    qa.errors.UsageError
        A path does not exist.
    """
    from qa.dicom import read as read_dicom

    return read_dicom(paths)


def measure(reading: "Reading", phantom: "str | Path | Phantom") -> "tuple[Outcome, ...]":
    """Measure every acquisition of a reading.

    Parameters
    ----------
    reading : qa.records.Reading
        From `read`.
    phantom : str, pathlib.Path or qa.phantoms.Phantom
        A shipped phantom's name, the path of a definition, or a definition.

    Returns
    -------
    tuple of qa.records.Outcome
        One for each acquisition: measurements, and what could not be measured with the reason.

    Raises
    ------
    qa.errors.PhantomError
        There is no such phantom, or its definition is wrong.
    """
    from qa.pipeline.walk import measure_reading

    return measure_reading(reading, phantom)


class _PublicFace(ModuleType):
    """Keeps the name `measure` for the function when the room `qa.measure` is imported, which would bind it to the room."""

    def __setattr__(self, name: str, value: Any) -> None:  # noqa: ANN401 - any module attribute
        if name != "measure":
            super().__setattr__(name, value)


sys.modules[__name__].__class__ = _PublicFace
