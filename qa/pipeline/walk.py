"""From files to outcomes: read, locate, measure. Nothing is stored."""

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

from qa.phantoms import Phantom, load_phantom
from qa.records import Acquisition, NotLocated, Outcome, Reading, Refused

__all__ = ["Progress", "examine", "measure_paths", "measure_reading", "no_progress"]

Progress = Callable[[Sequence[Any], str], Iterable[Any]]
"""Wraps the items of a long loop; the title is what a progress bar says."""


def no_progress(items: Sequence[Any], _title: str) -> Iterable[Any]:
    """Show nothing."""
    return items


def examine(acquisition: Acquisition, phantom: Phantom) -> Outcome:
    """Locate the phantom in one acquisition and measure all that it allows.

    Parameters
    ----------
    acquisition : Acquisition
        One or more repeats.
    phantom : Phantom
        What was scanned.

    Returns
    -------
    Outcome
        Measurements, and what could not be measured with the reason for each.
    """
    from qa.locate import locate
    from qa.measure import measure

    pose = locate(acquisition, phantom)
    measurements, not_measured = measure(acquisition, pose, phantom)
    if isinstance(pose, NotLocated):
        return Outcome(
            acquisition, phantom.name, None, measurements, not_measured, (f"{phantom.name} was not found: {pose.reason}",)
        )
    return Outcome(acquisition, phantom.name, pose, measurements, not_measured, pose.remarks)


def measure_reading(reading: Reading, phantom: str | Path | Phantom, progress: Progress = no_progress) -> tuple[Outcome, ...]:
    """Measure every acquisition that was read.

    Parameters
    ----------
    reading : Reading
        From `qa.dicom.read`.
    phantom : str, pathlib.Path or Phantom
        A shipped phantom's name, the path of a definition, or a definition.

    Returns
    -------
    tuple of Outcome
        One for each acquisition.

    Raises
    ------
    PhantomError
        There is no such phantom, or its definition is wrong.
    """
    definition = phantom if isinstance(phantom, Phantom) else load_phantom(phantom)
    return tuple(examine(one, definition) for one in progress(reading.acquisitions, "Measuring"))


def measure_paths(
    paths: Sequence[Path], phantom: str | Path, progress: Progress = no_progress
) -> tuple[tuple[Outcome, ...], tuple[Refused, ...]]:
    """Read folders and files and measure every acquisition in them.

    Raises
    ------
    UsageError
        A path does not exist, or there is no such phantom.
    """
    from qa.dicom import read

    definition = load_phantom(phantom)
    reading = read(list(paths))
    return measure_reading(reading, definition, progress), reading.refused
