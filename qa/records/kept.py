"""What the record gives back."""

from dataclasses import dataclass
from datetime import date, datetime

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.records.figures import NotMeasured
from qa.records.judged import Judged
from qa.records.scans import Scanner, Settings, SourceFile

__all__ = [
    "History",
    "RecordedAcquisition",
    "Session",
]


@dataclass(frozen=True)
class RecordedAcquisition:
    """One acquisition as the record keeps it, with all that is needed to trace each figure."""

    identifier: int
    scanner_name: str
    phantom: str
    phantom_sha256: str
    acquired_at: datetime
    taken_in_at: datetime
    scanner: Scanner
    settings: Settings
    series_uids: tuple[str, ...]
    files: tuple[SourceFile, ...]
    centre_patient: tuple[float, float, float] | None
    rotation_deg: float | None
    tilt_deg: float | None
    judged: tuple[Judged, ...]
    not_measured: tuple[NotMeasured, ...]
    remarks: tuple[str, ...]
    software_version: str
    limits_version: int
    limits_sha256: str


@dataclass(frozen=True)
class Session:
    """All acquisitions of one scanner on one day, in order of time."""

    scanner_name: str
    day: date
    acquisitions: tuple[RecordedAcquisition, ...]


@dataclass(frozen=True, eq=False)
class History:
    """The a acquisitions of one or many scanners and their n figures as columns: ten years of a fleet at once.

    Acquisitions stand in order of scanner, day and time; figures in that of their acquisitions and of their place in them.
    What is not here (unit, details, regions, the verdict) is read for single figures, by identifier and position.

    Attributes
    ----------
    scanner_names, phantoms : tuple of str
        What the acquisitions point to, as do `settings` and `scanners`.
    settings : tuple of Settings
        Without the centre frequency, which is another each time.
    scanners : tuple of Scanner
        What the headers say.
    quantities : tuple of str
        What the figures point to, as do `methods`.
    methods : tuple of (str, int)
        Method and its version.
    identifiers, days : (a,) int
        As in `RecordedAcquisition`; day of the session as proleptic ordinal (`date.toordinal`).
    scanner_name, phantom, setting, scanner : (a,) int
        Indices into the tuples above.
    acquisition : (n,) int
        Index of each figure's acquisition.
    position : (n,) int
        Place in it, from 1.
    quantity, method : (n,) int
        Indices into the tuples above.
    values, uncertainties : (n,) float
        In the quantity's unit; standard uncertainties.
    out : (n,) bool
        Where the verdict is one of `OUT_OF_LIMITS`.
    """

    scanner_names: tuple[str, ...]
    phantoms: tuple[str, ...]
    settings: tuple[Settings, ...]
    scanners: tuple[Scanner, ...]
    quantities: tuple[str, ...]
    methods: tuple[tuple[str, int], ...]
    identifiers: NDArray[np.int64]
    days: NDArray[np.int64]
    scanner_name: NDArray[np.int64]
    phantom: NDArray[np.int64]
    setting: NDArray[np.int64]
    scanner: NDArray[np.int64]
    acquisition: NDArray[np.int64]
    position: NDArray[np.int64]
    quantity: NDArray[np.int64]
    method: NDArray[np.int64]
    values: Floats
    uncertainties: Floats
    out: NDArray[np.bool_]
