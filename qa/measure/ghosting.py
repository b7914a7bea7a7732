"""`ghosting`: percent signal ghosting.

100 abs((top + bottom) - (left + right)) / (2 S), from the means of four regions of about 10 cm2 and 4 : 1 in the margins
between the phantom and the image edge (the formula of accreditation practice). The value is the published formula as it
stands, on magnitudes; because noise in magnitudes hides small ghosts, details also give the ghost's own amplitude, from
squared magnitudes, whose expectation is the squared signal plus a constant that the two pairs share (Gudbjartsson and Patz
1995).
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from qa.geometry import Floats, Plane
from qa.measure.air import is_masked
from qa.measure.noise import Correlation, correlation
from qa.measure.regions import figure, rectangle, uniform_field
from qa.phantoms import Phantom
from qa.records import Acquisition, CrossSection, Measurement, NotMeasured, Pose

__all__ = ["ghosting"]

_METHOD = ("percent signal ghosting", 1)
_AREA_MM2 = 1000.0
_MARGIN_MM = 10.0
_CLEAR_MM = 2.0

Box = tuple[tuple[float, float], tuple[float, float]]


@dataclass(frozen=True)
class _Mean:
    value: float
    u: float


def ghosting(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the ghost.

    Standard uncertainty: that of the four means, from the noise within each region and the independent pixels there are.
    Noise is seen in the difference of two repeats; with one image, in differences of neighbouring pixels, which the outline
    of a ghost hardly enters.
    """
    field = uniform_field(scan, pose, phantom)
    if isinstance(field, str):
        return [NotMeasured("ghosting", field)]
    boxes = _boxes(field.plane, field.section)
    if isinstance(boxes, str):
        return [NotMeasured("ghosting", boxes)]
    image = scan.pixels[field.slice_index].astype(np.float64)
    if any(is_masked(_part(image, field.plane, box)[0]) for box in boxes.values()):
        return [NotMeasured("ghosting", "air is masked to zero")]
    signal = field.mean(field.cut(scan.pixels))
    second = scan.repeats[1].pixels[field.slice_index].astype(np.float64) if len(scan.repeats) > 1 else None
    means = _means(image, second, field.plane, boxes)
    powers = _means(image**2, None if second is None else second**2, field.plane, boxes)
    difference, u_difference = _contrast(means)
    value, u_value = 100 * abs(difference) / (2 * signal), 100 * u_difference / (2 * signal)
    encoded = scan.settings.phase_encode
    axis = "column" if difference > 0 else "row"
    seen = abs(difference) > 2 * u_difference
    amplitude, u_amplitude = _amplitude(powers, encoded or axis, signal)
    details = {
        **{name: m.value for name, m in means.items()},
        "standard_uncertainties": {name: m.u for name, m in means.items()},
        "signal": signal,
        "phase_encode": encoded,
        "ghost_direction": axis if seen else None,
        "along_phase_encode": None if encoded is None or not seen else axis == encoded,
        "noise_corrected_percent": amplitude,
        "noise_corrected_standard_uncertainty": u_amplitude,
    }
    regions = (field.region, *(rectangle(name, field.slice_index, *box) for name, box in boxes.items()))
    return [figure("ghosting", value, u_value, _METHOD, slice_index=field.slice_index, details=details, regions=regions)]


def _boxes(plane: Plane, section: CrossSection) -> dict[str, Box] | str:
    """Lay the four regions in the middle of the margins, thinner and longer than 4 : 1 where a margin is narrow."""
    (cx, cy), radius = section.centre_mm, section.radius_mm
    left, top = -plane.pixel_mm[1] / 2, -plane.pixel_mm[0] / 2
    right, bottom = left + plane.size_mm[0], top + plane.size_mm[1]
    margins = {
        "top": cy - radius - top,
        "bottom": bottom - cy - radius,
        "left": cx - radius - left,
        "right": right - cx - radius,
    }
    name = min(margins, key=lambda n: margins[n])
    if margins[name] < _MARGIN_MM:
        return (
            f"the margin {name} of the phantom is {margins[name]:.1f} mm, below 10 mm: centre it, or enlarge the field of view"
        )
    boxes: dict[str, Box] = {}
    for name, margin in margins.items():
        thin = min(math.sqrt(_AREA_MM2 / 4), margin - 2 * _CLEAR_MM)
        upright = name in {"left", "right"}
        room = (bottom - top if upright else right - left) - 2 * max(plane.pixel_mm)
        long = min(_AREA_MM2 / thin, room)
        low, high, middle = (top, bottom, cy) if upright else (left, right, cx)
        middle = min(max(middle, low + long / 2 + max(plane.pixel_mm)), high - long / 2 - max(plane.pixel_mm))
        along = (middle - long / 2, middle + long / 2)
        edge = {
            "top": top + margin / 2,
            "bottom": bottom - margin / 2,
            "left": left + margin / 2,
            "right": right - margin / 2,
        }[name]
        across = (edge - thin / 2, edge + thin / 2)
        boxes[name] = (across, along) if upright else (along, across)
    return boxes


