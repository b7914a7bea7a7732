"""`slice_position` and `slice_position_end`: from the wedge bars in the first and the last section that has them.

Two signal-free bars with opposite faces lie side by side; half the difference of their lengths (for faces of 45 degrees; in
general the difference over the difference of the faces' slopes) is the height of the slice above the section, positive when
the slice lies above the section's z. As published: where the bars are, so that a tilt of the phantom enters; details give
`on_axis_mm`, corrected for the tilt, where the tilt is known.

The bars' ends are where the signal has risen to half of the fill beyond, levelled for shading. Both ends are fitted
together, to squared magnitudes less a common floor (see `qa.measure.ramp_model`), with edges as wide as the slice is thick.
Source: common practice of accreditation programmes (from memory).
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.locate.view import SliceView, slice_of_section
from qa.measure.profiles import rise
from qa.measure.regions import figure, magnitude_only
from qa.phantoms import Phantom, WedgeBars
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["slice_position"]

_METHOD = ("half the difference of two wedge bars' lengths", 1)
_NAMES = ("slice_position", "slice_position_end")
_UNSEEN_MM = 0.01
_STEPS = 12
_DARK_MM, _BRIGHT_MM = 12.0, 9.0


def slice_position(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the position of the slices in the first and in the last section with wedge bars.

    Standard uncertainty: of both ends from the fit's residuals; 0.01 mm for what its edges leave out; for `on_axis_mm` also
    the tilt's.
    """
    sections = sorted((s for s in phantom.sections if isinstance(s, WedgeBars)), key=lambda s: s.z_mm)
    if not sections:
        return [NotMeasured(name, "this phantom has no wedge bars") for name in _NAMES]
    chosen = sections[:1] + sections[1:][-1:]
    results = [_measured(scan, pose, phantom, section, name) for section, name in zip(chosen, _NAMES, strict=False)]
    if len(chosen) == 1:
        results.append(NotMeasured(_NAMES[1], "this phantom has wedge bars in one section only"))
    return results


def _measured(scan: Acquisition, pose: Pose, phantom: Phantom, section: WedgeBars, name: str) -> Measurement | NotMeasured:
    reason = magnitude_only(scan)
    if reason:
        return NotMeasured(name, reason)
    index = slice_of_section(scan, pose, phantom, section.z_mm)
    if isinstance(index, str):
        return NotMeasured(name, index)
    view = SliceView.of(scan.planes[index], pose)
    thickness = scan.settings.slice_thickness_mm or (phantom.slices.thickness_mm if phantom.slices else 5.0)
    ends = _fit_ends(scan.pixels[index], view, section, thickness)
    if isinstance(ends, str):
        return NotMeasured(name, ends)
    middles = np.array([(bar.x_from_mm + bar.x_to_mm) / 2 for bar in section.bars])
    places = view.to_image(middles, ends.y_mm)
    down = view.in_plane(0.0, 1.0)
    slopes = np.array([bar.slope for bar in section.bars])
    apart = slopes[0] - slopes[1]
    value = float((places[0] - places[1]) @ (down / math.hypot(*down))) / apart
    by_end = np.array([1.0, -1.0]) * math.hypot(*down) / apart
    u = math.hypot(math.sqrt(float(by_end @ ends.covariance_mm2 @ by_end)), _UNSEEN_MM)
    lengths = (ends.y_mm - section.start_y_mm) * math.hypot(*down)
    details: dict[str, object] = {"lengths_mm": [float(v) for v in lengths], "section_z_mm": section.z_mm}
    if pose.u_tilt_deg is not None:
        on_axis = (
            (ends.y_mm - section.start_y_mm - section.length_mm) / slopes - view.lean[0] * middles - view.lean[1] * ends.y_mm
        )
        details["on_axis_mm"] = float(on_axis.mean())
        details["u_on_axis_mm"] = math.hypot(u, math.radians(pose.u_tilt_deg) * float(np.abs(ends.y_mm).mean()))
    lines = tuple(
        Region(f"bar {k + 1}", "line", index + 1, tuple((float(p), float(q)) for p, q in line))
        for k, line in enumerate(
            view.to_image(np.full(2, x), np.array([section.start_y_mm, y])) for x, y in zip(middles, ends.y_mm, strict=True)
        )
    )
    return figure(name, value, u, _METHOD, slice_index=index, details=details, regions=lines)


@dataclass(frozen=True, eq=False)
class _Ends:
    """Phantom y of the two bars' ends, and the covariance of both."""

    y_mm: Floats
    covariance_mm2: Floats


