"""What is found in the images: where the phantom lies, the figures, and what could not be measured."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane
from qa.records.scans import Acquisition

__all__ = [
    "CrossSection",
    "Measurement",
    "NotLocated",
    "NotMeasured",
    "Outcome",
    "Picture",
    "Pose",
    "Region",
]

_NOTHING: Mapping[str, Any] = MappingProxyType({})


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
