"""Fetch images back from the archive, with the regions that figures were read in."""

from collections import Counter

from qa.pipeline.department import Department
from qa.quantities import QUANTITIES
from qa.records import Acquisition, Picture, RecordedAcquisition, Region

__all__ = ["picture_of", "pictures_of"]

_MOST = 3
"""Pictures of one acquisition: ramps, lattice and uniform section have one each."""


def pictures_of(department: Department, recorded: RecordedAcquisition) -> tuple[Picture, ...]:
    """Give the slices of an acquisition in which most was read, at most three, in order of slice.

    Parameters
    ----------
    department : Department
        Whose archive holds the files.
    recorded : RecordedAcquisition
        As the record keeps it.

    Returns
    -------
    tuple of Picture
        Empty where nothing was read anywhere, or the archive no longer has the files.
    """
    read_in = Counter(region.slice for judged in recorded.judged for region in judged.measurement.regions)
    if not read_in:
        return ()
    acquisition = _fetch(department, recorded)
    if acquisition is None:
        return ()
    chosen = sorted(number for number, _ in read_in.most_common(_MOST))
    return tuple(p for number in chosen if (p := _picture(acquisition, recorded, number)) is not None)


def picture_of(department: Department, recorded: RecordedAcquisition, quantity: str) -> Picture | None:
    """Give the slice that a quantity was read in, with its regions alone; None where there is none."""
    found = next((j.measurement for j in recorded.judged if j.measurement.quantity == quantity), None)
    if found is None or not found.regions:
        return None
    acquisition = _fetch(department, recorded)
    return None if acquisition is None else _picture(acquisition, recorded, found.slice or found.regions[0].slice, quantity)


def _fetch(department: Department, recorded: RecordedAcquisition) -> Acquisition | None:
    """Read an acquisition's files again; what was taken in once is not asked for its identity a second time."""
    from qa.dicom import read

    paths = [department.site.folder / file.path for file in recorded.files]
    present = [path for path in paths if path.is_file()]
    if not present:
        return None
    reading = read(present, admit=lambda _: None)
    for acquisition in reading.acquisitions:
        first = acquisition.first
        if first.series_instance_uid in recorded.series_uids and first.settings.echo_ms == recorded.settings.echo_ms:
            return acquisition
    return None


def _picture(acquisition: Acquisition, recorded: RecordedAcquisition, number: int, quantity: str = "") -> Picture | None:
    if not 1 <= number <= len(acquisition.planes):
        return None
    regions: list[Region] = []
    names: list[str] = []
    for judged in recorded.judged:
        measurement = judged.measurement
        here = [region for region in measurement.regions if region.slice == number]
        if here and quantity in {"", measurement.quantity}:
            names.append(measurement.quantity)
            regions += [region for region in here if region not in regions]
    title = f"{recorded.phantom}, slice {number}"
    if quantity:
        title = f"{QUANTITIES[quantity].title}: {title}"
    return Picture(title, acquisition.pixels[number - 1], acquisition.planes[number - 1], number, tuple(regions))