def _cover(low: float, high: float, step: float, count: int) -> tuple[slice, Floats]:
    """Pixels that an interval touches, and the share of each that it covers."""
    first, last = max(0, math.floor(low / step + 0.5)), min(count - 1, math.ceil(high / step - 0.5))
    at = np.arange(first, last + 1)
    share = np.clip(np.minimum(at + 0.5, high / step) - np.maximum(at - 0.5, low / step), 0, 1)
    return slice(first, last + 1), share


def _part(image: Floats, plane: Plane, box: Box) -> tuple[Floats, Floats, Floats]:
    """Cut a rectangle out: pixels, and the share of each row and of each column that counts."""
    columns, across = _cover(*box[0], plane.pixel_mm[1], plane.shape[1])
    rows, down = _cover(*box[1], plane.pixel_mm[0], plane.shape[0])
    return image[rows, columns], down, across


def _means(image: Floats, second: Floats | None, plane: Plane, boxes: dict[str, Box]) -> dict[str, _Mean]:
    """Mean of each region with its standard uncertainty."""
    parts = {name: _part(image, plane, box) for name, box in boxes.items()}
    if second is None:
        noise = {name: part for name, (part, _, _) in parts.items()}
    else:
        noise = {name: (part - _part(second, plane, boxes[name])[0]) / math.sqrt(2) for name, (part, _, _) in parts.items()}
    quiet = min(noise.values(), key=lambda p: float(p.std()))
    alike = correlation(quiet - quiet.mean(), np.ones_like(quiet))
    found = {}
    for name, (part, down, across) in parts.items():
        total = float(down.sum() * across.sum())
        variance = float(noise[name].var()) if second is not None else _from_neighbours(part, alike)
        independent = total**2 / float((down**2).sum() * (across**2).sum()) / alike.mean_factor
        found[name] = _Mean(float(down @ part @ across) / total, math.sqrt(variance / independent))
    return found


def _from_neighbours(part: Floats, alike: Correlation) -> float:
    """Variance of the noise from differences of neighbours along both axes, given how alike noise makes neighbours."""
    pairs = ((1, alike.along_x[1]), (0, alike.along_y[1]))
    return sum(float((np.diff(part, axis=axis) ** 2).mean()) / 2 / (1 - min(same, 0.9)) for axis, same in pairs) / 2


def _contrast(means: dict[str, _Mean]) -> tuple[float, float]:
    """(top + bottom) - (left + right) and its standard uncertainty."""
    signed = sum((1 if name in {"top", "bottom"} else -1) * m.value for name, m in means.items())
    return signed, math.sqrt(sum(m.u**2 for m in means.values()))


def _amplitude(powers: dict[str, _Mean], axis: str, signal: float) -> tuple[float, float]:
    """Ghost amplitude along an axis, percent of the signal, from the excess of squared magnitude there.

    Where there is no excess the amplitude is 0; its uncertainty then is what an excess of one standard uncertainty would give.
    """
    excess, u_excess = _contrast(powers)
    excess, u_excess = (excess if axis == "column" else -excess) / 2 / signal**2, u_excess / 2 / signal**2
    amplitude = math.sqrt(max(excess, 0.0))
    return 100 * amplitude, 100 * u_excess / (2 * math.sqrt(max(excess, u_excess / 4, 1e-30)))
