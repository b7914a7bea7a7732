"""`length_0` to `length_135`, `distortion_max`, `scale_x`, `scale_y`: diameters of the body's cross-section.

NEMA MS 2: the diameter through the centre at an angle from the row direction, between sub-pixel edges at half height.

The edge on either side is fitted to the pixels themselves, not to interpolated profiles: those within 0.65 of a resolution
length of the edge and within 10 degrees of the angle. There an edge's image is half height plus an odd function of the
distance whatever symmetric point spread the scanner has; its cubic term is tied to its slope as truncation of k-space ties
them. The fit is to squared magnitudes less the squared floor, in which noise has no bias (see `qa.geometry.find_rim`).
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from qa.geometry import Floats, Plane, find_rim, harmonics, robust_fit
from qa.measure.air import air_corners, air_noise
from qa.measure.regions import body_slice, figure
from qa.phantoms import Phantom, Rods
from qa.records import Acquisition, CrossSection, Measurement, NotMeasured, Pose, Region

__all__ = ["ANGLES", "lengths"]

ANGLES = (0, 45, 90, 135)
_LENGTH = ("diameter between half heights (NEMA MS 2)", 1)
_DISTORTION = ("largest deviation of four diameters (NEMA MS 2)", 1)
_SCALE = ("deviation of one diameter", 1)
_WINDOW_DEG = 10.0
_NEAR = 0.65
_CUBIC = -0.55
_RAYS = 180
_REACH_PX = 12.0
_ORDER = 4
_UNSEEN_PX = 0.0015
_UNCLEAR = 0.06
_SCATTER = 1.1
_OF_LARGEST = {1: 1.0, 2: 1.12, 3: 1.19, 4: 1.25}
"""Half the 95 % point of the largest of so many absolute standard normal values, rounded: noise drives a largest value up."""


@dataclass(frozen=True, eq=False)
class _Edge:
    """Pixels near the edge: angle, distance outwards from a smooth outline, resolution length, height, outline, ghost."""

    angle: Floats
    distance: Floats
    unit: Floats
    height: Floats
    outline: Floats
    ghost: Floats


def lengths(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the four diameters and what follows from them.

    Standard uncertainty: of the fit from its residuals; of a ghost of unknown phase on the edge (half its amplitude over
    the slope, over the square root of 2); and 0.0015 resolution lengths an edge for what the model of an edge leaves
    out. That of the largest distortion allows for as many lengths as noise could have made the largest.
    """
    with_rods = any(isinstance(s, Rods) for s in phantom.sections)
    derived = () if with_rods else ("distortion_max", "scale_x", "scale_y")
    section = body_slice(scan, pose, phantom)
    if isinstance(section, str):
        return [NotMeasured(name, section) for name in (*(f"length_{a}" for a in ANGLES), *derived)]
    plane = scan.planes[section.slice_index]
    edge = _edge_pixels(scan, section, phantom.clear_rim_mm)
    depth, u_depth = _depth_mm(scan, pose, phantom, section)
    found: dict[int, tuple[float, float]] = {}
    alone: dict[int, float] = {}
    results: list[Measurement | NotMeasured] = []
    for angle in ANGLES:
        fitted = None if edge is None else _diameter(edge, angle, plane)
        if fitted is None:
            results.append(
                NotMeasured(
                    f"length_{angle}", f"the edge at {angle} degrees is not clear: a notch, a bubble or an insert lies there"
                )
            )
            continue
        radii, u_edges, slope = fitted
        length, u_length = sum(radii) + depth, math.hypot(u_edges, u_depth)
        found[angle], alone[angle] = (length, u_length), u_edges
        turn = math.radians(angle)
        ends = tuple(
            (section.centre_mm[0] + side * r * math.cos(turn), section.centre_mm[1] + side * r * math.sin(turn))
            for side, r in zip((1, -1), radii, strict=True)
        )
        line = Region(f"{angle} degrees", "line", section.slice_index + 1, ends)
        details = {"radii_mm": list(radii), "edge_slope_per_resolution": slope}
        results.append(
            figure(
                f"length_{angle}", length, u_length, _LENGTH, slice_index=section.slice_index, details=details, regions=(line,)
            )
        )
    if phantom.radius_mm is None:
        found = _against_own_mean(found, alone)
    if not with_rods:
        results += _derived(found, _true_diameter(scan, pose, phantom, section, found), section)
    return results


