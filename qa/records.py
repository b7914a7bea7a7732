"""The records that travel from room to room: frozen, complete, and free of behaviour.

What arrives becomes a `Series`; repeats of one series become an `Acquisition`; where the phantom lies is a `Pose`; what is
found is a `Measurement` or a `NotMeasured` with its reason; all of one acquisition is an `Outcome`; held against a limit it
is a `Verdict`. Conventions for axes and units are those of `qa.geometry`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime
from pathlib import Path
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane

__all__ = [
    "CONFORMITIES",
    "Acquisition",
    "Baseline",
    "Conformity",
    "CrossSection",
    "DecisionRule",
    "Event",
    "EventKind",
    "History",
    "ImageKind",
    "Judged",
    "Limit",
    "Measurement",
    "NotLocated",
    "NotMeasured",
    "Outcome",
    "Picture",
    "Pose",
    "Reading",
    "RecordedAcquisition",
    "Refused",
    "Region",
    "Scanner",
    "Series",
    "Session",
    "Settings",
    "SourceFile",
    "Verdict",
]

ImageKind = Literal["magnitude", "phase", "real", "imaginary", "other"]
Conformity = Literal["pass", "conditional pass", "conditional fail", "fail"]
CONFORMITIES: tuple[Conformity, ...] = ("pass", "conditional pass", "conditional fail", "fail")
DecisionRule = Literal["simple", "guarded"]
EventKind = Literal["service", "repair", "replacement", "upgrade", "calibration", "protocol change", "downtime", "note"]
_NOTHING: Mapping[str, Any] = MappingProxyType({})


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


@dataclass(frozen=True)
class CrossSection:
    """The outline of the phantom's body in one slice, as a circle fitted to its sub-pixel edge.

    `slice_index` counts from 0; centre and radius are in-plane mm. `rms_mm` is the scatter of the edge about the circle,
    `edge_fraction` the share of the circumference on which an edge was found and kept.
    """

    slice_index: int
    centre_mm: tuple[float, float]
    radius_mm: float
    u_centre_mm: float
    u_radius_mm: float
    rms_mm: float
    edge_fraction: float


@dataclass(frozen=True, eq=False)
class Pose:
    """Where the phantom lies.

    Attributes
    ----------
    centre_patient : (3,) float
        The body's centre, patient mm. Where the slices cannot show it along an axis (one slice through a cylinder), the
        middle of the stack stands in, and `u_centre_mm` says so by being None for that axis.
    orientation : (3, 3) float
        Columns are the phantom's x, y and z axes in patient coordinates.
    rotation_deg, tilt_deg : float
        Turn about the phantom's axis against its nominal set-up, and angle between its axis and the slice normal.
    u_centre_mm : tuple of float or None
        Standard uncertainty of the centre along the image's x, y and normal; None where it could not be found.
    u_rotation_deg, u_tilt_deg : float or None
        None where the phantom cannot show them.
    sections : tuple of CrossSection
        The body's outline in each slice that shows it, in slice order.
    remarks : tuple of str
        What a technologist should know of the set-up, in plain sentences.
    """

    centre_patient: Floats
    orientation: Floats
    rotation_deg: float
    tilt_deg: float
    u_centre_mm: tuple[float | None, float | None, float | None]
    u_rotation_deg: float | None
    u_tilt_deg: float | None
    sections: tuple[CrossSection, ...]
    remarks: tuple[str, ...] = ()

    def to_phantom(self, points_patient: Floats) -> Floats:
        """Map patient mm, shape (..., 3), to the phantom's frame."""
        return (points_patient - self.centre_patient) @ self.orientation

    def to_patient(self, points_phantom: Floats) -> Floats:
        """Map the phantom's mm, shape (..., 3), to patient mm."""
        return self.centre_patient + points_phantom @ self.orientation.T

    def section(self, slice_index: int) -> CrossSection | None:
        """Return the body's outline in a slice (counted from 0), None where the slice does not show it."""
        return next((s for s in self.sections if s.slice_index == slice_index), None)


@dataclass(frozen=True)
class NotLocated:
    """Why the phantom was not found, in words a technologist can act on."""

    reason: str


@dataclass(frozen=True)
class Region:
    """A place where a figure was read, so that a report can draw it.

    `points` are in-plane mm (x, y): the corners of a polygon, the ends of a line, or, for a circle, its centre;
    `radius_mm` belongs to circles alone. `slice` counts from 1, as in `Measurement`.
    """

    name: str
    shape: Literal["circle", "polygon", "line"]
    slice: int
    points: tuple[tuple[float, float], ...]
    radius_mm: float | None = None


@dataclass(frozen=True)
class Measurement:
    """One figure.

    `slice` counts from 1 along the slice normal; None where no one slice is meant. `details` holds plain JSON values.
    """

    quantity: str
    value: float
    unit: str
    standard_uncertainty: float
    method: str
    method_version: int
    slice: int | None = None
    details: Mapping[str, Any] = field(default_factory=lambda: _NOTHING)
    regions: tuple[Region, ...] = ()


@dataclass(frozen=True)
class NotMeasured:
    """What could not be measured, and the plain reason."""

    quantity: str
    reason: str


