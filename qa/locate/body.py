"""From the outlines in the slices to the body in space."""

import math

import numpy as np

from qa.geometry import Floats, Plane
from qa.locate.outline import Outline, Silhouette, find_outlines, find_silhouettes
from qa.phantoms import Phantom, Rods
from qa.records import Acquisition, CrossSection, NotLocated, Pose

__all__ = ["SIZE_TOLERANCE", "locate_body"]

SIZE_TOLERANCE = 0.04
"""How far the size may be from the definition before it is taken for another phantom: gradients are out by less."""

_BENT_TOLERANCE = 0.1
"""The same for a phantom whose lattice tells what it is, and which is there to show how far an image is bent."""

_OVALITY = 0.05
_SECOND_OBJECT = 0.01
_NOT_A_SPHERE = 0.02


def locate_body(acquisition: Acquisition, phantom: Phantom) -> Pose | NotLocated:
    """Find a body without looking at what is inside it: a sphere or a cylinder across its axis.

    A sphere's centre along the normal comes from how its cross-sections shrink; with one slice it cannot be known and the
    slice stands in. A cylinder's comes from its ends where both lie within the stack, else the middle of the stack stands
    in. What stands in has no uncertainty (None).

    Parameters
    ----------
    acquisition : Acquisition
        Magnitude images; the first repeat is looked at.
    phantom : Phantom
        Shape and size of the body; a sphere may have any size.

    Returns
    -------
    Pose or NotLocated
        Where it lies, or why what is seen is not this phantom.
    """
    if acquisition.first.kind != "magnitude":
        return NotLocated(f"these are {acquisition.first.kind} images: the phantom is looked for in magnitude images only")
    pixels, planes = acquisition.pixels, acquisition.planes
    if not pixels.size or min(pixels.shape[1:]) < 16:
        return NotLocated(f"the images are too small to show a phantom: {pixels.shape[1]} rows, {pixels.shape[2]} columns")
    if not np.isfinite(pixels).all():
        return NotLocated("the images hold values that are not numbers: send the series again")
    silhouettes = find_silhouettes(pixels, planes[0])
    if isinstance(silhouettes, str):
        return NotLocated(silhouettes)
    silhouettes = _of_body(silhouettes)
    outlines = find_outlines(pixels, planes[0], silhouettes)
    reason = _not_round(silhouettes, outlines, max(_OVALITY, _tolerance(phantom)))
    if reason:
        return NotLocated(reason)
    return (
        _sphere(acquisition, phantom, outlines)
        if phantom.body.shape == "sphere"
        else _cylinder(acquisition, phantom, outlines)
    )


def _of_body(silhouettes: tuple[Silhouette, ...]) -> tuple[Silhouette, ...]:
    """Leave out slices that graze the body: a sphere's poles, a cylinder's ends."""
    largest = max(s.radius_mm for s in silhouettes)
    large = [s for s in silhouettes if s.radius_mm > 0.5 * largest]
    usual = float(np.median([s.brightness for s in large]))
    return tuple(s for s in large if s.brightness > 0.6 * usual)


def _tolerance(phantom: Phantom) -> float:
    """How far the size may be from the definition."""
    return _BENT_TOLERANCE if any(isinstance(s, Rods) for s in phantom.sections) else SIZE_TOLERANCE


