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
    """Many acquisitions and their n figures as columns, so that ten years of a fleet can be judged at once.

    Rows stand in order of scanner, day, time and place in the acquisition. What is not here (details, regions, the verdict's
    sentence) is read for single rows by acquisition and position.

    Attributes
    ----------
    acquisitions : tuple of RecordedAcquisition
        Without figures, files, series and what was not measured; equal settings and scanners are one object.
    quantities, methods : tuple
        Names of the quantities, and (method, version) pairs, that the rows point to.
    acquisition, quantity, method : (n,) int
        Indices into these.
    position : (n,) int
        Place in the acquisition, from 1.
    values, uncertainties : (n,) float
        In the quantity's unit; standard uncertainties.
    conformity : (n,) int
        Index into `CONFORMITIES`; -1 where no limit was applied.
    lower, upper : (n,) float
        Bounds that were applied; NaN where open.
    """

    acquisitions: tuple[RecordedAcquisition, ...]
    quantities: tuple[str, ...]
    methods: tuple[tuple[str, int], ...]
    acquisition: NDArray[np.int64]
    position: NDArray[np.int64]
    quantity: NDArray[np.int64]
    method: NDArray[np.int64]
    values: Floats
    uncertainties: Floats
    conformity: NDArray[np.int64]
    lower: Floats
    upper: Floats