def _fit_ends(image: Floats, view: SliceView, section: WedgeBars, thickness_mm: float) -> _Ends | str:
    """Gauss-Newton on floor + (level (1 + slopes) rise)^2, ends, edge width, level and floor common to both bars."""
    across = view.pitch_mm(1.0, 0.0)
    places, powers, which = [], [], []
    ends = np.zeros(2)
    edge = thickness_mm * float(np.mean([abs(bar.slope) for bar in section.bars]))
    for k, bar in enumerate(section.bars):
        x = (bar.x_from_mm + bar.x_to_mm) / 2
        rest = section.start_y_mm + section.length_mm
        height = float(view.height(x, rest)) - section.z_mm
        ends[k] = rest + bar.slope * height / (1 - bar.slope * view.lean[1])
        if abs(height) + thickness_mm / 2 > section.reach_mm:
            return f"the slice lies beyond the reach of the wedge bars at z = {section.z_mm:g} mm"
        margin = min(max(1.0, 0.9 * across), 0.3 * (bar.x_to_mm - bar.x_from_mm))
        low = max(section.start_y_mm + 6.0, ends[k] - edge / 2 - _DARK_MM)
        high = ends[k] + edge / 2 + _BRIGHT_MM
        window = view.window((bar.x_from_mm + margin, bar.x_to_mm - margin), (low, high))
        inside = (np.abs(window.X - x) <= (bar.x_to_mm - bar.x_from_mm) / 2 - margin) & (
            np.abs(window.Y - (low + high) / 2) <= (high - low) / 2
        )
        part = image[window.rows, window.columns].astype(np.float64)[inside]
        places.append(np.stack([window.X[inside], window.Y[inside]]))
        powers.append(part**2)
        which.append(np.full(part.size, k))
    (X, Y), power, bars = np.concatenate(places, axis=1), np.concatenate(powers), np.concatenate(which)
    if min(np.count_nonzero(bars == k) for k in (0, 1)) < 30:
        return "the image does not reach round the wedge bars"
    pixels = _Pixels(X, Y, power, np.array([bars == k for k in (0, 1)]))
    return _solve(pixels, ends, edge, 0.4 * view.pitch_mm(0.0, 1.0))


@dataclass(frozen=True, eq=False)
class _Pixels:
    """Phantom x and y (P,) of pixels, their squared magnitude, and on which bar they lie (2, P)."""

    X: Floats
    Y: Floats
    power: Floats
    on: NDArray[np.bool_]


def _solve(pixels: _Pixels, ends: Floats, edge_mm: float, blur_mm: float) -> _Ends | str:
    X, Y, power, first = pixels.X, pixels.Y, pixels.power, pixels.on
    x, y = X - X.mean(), Y - Y.mean()
    level = math.sqrt(float(np.percentile(power, 90)))
    floor = float(np.percentile(power, 10))
    lean = np.zeros(2)
    if level <= 0 or level**2 < 3 * floor:
        return "the wedge bars do not stand out from the fill: they are not in this slice, or lost in the noise"
    width = edge_mm
    start = ends
    ends = ends.copy()
    for _ in range(_STEPS):
        edge = rise(Y - np.where(first[0], ends[0], ends[1]), width, blur_mm)
        plane = level + lean[0] * x + lean[1] * y
        signal = plane * edge.value
        steep = 2 * signal
        design = np.stack(
            [
                np.where(first[0], -steep * plane * edge.by_place, 0.0),
                np.where(first[1], -steep * plane * edge.by_place, 0.0),
                steep * edge.value,
                steep * edge.value * x,
                steep * edge.value * y,
                np.ones_like(x),
                steep * plane * edge.by_box,
            ]
        )
        residual = power - signal**2 - floor
        quiet = max(floor, (0.01 * level) ** 2)
        variance = 2 * signal**2 + quiet
        weighted = design / variance
        normal = weighted @ design.T
        scale = np.sqrt(np.maximum(np.diag(normal), 1e-30))
        inverse = np.linalg.inv(normal / np.outer(scale, scale) + 1e-9 * np.eye(7)) / np.outer(scale, scale)
        change = inverse @ (weighted @ residual)
        moved = np.clip(change[:2], -3, 3)
        ends = ends + moved
        level = max(level + float(change[2]), 0.2 * level)
        lean = lean + change[3:5]
        floor = max(floor + float(change[5]), 0.0)
        width = float(np.clip(width + np.clip(change[6], -1, 1), 0.3 * edge_mm, 3 * edge_mm))
        if np.abs(moved).max() < 2e-3:
            break
    bright = edge.value > 0.97
    noise = 1.4826 * float(np.median(np.abs(residual[bright]) / (2 * signal[bright]))) if bright.any() else 0.0
    spread = 2 * noise**2
    covariance = spread * inverse[:2, :2]
    if np.abs(ends - start).max() > 6 or level**2 < 2 * floor or math.sqrt(covariance[0, 0] + covariance[1, 1]) > 1.0:
        return "the wedge bars do not stand out from the fill: they are not in this slice, or lost in the noise"
    return _Ends(ends, covariance)
