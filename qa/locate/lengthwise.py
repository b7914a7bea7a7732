"""A cylinder along its axis, as a sagittal or coronal localiser shows it: a rectangle whose end faces tell its length."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane, robust_fit, sample
from qa.phantoms import Phantom
from qa.records import Acquisition, NotLocated, Pose

__all__ = ["Faces", "find_faces", "locate_lengthwise"]

_SIZE_TOLERANCE = 0.06
_LEAST_WIDTH = 0.5
_SLIT_MM = 8.0
_ACROSS = 0.7
"""Share of the width over which the end faces are read."""


@dataclass(frozen=True, eq=False)
class Faces:
    """The two end faces in one slice, in-plane mm.

    Attributes
    ----------
    slice_index : int
    centre_mm : (2,) float
        Middle between the faces, half way across.
    axis : (2,) float
        Unit vector from one face to the other.
    length_mm, u_length_mm : float
        Distance of the faces along the axis, with its standard uncertainty.
    width_mm : float
        Of the section, to about a pixel.
    u_axis_deg : float
        Standard uncertainty of the axis.
    """

    slice_index: int
    centre_mm: Floats
    axis: Floats
    length_mm: float
    u_length_mm: float
    width_mm: float
    u_axis_deg: float


@dataclass(frozen=True, eq=False)
class _Box:
    """Rectangle of least area round a mask: middle, unit vector along one side, and the lengths along it and across."""

    middle: Floats
    side: Floats
    along_mm: float
    across_mm: float


def locate_lengthwise(acquisition: Acquisition, phantom: Phantom) -> Pose | NotLocated:
    """Find a cylinder in slices along its axis.

    Parameters
    ----------
    acquisition : Acquisition
        Magnitude images.
    phantom : Phantom
        A cylinder.

    Returns
    -------
    Pose or NotLocated
        With the axis in the image plane, no outlines, and neither turn nor tilt; or why the slices show no such thing.
    """
    faces = find_faces(acquisition, phantom)
    if isinstance(faces, str):
        return NotLocated(faces)
    plane = acquisition.planes[faces.slice_index]
    z = plane.axes[:, :2] @ faces.axis
    z *= np.sign(z[np.argmax(np.abs(z))])
    x = np.cross(plane.normal, z)
    u_centre = faces.u_length_mm + float(np.mean(plane.pixel_mm)) / 4
    return Pose(
        centre_patient=plane.to_patient(*faces.centre_mm),
        orientation=np.stack([x, np.cross(z, x), z], axis=1),
        rotation_deg=0.0,
        tilt_deg=0.0,
        u_centre_mm=(u_centre, u_centre, None),
        u_rotation_deg=None,
        u_tilt_deg=None,
        sections=(),
        remarks=("the slices lie along the phantom's axis: only its length is read from them",),
    )


def find_faces(acquisition: Acquisition, phantom: Phantom) -> Faces | str:
    """Find the end faces in the slice that shows most of the phantom, or say why there are none."""
    radius, length = phantom.radius_mm, phantom.extent_mm
    if phantom.body.shape != "cylinder" or radius is None or length is None:
        return "only a cylinder has end faces"
    if acquisition.first.kind != "magnitude":
        return "end faces are looked for in magnitude images only"
    pixels = acquisition.pixels
    if not pixels.size or not np.isfinite(pixels).all() or float(pixels.max()) <= 0:
        return "the images hold no signal"
    masks = [_mask(image, float(np.mean(acquisition.planes[0].pixel_mm))) for image in pixels]
    index = int(np.argmax([np.count_nonzero(mask) for mask in masks]))
    plane = acquisition.planes[index]
    box = _box(masks[index], plane)
    if box is None:
        return "the slices show no rectangle"
    chosen = None
    for axis, along, across in (
        (box.side, box.along_mm, box.across_mm),
        (np.array([-box.side[1], box.side[0]]), box.across_mm, box.along_mm),
    ):
        fits = abs(along / length - 1) < _SIZE_TOLERANCE
        fits &= _LEAST_WIDTH * 2 * radius < across < (1 + _SIZE_TOLERANCE) * 2 * radius
        if fits and (chosen is None or abs(along - length) < abs(chosen[1] - length)):
            chosen = axis, along, across
    if chosen is None:
        return (
            f"the slices show neither a round section of {phantom.name} nor one along its axis: "
            f"what is seen is {box.along_mm:.0f} by {box.across_mm:.0f} mm"
        )
    axis, along, across = chosen
    return _read(pixels[index], plane, index, _Box(box.middle, axis, along, across))


def _mask(image: NDArray[np.float32], pixel_mm: float) -> NDArray[np.bool_]:
    """Return the largest bright object, its holes filled, and slits too that rods and bars cut into it."""
    from scipy import ndimage

    low, high = np.percentile(image, [5, 98])
    bright = ndimage.uniform_filter(image, 3) > low + 0.3 * (high - low)
    reach = max(1, math.ceil(_SLIT_MM / 2 / pixel_mm))
    labels, count = ndimage.label(ndimage.binary_closing(np.pad(bright, reach), iterations=reach)[reach:-reach, reach:-reach])
    if not count:
        return np.zeros(image.shape, dtype=np.bool_)
    largest = 1 + int(np.argmax(np.bincount(labels.ravel())[1:]))
    filled: NDArray[np.bool_] = ndimage.binary_fill_holes(labels == largest)
    return filled


def _box(mask: NDArray[np.bool_], plane: Plane) -> _Box | None:
    """Rectangle of least area round a mask; None where the mask does not nearly fill it or reaches the image's edge."""
    if mask.sum() < 100 or mask[0].any() or mask[-1].any() or mask[:, 0].any() or mask[:, -1].any():
        return None
    inner = np.roll(mask, 1, 0) & np.roll(mask, -1, 0) & np.roll(mask, 1, 1) & np.roll(mask, -1, 1)
    rim = mask & ~inner
    rows, columns = np.nonzero(rim)
    points = np.stack([columns * plane.pixel_mm[1], rows * plane.pixel_mm[0]], axis=1)
    turns = np.radians(np.arange(-45, 45, 0.5))
    sides = np.stack([np.cos(turns), np.sin(turns)], axis=1)
    across = np.stack([-sides[:, 1], sides[:, 0]], axis=1)
    u, v = points @ sides.T, points @ across.T
    areas = np.ptp(u, axis=0) * np.ptp(v, axis=0)
    best = int(np.argmin(areas))
    pixel = float(np.mean(plane.pixel_mm))
    if mask.sum() * plane.pixel_mm[0] * plane.pixel_mm[1] < 0.88 * areas[best]:
        return None
    middle = (u[:, best].max() + u[:, best].min()) / 2 * sides[best] + (v[:, best].max() + v[:, best].min()) / 2 * across[best]
    return _Box(middle, sides[best], float(np.ptp(u[:, best])) + pixel, float(np.ptp(v[:, best])) + pixel)