@dataclass(frozen=True, eq=False)
class Outcome:
    """All that came of one acquisition; `pose` is None where the phantom was not found."""

    acquisition: Acquisition
    phantom: str
    pose: Pose | None
    measurements: tuple[Measurement, ...]
    not_measured: tuple[NotMeasured, ...]
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class Limit:
    """A tolerance limit as a person sets it: what it applies to, its bounds, its warning levels, its rule and its source.

    Selectors narrow it down; the most specific limit that fits wins (`qa.judge.limits`). Bounds of one limit that are
    given in several ways all hold. An absent selector or bound is None.

    Attributes
    ----------
    quantity, scanner, phantom, coil, protocol : str
        Shell patterns; "*" fits all.
    field_strength_T : float or None
        Fits a scanner within 10 % of it: headers write 1.494 or 2.893 T for 1.5 and 3 T.
    field_strength_below_T : float or None
        Fits a scanner below 90 % of it, so that "below 3 T" leaves out a 2.893 T one.
    slice_thickness_mm : float or None
        Fits acquisitions of this nominal slice thickness, within 1 %.
    lower, upper : float or None
        Absolute bounds, in the quantity's unit.
    nominal, plus_minus : float or None
        A two-sided bound; without `nominal` the true dimension of the phantom stands in for it.
    lower_percent_of_baseline, upper_percent_of_baseline : float or None
        Bounds as a share of the baseline in force.
    per_day : float or None
        Largest change a day against the session before, either way, in the quantity's unit.
    warn_lower, warn_upper, warn_plus_minus, warn_percent_of_baseline, warn_per_day : float or None
        Levels inside the bounds at which a person is told; `warn_percent_of_baseline` below 100 is a lower level,
        above 100 an upper one.
    rule : DecisionRule
        "simple", or "guarded": the expanded uncertainty must fit inside too.
    source : str
        Where the figures come from, with the edition.
    key : str
        What the record calls this limit, stable from version to version.
    shipped : bool
        A published default that came with the program: any limit of the department that fits comes before it.
    """

    quantity: str
    scanner: str = "*"
    phantom: str = "*"
    coil: str = "*"
    protocol: str = "*"
    field_strength_T: float | None = None
    field_strength_below_T: float | None = None
    slice_thickness_mm: float | None = None
    lower: float | None = None
    upper: float | None = None
    nominal: float | None = None
    plus_minus: float | None = None
    lower_percent_of_baseline: float | None = None
    upper_percent_of_baseline: float | None = None
    per_day: float | None = None
    warn_lower: float | None = None
    warn_upper: float | None = None
    warn_plus_minus: float | None = None
    warn_percent_of_baseline: float | None = None
    warn_per_day: float | None = None
    rule: DecisionRule = "simple"
    source: str = ""
    key: str = ""
    shipped: bool = False


@dataclass(frozen=True)
class Baseline:
    """What a quantity was when a person accepted it, on one scanner with one phantom, protocol and coil.

    Attributes
    ----------
    scanner_name, quantity : str
        Whose baseline it is.
    value : float
        Median of the sessions it rests on, or the value set by hand.
    standard_uncertainty : float
        Of that value.
    scatter : float or None
        Scaled median absolute deviation of single sessions; None where set by hand without one.
    sessions : int
        How many sessions it rests on; 0 where set by hand.
    since : datetime.date
        First day it is in force: it never judges anything earlier.
    phantom, protocol, coil : str
        Shell patterns, as in `Limit`.
    method : str
        How it came about, in words.
    """

    scanner_name: str
    quantity: str
    value: float
    standard_uncertainty: float
    scatter: float | None
    sessions: int
    since: date
    phantom: str = "*"
    protocol: str = "*"
    coil: str = "*"
    method: str = ""


@dataclass(frozen=True)
class Event:
    """Something that was done to a scanner, on a day or, for planned downtime, from `day` to `until`, both included.

    `quantities` are the ones concerned, none meaning all; `restarts_baseline` says that what came before no longer counts.
    """

    scanner_name: str
    day: date
    kind: EventKind
    text: str
    quantities: tuple[str, ...] = ()
    restarts_baseline: bool = False
    until: date | None = None


@dataclass(frozen=True)
class Verdict:
    """A measurement held against a limit.

    `limit` is the sentence a report prints ("at most 2.5 %"); `lower` and `upper` are what was applied, None where open.
    `probability` is that of conformity (JCGM 106), None where no uncertainty is stated; `guard_band` the expanded
    uncertainty that the rule "guarded" keeps from the limit; `warned` that a value within its limits is at or beyond a
    warning level; `limit_key` names the limit among those in force.
    """

    quantity: str
    conformity: Conformity
    lower: float | None
    upper: float | None
    limit: str
    rule: str
    source: str
    probability: float | None = None
    guard_band: float = 0.0
    warn_lower: float | None = None
    warn_upper: float | None = None
    warned: bool = False
    limit_key: str = ""


@dataclass(frozen=True)
class Judged:
    """A measurement as the record keeps it; `verdict` is None where no limit applies."""

    measurement: Measurement
    verdict: Verdict | None


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


@dataclass(frozen=True, eq=False)
class Picture:
    """One image with the regions that figures were read in, for a report to draw.

    `pixels` is (R, C) float32; `slice` counts from 1; every region lies in that slice.
    """

    title: str
    pixels: NDArray[np.float32]
    plane: Plane
    slice: int
    regions: tuple[Region, ...]
