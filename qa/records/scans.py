"""What arrives: files, what their headers say, stacks of images, and repeats of them."""

from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Plane

__all__ = [
    "Acquisition",
    "ImageKind",
    "Reading",
    "Refused",
    "Scanner",
    "Series",
    "Settings",
    "SourceFile",
]

ImageKind = Literal["magnitude", "phase", "real", "imaginary", "other"]


@dataclass(frozen=True)
class SourceFile:
    """One file that was taken in."""

    path: Path
    sop_instance_uid: str
    sha256: str


@dataclass(frozen=True)
class Refused:
    """A file or series that was not taken in, and why; the reason never holds a name, number or date of a person."""

    path: Path
    reason: str


@dataclass(frozen=True)
class Scanner:
    """What the header says of the scanner; an absent value is an empty string or None."""

    manufacturer: str = ""
    model: str = ""
    station: str = ""
    serial: str = ""
    field_strength_T: float | None = None
    software: str = ""


@dataclass(frozen=True)
class Settings:
    """What the header says of the protocol; an absent value is an empty string or None.

    `pixel_mm` is (row spacing, column spacing), `matrix` is (rows, columns), `phase_encode` the image axis along which phase
    is encoded: "column" when it runs along a column (so ghosts appear above and below), "row" when along a row.
    `frequency_MHz` is in MHz whatever unit the file used. `parallel_imaging` and `filtered` tell what the header says
    of processing that changes the noise (None: it says nothing).
    """

    protocol: str = ""
    sequence: str = ""
    slice_thickness_mm: float | None = None
    slice_spacing_mm: float | None = None
    pixel_mm: tuple[float, float] = (1.0, 1.0)
    matrix: tuple[int, int] = (0, 0)
    repetition_ms: float | None = None
    echo_ms: float | None = None
    flip_deg: float | None = None
    averages: float | None = None
    bandwidth_hz_per_pixel: float | None = None
    phase_encode: Literal["row", "column"] | None = None
    receive_coil: str = ""
    frequency_MHz: float | None = None
    parallel_imaging: bool | None = None
    filtered: bool | None = None


@dataclass(frozen=True, eq=False)
class Series:
    """One stack of parallel images taken at one time, of one kind and one echo.

    A file or DICOM series that holds several echoes, kinds or temporal positions becomes several of these.

    Attributes
    ----------
    series_instance_uid, study_instance_uid : str
        DICOM unique identifiers.
    description : str
        Series description.
    acquired_at : datetime or None
        Local time on the scanner's clock, without a time zone.
    kind : ImageKind
        Magnitude, phase and so on; only magnitude images are measured for signal.
    temporal_position : int
        1 for the first time point, counted within the DICOM series.
    scanner, settings
        What the header says.
    planes : tuple of Plane
        (S,) in order of position along the common normal.
    pixels : (S, R, C) float32
        Rescaled values in the same order; read-only.
    files : tuple of SourceFile
        Where they came from; a multi-frame file appears once.
    remarks : tuple of str
        Plain sentences on what was odd but not wrong.
    """

    series_instance_uid: str
    study_instance_uid: str
    description: str
    acquired_at: datetime | None
    kind: ImageKind
    temporal_position: int
    scanner: Scanner
    settings: Settings
    planes: tuple[Plane, ...]
    pixels: NDArray[np.float32]
    files: tuple[SourceFile, ...] = ()
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Acquisition:
    """One or more repeats of one series: same study, geometry and settings, in order of acquisition."""

    repeats: tuple[Series, ...]
    remarks: tuple[str, ...] = ()

    @property
    def first(self) -> Series:
        """The earliest repeat, on which all but the difference methods work."""
        return self.repeats[0]

    @property
    def planes(self) -> tuple[Plane, ...]:
        """The planes shared by all repeats."""
        return self.first.planes

    @property
    def pixels(self) -> NDArray[np.float32]:
        """(S, R, C) pixels of the earliest repeat."""
        return self.first.pixels

    @property
    def scanner(self) -> Scanner:
        """What the header says of the scanner."""
        return self.first.scanner

    @property
    def settings(self) -> Settings:
        """What the header says of the protocol."""
        return self.first.settings


@dataclass(frozen=True)
class Reading:
    """All that a folder held: acquisitions that can be measured, and what was refused."""

    acquisitions: tuple[Acquisition, ...]
    refused: tuple[Refused, ...]