def _read(image: NDArray[np.float32], plane: Plane, index: int, box: _Box) -> Faces | str:
    """Sub-pixel edges of both faces along many lines, a straight line through each, and their distance.

    Half height lies between the plateau inside and the floor outside, as squared magnitudes less the squared floor.
    """
    pixel = float(np.mean(plane.pixel_mm))
    across = np.array([-box.side[1], box.side[0]])
    v = np.arange(-_ACROSS / 2, _ACROSS / 2, pixel / box.across_mm) * box.across_mm
    step = pixel / 4
    depth = np.arange(-12 * pixel, 8 * pixel, step)
    slopes, offsets, scatter = [], [], []
    for side in (1.0, -1.0):
        out = side * box.side
        places = box.middle + v[:, None, None] * across + (box.along_mm / 2 + depth)[None, :, None] * out
        power = sample(image[None], places[None, ..., 1] / plane.pixel_mm[0], places[None, ..., 0] / plane.pixel_mm[1])[0] ** 2
        if not np.isfinite(power).all():
            return "the phantom's end lies at the image's edge: enlarge the field of view"
        floor = power[:, depth > 4 * pixel].mean(axis=1)
        plateau = np.median(power[:, depth < -3 * pixel], axis=1)
        level = floor + (plateau - floor) / 4
        last = depth.size - 1 - np.argmax((power > level[:, None])[:, ::-1], axis=1)
        sure = (last < depth.size - 1) & (plateau > 3 * floor)
        last = np.minimum(last, depth.size - 2)
        upper, lower = (np.sqrt(power[np.arange(len(v)), last + k]) for k in (0, 1))
        fall = np.where(upper > lower, upper - lower, 1.0)
        edge = depth[last] + step * (upper - np.sqrt(level)) / fall
        design = np.stack([np.ones_like(v), v], axis=1)
        fit, weight = robust_fit(design, np.where(sure, edge, np.nan)[None], 0.05 * pixel)
        if not np.isfinite(fit).all() or np.count_nonzero(weight) < 0.6 * len(v):
            return "the phantom's end faces are not straight and clear"
        left = (edge - design @ fit[0])[weight[0] > 0]
        offsets.append(float(fit[0, 0]))
        slopes.append(side * float(fit[0, 1]))
        scatter.append(float(np.sqrt(np.mean(left**2))))
    lean = (slopes[0] + slopes[1]) / 2
    independent = max(4.0, len(v) / 2)
    u_edges = math.hypot(*scatter) / math.sqrt(independent)
    axis = box.side - lean * across
    axis /= np.hypot(*axis)
    length = (box.along_mm + offsets[0] + offsets[1]) / math.hypot(1.0, lean)
    return Faces(
        slice_index=index,
        centre_mm=box.middle + (offsets[0] - offsets[1]) / 2 * box.side,
        axis=axis,
        length_mm=length,
        u_length_mm=math.hypot(u_edges, 0.01 * pixel),
        width_mm=box.across_mm,
        u_axis_deg=math.degrees(math.hypot(*scatter) / math.sqrt(independent) / (_ACROSS * box.across_mm / math.sqrt(12))),
    )
