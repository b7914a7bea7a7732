"""Where figures are read: which slice, the measurement region M, and the records that let a report draw them."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane, disc_overlap
from qa.phantoms import Phantom, Uniform
from qa.quantities import quantity
from qa.records import Acquisition, CrossSection, Measurement, Pose, Region

__all__ = ["Field", "body_slice", "figure", "magnitude_only", "rectangle", "uniform_field"]


def figure(
    name: str,
    value: float,
    standard_uncertainty: float,
    method: tuple[str, int],
    *,
    slice_index: int | None = None,
    details: Mapping[str, Any] | None = None,
    regions: tuple[Region, ...] = (),
) -> Measurement:
    """Make the record of one figure; the unit comes from the table of quantities, the slice is counted from 1."""
    return Measurement(
        quantity=name,
        value=float(value),
        unit=quantity(name).unit,
        standard_uncertainty=float(standard_uncertainty),
        method=method[0],
        method_version=method[1],
        slice=None if slice_index is None else slice_index + 1,
        details=details or {},
        regions=regions,
    )


def magnitude_only(acquisition: Acquisition) -> str:
    """Say why signal is not measured on images that are not magnitude images; an empty string on those that are."""
    kind = acquisition.first.kind
    return "" if kind == "magnitude" else f"signal is measured on magnitude images only; these are {kind} images"


@dataclass(frozen=True, eq=False)
class Field:
    """One uniform slice with its measurement region M, cut to the rows and columns that hold M and a margin of two pixels.

    Attributes
    ----------
    slice_index : int
        Counted from 0.
    plane : Plane
        The whole image's plane.
    section : CrossSection
        The body's outline there.
    radius_mm : float
        Radius of M, concentric with the outline.
    rows, columns : slice
        What was cut out.
    """

    slice_index: int
    plane: Plane
    section: CrossSection
    radius_mm: float
    rows: slice
    columns: slice

    def cut(self, pixels: NDArray[np.float32]) -> Floats:
        """Cut the slice out of a (S, R, C) stack, as float64."""
        part: Floats = pixels[self.slice_index, self.rows, self.columns].astype(np.float64)
        return part

    @cached_property
    def weights(self) -> Floats:
        """Share of each pixel that M covers."""
        return disc_overlap(self.plane, self.section.centre_mm, self.radius_mm)[self.rows, self.columns]

    @cached_property
    def inside(self) -> Floats:
        """1 for pixels that lie wholly in M, else 0."""
        return (self.weights > 1 - 1e-9).astype(np.float64)

    @cached_property
    def grid(self) -> tuple[Floats, Floats]:
        """Place of the pixels from M's centre in units of its radius: x (C,) and y (R,)."""
        x, y = self.plane.grid_mm()
        centre = self.section.centre_mm
        return (x[0, self.columns] - centre[0]) / self.radius_mm, (y[self.rows, 0] - centre[1]) / self.radius_mm

    def mean(self, pixels: Floats) -> float:
        """S: the mean over M of a slice that was cut out."""
        return float((pixels * self.weights).sum() / self.weights.sum())

    @property
    def region(self) -> Region:
        """M as a record."""
        return Region("M", "circle", self.slice_index + 1, (self.section.centre_mm,), self.radius_mm)