def _not_round(silhouettes: tuple[Silhouette, ...], outlines: tuple[Outline, ...], most: float) -> str:
    """Say why the outlines are not a round body's; an empty string when they are."""
    largest = max(s.radius_mm for s in silhouettes)
    if max(s.second for s in silhouettes if s.radius_mm > 0.8 * largest) > _SECOND_OBJECT:
        return "more than one object is in the images: scan the phantom alone"
    seen = [o for o in outlines if o.section.radius_mm > 0.8 * max(o.section.radius_mm for o in outlines)]
    if len(seen) < max(1, sum(s.radius_mm > 0.8 * largest for s in silhouettes) // 2):
        return "the object has no round outline: this is not the phantom, or it does not lie across its axis"
    if max(o.outside for o in seen) > 0.01:
        return "the phantom is cut by the edge of the image: centre it, or enlarge the field of view"
    worst = float(np.median([o.ovality for o in seen]))
    if worst > most:
        return (
            f"the object is {200 * worst / (1 - worst):.0f} % out of round: this is not the phantom, "
            "it does not lie across its axis, or the image is grossly distorted"
        )
    if (
        np.median([o.section.edge_fraction for o in seen]) < 0.75
        or np.median([o.section.rms_mm / o.section.radius_mm for o in seen]) > 0.04
    ):
        return "the object has no round outline: this is not the phantom, or the image is grossly distorted"
    return ""


def _heights(planes: tuple[Plane, ...], sections: tuple[CrossSection, ...]) -> Floats:
    """Height of each section along the common normal, mm."""
    return np.array([planes[s.slice_index].position_along_normal for s in sections])


def _patient_centres(planes: tuple[Plane, ...], sections: tuple[CrossSection, ...]) -> Floats:
    """Centre of each section in patient mm, shape (N, 3)."""
    return np.array([planes[s.slice_index].to_patient(*s.centre_mm) for s in sections])


def _sphere(acquisition: Acquisition, phantom: Phantom, outlines: tuple[Outline, ...]) -> Pose | NotLocated:
    """Find a sphere's centre along the normal from its cross-sections, and in the plane from their centres."""
    planes = acquisition.planes
    sections = tuple(o.section for o in outlines)
    heights, radii = _heights(planes, sections), np.array([s.radius_mm for s in sections])
    u_height: float | None = None
    height, radius = float(heights[np.argmax(radii)]), float(radii.max())
    remarks: tuple[str, ...] = ("too few slices to show the sphere's centre along the normal: the largest stands in",)
    if len(sections) >= 3:
        fit = _fit_sphere(heights, radii, np.array([s.u_radius_mm for s in sections]))
        if fit is not None:
            height, radius, u_height = fit
            remarks = ()
        elif phantom.radius_mm is not None:
            return NotLocated(f"the cross-sections do not shrink as a sphere's do: this is not {phantom.name}")
        else:
            height = float(heights[0] + heights[-1]) / 2
            remarks = (
                "the cross-sections do not shrink as a sphere's do, as if this were a cylinder: the middle slice stands in",
            )
    reason = _wrong_size(phantom, radius, one_slice=len(sections) < 3)
    if reason:
        return NotLocated(reason)
    u_plane = _u_plane(sections)
    return Pose(
        centre_patient=_mean_centre(planes, sections, height),
        orientation=np.eye(3),
        rotation_deg=0.0,
        tilt_deg=0.0,
        u_centre_mm=(u_plane, u_plane, u_height),
        u_rotation_deg=None,
        u_tilt_deg=None,
        sections=sections,
        remarks=remarks,
    )


def _fit_sphere(heights: Floats, radii: Floats, u_radii: Floats) -> tuple[float, float, float] | None:
    """Fit R^2 = r^2 + (z - z0)^2, linear in z0 and R^2 - z0^2, to the cross-sections.

    Returns
    -------
    tuple of float, or None
        Height of the centre, radius, and standard uncertainty of the height; None where the outlines are not those of a
        sphere.
    """
    origin = float(heights.mean())
    z = heights - origin
    weight = 1 / np.maximum(2 * radii * u_radii, 1e-6)
    design = np.stack([np.ones_like(z), 2 * z], axis=1) * weight[:, None]
    target = (radii**2 + z**2) * weight
    covariance = np.linalg.inv(design.T @ design)
    a, b = (float(v) for v in covariance @ design.T @ target)
    radius = math.sqrt(max(a + b * b, 1e-6))
    expected = np.sqrt(np.clip(radius**2 - (z - b) ** 2, 0, None))
    if float(np.sqrt(np.mean((radii - expected) ** 2))) > _NOT_A_SPHERE * radius:
        return None
    residual = target - design @ np.array([a, b])
    spread = max(1.0, float(residual @ residual) / (len(z) - 2))
    return origin + b, radius, math.sqrt(spread * float(covariance[1, 1]))


def _mean_centre(planes: tuple[Plane, ...], sections: tuple[CrossSection, ...], height: float) -> Floats:
    weight = np.array([1 / max(s.u_centre_mm, 1e-6) ** 2 for s in sections])
    mean = weight @ _patient_centres(planes, sections) / weight.sum()
    normal = planes[0].normal
    moved: Floats = mean + (height - float(normal @ mean)) * normal
    return moved


def _u_plane(sections: tuple[CrossSection, ...]) -> float:
    return float(1 / np.sqrt(sum(1 / max(s.u_centre_mm, 1e-6) ** 2 for s in sections)))


def _wrong_size(phantom: Phantom, radius: float, *, one_slice: bool) -> str:
    true = phantom.radius_mm
    if true is None or abs(radius / true - 1) <= _tolerance(phantom):
        return ""
    where = ", or the slice does not pass through its centre" if one_slice and radius < true else ""
    return f"the object's diameter is {2 * radius:.0f} mm, where {phantom.name} has {2 * true:.0f} mm: another phantom{where}"


def _cylinder(acquisition: Acquisition, phantom: Phantom, outlines: tuple[Outline, ...]) -> Pose | NotLocated:
    """Fit the axis to the centres of the cross-sections."""
    planes = acquisition.planes
    sections = tuple(o.section for o in outlines)
    reason = _wrong_size(phantom, float(np.median([s.radius_mm for s in sections])), one_slice=False)
    if reason:
        return NotLocated(reason)
    normal = planes[0].normal
    heights = _heights(planes, sections)
    height, u_height = _middle(planes, sections, phantom)
    axis, point, u_tilt = normal, _mean_centre(planes, sections, height), None
    if len(sections) >= 2 and np.ptp(heights) > 0:
        centres = _patient_centres(planes, sections)
        weight = np.array([1 / max(s.u_centre_mm, 1e-6) ** 2 for s in sections])
        origin = float(weight @ heights / weight.sum())
        lean = (weight * (heights - origin)) @ centres / float((weight * (heights - origin)) @ (heights - origin))
        axis = lean / np.linalg.norm(lean)
        middle = weight @ centres / weight.sum()
        point = middle + (height - origin) * lean
        u_tilt = math.degrees(1 / math.sqrt(float(weight @ (heights - origin) ** 2)))
    tilt = math.degrees(math.acos(min(1.0, abs(float(axis @ normal)))))
    u_plane = _u_plane(sections)
    remarks = (
        ()
        if u_height is not None
        else ("the slices do not show the phantom's ends: the middle of the stack stands in for its centre",)
    )
    return Pose(
        centre_patient=point,
        orientation=_upright(axis),
        rotation_deg=0.0,
        tilt_deg=tilt,
        u_centre_mm=(u_plane, u_plane, u_height),
        u_rotation_deg=None,
        u_tilt_deg=u_tilt,
        sections=sections,
        remarks=remarks,
    )


def _upright(axis: Floats) -> Floats:
    """Turn an axis into the orientation of a phantom set up square: z along it, x nearest the patient's left."""
    z = axis * np.sign(axis[np.argmax(np.abs(axis))])
    left = np.array([1.0, 0.0, 0.0]) if abs(z[0]) < 0.9 else np.array([0.0, 1.0, 0.0])
    x = left - (left @ z) * z
    x /= np.linalg.norm(x)
    return np.stack([x, np.cross(z, x), z], axis=1)


def _middle(planes: tuple[Plane, ...], sections: tuple[CrossSection, ...], phantom: Phantom) -> tuple[float, float | None]:
    """Height of the body's middle: half way between its ends where the stack shows both, else the middle of the stack."""
    heights = np.array([p.position_along_normal for p in planes])
    shown = _heights(planes, sections)
    step = float(np.median(np.diff(heights))) if len(heights) > 1 else 0.0
    both = len(shown) > 1 and shown[0] > heights[0] and shown[-1] < heights[-1]
    length = phantom.extent_mm
    if both and length is not None and abs(float(np.ptp(shown)) + step - length) < 2 * step:
        return float(shown[0] + shown[-1]) / 2, step / math.sqrt(6)
    return float(heights[0] + heights[-1]) / 2, None