def _edge_pixels(scan: Acquisition, section: CrossSection, clear_mm: float) -> _Edge | None:
    """Gather the pixels near the edge, each with its distance from a smooth outline and its height over the floor."""
    image, plane = scan.pixels[section.slice_index], scan.planes[section.slice_index]
    pixel = float(np.mean(plane.pixel_mm))
    angles = np.linspace(0, 2 * np.pi, _RAYS, endpoint=False)
    centre = np.array([section.centre_mm])
    start = np.full((1, _RAYS), section.radius_mm)
    # What is read inside the edge must be fill: rods near the rim would pull the plateau down.
    reach = max(min(max(0.3 * section.radius_mm / pixel, 6.0), _REACH_PX, clear_mm / pixel - 1), 4.0)
    for order in (2, _ORDER):
        rim = find_rim(image[None], plane, centre, start, angles, reach_px=reach)
        shape, _ = robust_fit(harmonics(angles, order), rim.radius_mm, 0.05 * pixel)
        if not np.isfinite(shape).all():
            return None
        start = shape @ harmonics(angles, order).T
    x, y = plane.grid_mm()
    x, y = x - section.centre_mm[0], y - section.centre_mm[1]
    squared = x * x + y * y
    rows, columns = np.nonzero((squared > (start.min() - 2 * pixel) ** 2) & (squared < (start.max() + 2 * pixel) ** 2))
    across, down = x[0, columns], y[rows, 0]
    angle = np.arctan2(down, across) % (2 * np.pi)
    wrapped = np.append(angles, 2 * np.pi)
    outline, plateau, floor = (np.interp(angle, wrapped, np.append(v[0], v[0, 0])) for v in (start, rim.plateau, rim.floor))
    quiet = _quiet(scan, section, rim.floor)
    strong = plateau > 2 * floor
    dy, dx = plane.pixel_mm
    span = np.where(strong, plateau - floor, 1.0)
    return _Edge(
        angle=angle,
        distance=np.where(strong, np.hypot(across, down) - outline, np.inf),
        unit=np.maximum(dx * np.abs(across), dy * np.abs(down)) / np.hypot(across, down),
        height=(image[rows, columns].astype(np.float64) ** 2 - floor) / span,
        outline=outline,
        ghost=np.sqrt(np.clip(floor - quiet, 0, None) / np.where(strong, plateau, 1.0)),
    )


def _quiet(scan: Acquisition, section: CrossSection, floor: Floats) -> float:
    """Squared magnitude of noise alone, with its scatter: what is above it beside the edge is a ghost.

    From air clear of ghosts; or the floor where it is lowest, round the edge.
    """
    least, low = (float(v) for v in np.percentile(floor, [10, 25]))
    quiet = least + 2 * (low - least)
    plane = scan.planes[section.slice_index]
    found = air_noise(scan.pixels[section.slice_index], plane, air_corners(plane, section, scan.settings.phase_encode))
    if isinstance(found, str):
        return quiet
    return min(quiet, (found[0].mean ** 2 + found[0].sd ** 2) * _SCATTER)