def uniform_field(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> Field | str:
    """Choose the uniform slice and lay M in it, or say why that cannot be done.

    The slice is the one nearest a sphere's centre or a uniform cylinder's middle; of a phantom with sections, the one nearest
    the middle of its uniform section among those that show nothing but fill.
    """
    reason = magnitude_only(acquisition)
    if reason:
        return reason
    chosen = _uniform_section(acquisition, pose, phantom)
    if isinstance(chosen, str):
        return chosen
    section, percent = chosen
    area = phantom.body.region_area_cm2
    radius = math.sqrt(percent / 100) * section.radius_mm if area is None else math.sqrt(100 * area / math.pi)
    if radius > 0.98 * section.radius_mm:
        return f"the measurement region of {area:g} cm2 does not fit the cross-section of radius {section.radius_mm:.0f} mm"
    plane = acquisition.planes[section.slice_index]
    (x, y), (dy, dx) = section.centre_mm, plane.pixel_mm
    cuts = []
    for centre, step, count in ((y, dy, plane.shape[0]), (x, dx, plane.shape[1])):
        low, high = math.floor((centre - radius) / step) - 2, math.ceil((centre + radius) / step) + 3
        if low < 0 or high > count:
            return "the measurement region reaches the edge of the image: centre the phantom, or enlarge the field of view"
        cuts.append(slice(low, high))
    return Field(section.slice_index, plane, section, radius, *cuts)


def body_slice(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> CrossSection | str:
    """Choose the outline to measure diameters on: the uniform slice's, or else the one nearest the body's centre."""
    reason = magnitude_only(acquisition)
    if reason:
        return reason
    chosen = _uniform_section(acquisition, pose, phantom)
    if not isinstance(chosen, str):
        return chosen[0]
    if not pose.sections:
        return "no slice shows the body's outline"
    heights = _heights(acquisition, pose, phantom)
    return min(pose.sections, key=lambda s: abs(heights[s.slice_index]))


def _heights(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> dict[int, float]:
    """Height of each section above the body's centre: along a cylinder's axis; along the slice normal for a sphere."""
    planes = acquisition.planes
    if phantom.body.shape == "sphere":
        return {s.slice_index: -float(planes[s.slice_index].from_patient(pose.centre_patient)[2]) for s in pose.sections}
    return {s.slice_index: float(pose.to_phantom(planes[s.slice_index].to_patient(*s.centre_mm))[2]) for s in pose.sections}


def _uniform_section(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> tuple[CrossSection, float] | str:
    """Return the outline of the uniform slice, and the share of it that M takes in percent."""
    if not pose.sections:
        return "no slice shows the body's outline"
    heights = _heights(acquisition, pose, phantom)
    if not phantom.sections:
        return min(pose.sections, key=lambda s: abs(heights[s.slice_index])), phantom.body.region_percent
    lean = math.radians(pose.tilt_deg)
    half = (acquisition.settings.slice_thickness_mm or 0.0) / 2 * math.cos(lean)
    if pose.u_centre_mm[2] is None and _ever_uniform(phantom, half):
        return "the heights of the slices in the phantom are not known, so a uniform slice cannot be told"
    found = []
    for section in pose.sections:
        z = heights[section.slice_index]
        reach = half + section.radius_mm * math.sin(lean)
        if phantom.is_uniform(z - reach, z + reach) and abs(z) + reach < (phantom.extent_mm or math.inf) / 2:
            named = [s for s in phantom.sections_at(z - reach, z + reach) if isinstance(s, Uniform)]
            away = min((abs(z - (s.z_from_mm + s.z_to_mm) / 2) for s in named), default=1e3 + abs(z))
            share = next((s.region_percent for s in named if s.region_percent is not None), phantom.body.region_percent)
            found.append((away, section, share))
    if not found:
        return "no slice shows nothing but fill"
    _, section, share = min(found, key=lambda f: f[0])
    return section, share


def _ever_uniform(phantom: Phantom, half_mm: float) -> bool:
    """Tell whether a slice could lie anywhere in the phantom and show nothing but fill."""
    end = int((phantom.extent_mm or 0.0) / 2 - half_mm)
    return any(phantom.is_uniform(z - half_mm, z + half_mm) for z in range(-end, end + 1))


def rectangle(name: str, slice_index: int, x_mm: tuple[float, float], y_mm: tuple[float, float]) -> Region:
    """Make the record of a rectangle with sides along the image axes."""
    (left, right), (top, bottom) = x_mm, y_mm
    return Region(name, "polygon", slice_index + 1, ((left, top), (right, top), (right, bottom), (left, bottom)))
