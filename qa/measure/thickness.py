"""`slice_thickness`: from the bars that a slice makes of two crossed ramps (NEMA MS 5).

2 A B / (A + B) times the slope, A and B the full widths at half maximum of the bars, measured in the image along the slots:
a tilt about the ramps' cross axis lengthens one bar and shortens the other, and cancels to first order. The bars come from
one fit to all pixels of the block (`qa.measure.ramp_model`). Half height is between the plateau, levelled by the fill on
both sides of the block, and the local floor.

The slice profile (pixels of both slots put together, against height in the slice) and its full width at a tenth of the
maximum are kept in the details; what is seen is the profile blurred by the slab's own thickness.
"""

import math
from collections.abc import Iterable
from typing import Any

import numpy as np

from qa.locate.view import SliceView, slice_of_section
from qa.measure.profiles import rise
from qa.measure.ramp_model import RampFit, fit_ramps
from qa.measure.regions import figure, magnitude_only
from qa.phantoms import Phantom, Ramps
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["slice_thickness", "thickness_from_bars"]

_METHOD = ("two crossed ramps, 2AB/(A+B) times slope (NEMA MS 5)", 1)
_NAME = "slice_thickness"
_UNSEEN_MM = 0.007
_LOST_MM = 0.6
_SEEN = 10.0
_BINS = 61


def thickness_from_bars(length_a_mm: float, length_b_mm: float, slope: float) -> float:
    """Slice thickness from the lengths of two crossed bars: 2 A B / (A + B) times the slope (NEMA MS 5)."""
    return 2 * length_a_mm * length_b_mm / (length_a_mm + length_b_mm) * slope


def slice_thickness(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the slice thickness.

    Standard uncertainty: of the two lengths from the fit, whose weights are the variances of squared magnitudes, multiplied
    where residuals are larger than these or correlated; and 0.007 mm for what the model leaves out.
    """
    section = next((s for s in phantom.sections if isinstance(s, Ramps)), None)
    if section is None:
        return [NotMeasured(_NAME, "this phantom has no ramps")]
    return [_measured(scan, pose, phantom, section)]


def _measured(scan: Acquisition, pose: Pose, phantom: Phantom, section: Ramps) -> Measurement | NotMeasured:
    reason = magnitude_only(scan)
    if reason:
        return NotMeasured(_NAME, reason)
    index = slice_of_section(scan, pose, phantom, section.z_mm)
    if isinstance(index, str):
        return NotMeasured(_NAME, index)
    view = SliceView.of(scan.planes[index], pose)
    expected = scan.settings.slice_thickness_mm or (phantom.slices.thickness_mm if phantom.slices else 5.0)
    fit = fit_ramps(scan.pixels[index], view, section, expected)
    if isinstance(fit, str):
        return NotMeasured(_NAME, fit)
    stretch = math.hypot(*view.in_plane(1.0, 0.0))
    a, b = (float(v) for v in fit.lengths_mm * stretch)
    slope = float(np.mean([abs(slot.slope) for slot in section.slots]))
    value = thickness_from_bars(a, b, slope)
    by_length = 2 * slope * stretch * np.array([b * b, a * a]) / (a + b) ** 2
    u = math.hypot(math.sqrt(float(by_length @ fit.covariance_mm2 @ by_length)), _UNSEEN_MM)
    reason = _wrong(fit, section, u)
    if reason:
        return NotMeasured(_NAME, reason)
    return figure(
        _NAME,
        value,
        u,
        _METHOD,
        slice_index=index,
        details=_details(fit, section, (a, b), slope),
        regions=_lines(fit, section, view, index),
    )


def _wrong(fit: RampFit, section: Ramps, u_mm: float) -> str:
    """Say why bars that were fitted are not to be believed; an empty string when they are."""
    lost = "the ramps are lost in the noise"
    if (fit.heights < _SEEN * fit.u_heights).any():
        return lost
    middle, width = section.block_centre_mm[0], section.block_size_mm[0]
    for slot, at, length in zip(section.slots, fit.middles_mm, fit.lengths_mm, strict=True):
        foot = length / fit.thickness_mm * (slot.thickness_mm / 2 + 1.5 * max(0.0, fit.soft_mm - 0.2))
        if abs(at - middle) + length / 2 + foot > width / 2:
            return (
                f"the bar of the ramp at y = {slot.centre_y_mm:g} mm runs into the block's end: the slice is too thick, "
                f"too far from the section at z = {section.z_mm:g} mm, or the phantom is tilted"
            )
    return lost if u_mm > _LOST_MM else ""


def _details(fit: RampFit, section: Ramps, bars: tuple[float, float], slope: float) -> dict[str, Any]:
    profile_mm, profile = _profile(fit)
    return {
        "bars_mm": list(bars),
        "slope": slope,
        "bar_heights": [float(v) for v in fit.heights],
        "full_width_tenth_maximum_mm": _width_at(fit, section, 0.1),
        "profile_mm": profile_mm,
        "profile": profile,
        "noise_floor": fit.floor,
        "misfit": fit.misfit,
    }


def _profile(fit: RampFit) -> tuple[list[float], list[float]]:
    """Mean amplitude in steps of height: root of the mean square less the floor, negative where noise makes it so."""
    reach = 1.3 * fit.thickness_mm
    edges = np.linspace(-reach, reach, _BINS + 1)
    number = np.digitize(fit.heights_mm, edges) - 1
    inside = (number >= 0) & (number < _BINS)
    count = np.bincount(number[inside], minlength=_BINS)
    total = np.bincount(number[inside], weights=fit.amplitudes[inside], minlength=_BINS)
    known = count > 0
    mean = total[known] / count[known]
    middle = (edges[:-1] + edges[1:])[known] / 2
    return [float(v) for v in middle], [float(v) for v in np.sign(mean) * np.sqrt(np.abs(mean))]


def _width_at(fit: RampFit, section: Ramps, share: float) -> float:
    """Full width of the fitted profile at a share of its maximum, mm of slice."""
    box = float(np.mean([slot.thickness_mm for slot in section.slots]))
    place = np.linspace(0, 2 * fit.thickness_mm + 6 * fit.soft_mm + box, 501)
    half = fit.thickness_mm / 2
    height = rise(place + half, box, fit.soft_mm).value - rise(place - half, box, fit.soft_mm).value
    below = int(np.argmax(height < share * height.max()))
    upper, lower = height[below - 1], height[below]
    step = place[1]
    return float(2 * (place[below - 1] + step * (upper - share * height.max()) / (upper - lower)))


def _lines(fit: RampFit, section: Ramps, view: SliceView, index: int) -> tuple[Region, ...]:
    """Draw the bars as lines between their half heights, and the block."""
    (x, y), (width, height) = section.block_centre_mm, section.block_size_mm
    corners = view.to_image(
        x + width / 2 * np.array([-1.0, 1.0, 1.0, -1.0]), y + height / 2 * np.array([-1.0, -1.0, 1.0, 1.0])
    )
    found = [Region("ramps", "polygon", index + 1, tuple((float(p), float(q)) for p, q in corners))]
    for name, slot, middle, length in zip(("A", "B"), section.slots, fit.middles_mm, fit.lengths_mm, strict=True):
        ends = view.to_image(middle + length / 2 * np.array([-1.0, 1.0]), np.full(2, slot.centre_y_mm))
        found.append(Region(f"bar {name}", "line", index + 1, tuple((float(p), float(q)) for p, q in ends)))
    return tuple(found)