def _diameter(edge: _Edge, angle_deg: int, plane: Plane) -> tuple[tuple[float, float], float, float] | None:
    """Fit both edges on a line through the centre: shift of each from the outline, and a slope that both share.

    Gauss-Newton steps on height = (1/2 + c t + cubic c^3 t^3)^2, t the distance inwards in resolution lengths.
    """
    sides = []
    for side in (angle_deg, angle_deg + 180):
        away = (np.degrees(edge.angle) - side + 180) % 360 - 180
        near = (np.abs(away) <= _WINDOW_DEG) & (np.abs(edge.distance) < 2 * edge.unit)
        sides.append(
            (edge.distance[near], edge.unit[near], edge.height[near], edge.ghost[near], edge.outline[near], away[near])
        )
    shifts, slope = np.zeros(2), _first_slope(sides)
    covariance = np.zeros((3, 3))
    for _ in range(6):
        designs, residuals = [], []
        for k, (distance, unit, height, *_rest) in enumerate(sides):
            t = (shifts[k] - distance) / unit
            use = np.abs(t) <= _NEAR
            t, unit = t[use], unit[use]  # noqa: PLW2901 - the part in use
            model = 0.5 + slope * t + _CUBIC * (slope * t) ** 3
            weight = 2 * model / np.maximum(model, 0.15)
            inner = 1 + 3 * _CUBIC * (slope * t) ** 2
            design = np.zeros((t.size, 3))
            design[:, k] = weight * slope * inner / unit
            design[:, 2] = weight * t * inner
            designs.append(design)
            residuals.append((height[use] - model**2) / np.maximum(model, 0.15))
        if min(d.shape[0] for d in designs) < 4:
            return None
        design, residual = np.concatenate(designs), np.concatenate(residuals)
        normal = design.T @ design
        if not np.isfinite(normal).all() or np.linalg.cond(normal) > 1e10:
            return None
        covariance = np.linalg.inv(normal)
        change = covariance @ design.T @ residual
        shifts, slope = shifts + change[:2], slope + float(change[2])
        if not 0.05 < slope < 3 or np.abs(shifts).max() > 2 * float(np.max(plane.pixel_mm)):
            return None
    scatter = float(residual @ residual) / (residual.size - 3)
    if scatter > _UNCLEAR:
        return None
    alike = 1 / min(slope, 1.0)  # pixels closer than the resolution share their noise
    u_fit = math.sqrt(alike * scatter * float(covariance[:2, :2].sum()))
    radii, u_ghost = [], 0.0
    for k, (_, unit, _, ghost, outline, away) in enumerate(sides):
        radii.append(float(outline[np.argmin(np.abs(away))] + shifts[k]))
        u_ghost += float(ghost.mean()) / 2 / slope * float(unit.mean()) / math.sqrt(2)
    unseen = math.sqrt(2) * _UNSEEN_PX * alike * float(np.mean(plane.pixel_mm))
    return (radii[0], radii[1]), math.sqrt(u_fit**2 + u_ghost**2 + unseen**2), slope


def _first_slope(sides: Sequence[tuple[Floats, ...]]) -> float:
    """Slope of the edge as a straight line through the pixels near it shows it."""
    depth = np.concatenate([-distance / unit for distance, unit, *_ in sides])
    root = np.sqrt(np.clip(np.concatenate([side[2] for side in sides]), 0, None))
    near = np.abs(depth) <= _NEAR
    if near.sum() < 4 or not np.ptp(depth[near]) > 0:
        return 1.0
    away = depth[near] - depth[near].mean()
    return float(np.clip(away @ root[near] / (away @ away), 0.1, 1.5))


def _depth_mm(scan: Acquisition, pose: Pose, phantom: Phantom, section: CrossSection) -> tuple[float, float]:
    """Return what a sphere's diameter at half height has over the mean one within the slice, which an image shows.

    The outline recedes with the square of the height, whose mean over a rectangular slice profile is h^2 + t^2 / 12. A
    slice of unknown height is taken to lie within a fifth of its thickness of the centre, evenly. Some micrometres at the
    equator.
    """
    thick = scan.settings.slice_thickness_mm
    if phantom.body.shape != "sphere" or not thick:
        return 0.0, 0.0
    if pose.u_centre_mm[2] is None:
        far = thick / 5
        return (far**2 / 3 + thick**2 / 48) / section.radius_mm, far**2 * math.sqrt(4 / 45) / section.radius_mm
    height = _height_mm(scan, pose, section)
    return float((height**2 + thick**2 / 12 - _half_height_square(height, thick)) / section.radius_mm), 0.0


def _half_height_square(height_mm: float, thick_mm: float) -> float:
    """Square of the height at which half the slice still shows a sphere: the median of the square over the slice profile."""
    return thick_mm**2 / 16 if abs(height_mm) <= thick_mm / 4 else height_mm**2


def _height_mm(scan: Acquisition, pose: Pose, section: CrossSection) -> float:
    """Height of a slice above the centre; 0 where the centre along the normal is not known."""
    if pose.u_centre_mm[2] is None:
        return 0.0
    return -float(scan.planes[section.slice_index].from_patient(pose.centre_patient)[2])


def _true_diameter(
    scan: Acquisition, pose: Pose, phantom: Phantom, section: CrossSection, found: dict[int, tuple[float, float]]
) -> tuple[float, float]:
    """Return L0 and its uncertainty: the definition's, on a sphere at this slice's height; else the mean of the diameters."""
    if phantom.radius_mm is None:
        if len(found) < len(ANGLES):
            return math.nan, 0.0
        return float(np.mean([v for v, _ in found.values()])), 0.0
    if phantom.body.shape == "cylinder":
        return 2 * phantom.radius_mm, 0.0
    height = _height_mm(scan, pose, section)
    square = _half_height_square(height, scan.settings.slice_thickness_mm or 0.0)
    radius = math.sqrt(max(phantom.radius_mm**2 - square, 1e-6))
    return 2 * radius, 2 * abs(height) / radius * (pose.u_centre_mm[2] or 0.0)


def _against_own_mean(found: dict[int, tuple[float, float]], alone: dict[int, float]) -> dict[int, tuple[float, float]]:
    """Give each diameter the uncertainty of its difference from the mean of all: what they share drops out of that.

    With weights 1 - 1/n for itself and 1/n for each other one, which are independent but for what they share.
    """
    n, total = len(found), sum(u**2 for u in alone.values())
    return {
        angle: (length, math.sqrt((1 - 1 / n) ** 2 * alone[angle] ** 2 + (total - alone[angle] ** 2) / n**2))
        for angle, (length, _) in found.items()
    }


def _derived(
    found: dict[int, tuple[float, float]], true: tuple[float, float], section: CrossSection
) -> list[Measurement | NotMeasured]:
    """Scale along both axes, and the largest distortion."""
    true_mm, u_true = true
    results: list[Measurement | NotMeasured] = []
    for name, angle in (("scale_x", 0), ("scale_y", 90)):
        if angle not in found or not math.isfinite(true_mm):
            results.append(NotMeasured(name, f"there is no diameter at {angle} degrees to tell it from"))
            continue
        length, u_length = found[angle]
        value, u_value = 100 * (length / true_mm - 1), 100 * math.hypot(u_length, u_true * length / true_mm) / true_mm
        results.append(
            figure(name, value, u_value, _SCALE, slice_index=section.slice_index, details={"true_diameter_mm": true_mm})
        )
    if len(found) < len(ANGLES) or not math.isfinite(true_mm):
        results.append(NotMeasured("distortion_max", "not all four diameters were measured"))
        return results
    deviation = {angle: 100 * (length / true_mm - 1) for angle, (length, _) in found.items()}
    worst = max(deviation, key=lambda a: abs(deviation[a]))
    u_each = 100 * math.hypot(found[worst][1], u_true) / true_mm
    rivals = sum(abs(deviation[worst]) - abs(d) < 2 * u_each for d in deviation.values())
    u_worst = _OF_LARGEST[rivals] * u_each
    details = {
        "true_diameter_mm": true_mm,
        "angle_deg": worst,
        "deviations_percent": {str(a): d for a, d in deviation.items()},
    }
    results.append(
        figure("distortion_max", abs(deviation[worst]), u_worst, _DISTORTION, slice_index=section.slice_index, details=details)
    )
    return results
