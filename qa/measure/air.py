"""Signal-free air: where it lies, and whether what is in it is noise."""

import math
from dataclasses import dataclass, replace

import numpy as np

from qa.geometry import Floats, Plane
from qa.measure.noise import Chi, Correlation, correlation
from qa.records import CrossSection

__all__ = ["AirNoise", "air_corners", "air_noise", "is_masked"]

Box = tuple[tuple[float, float], tuple[float, float]]

_WANTED_CM2 = 20.0
_LEAST_CM2 = 4.0
_GAP_PX = 3.0
_LEAST_OF_TWO = 1.6  # two channels whose noise correlates by 0.5 act like 2 / (1 + 0.5^2)


def is_masked(values: Floats) -> bool:
    """Tell whether air was set to zero: more zeros than noise of the size of the rest would leave when it is rounded."""
    zeros = float((values == 0).mean())
    rest = values[values != 0]
    if rest.size == 0:
        return True
    step = float(np.abs(rest).min())
    power = float((rest**2).mean())
    chance = 1 - math.exp(-(step**2) / 4 / power) if power > 0 else 1.0
    return zeros > 0.1 and zeros > 3 * chance


def air_corners(plane: Plane, section: CrossSection, phase_encode: str | None) -> dict[str, Box]:
    """Lay up to four rectangles of air in the corners of the image, together 20 cm2 where there is room.

    They keep clear of the band that ghosts of the phantom can fill (its whole width, along the phase-encode axis; both axes
    where the header does not say) and of truncation ringing, which runs along an axis from the parts of the edge that face it:
    beyond 0.85 of the radius an edge faces the other axis.

    Returns
    -------
    dict
        Name to ((x from, x to), (y from, y to)), in-plane mm; empty where less than 4 cm2 is clear.
    """
    (cx, cy), radius = section.centre_mm, section.radius_mm
    dy, dx = plane.pixel_mm
    wide = 1.0 if phase_encode != "row" else 0.85
    high = 1.0 if phase_encode != "column" else 0.85
    right, bottom = (plane.shape[1] - 1.5) * dx, (plane.shape[0] - 1.5) * dy
    spans_x = {"left": (0.5 * dx, cx - wide * radius - _GAP_PX * dx), "right": (cx + wide * radius + _GAP_PX * dx, right)}
    spans_y = {"top": (0.5 * dy, cy - high * radius - _GAP_PX * dy), "bottom": (cy + high * radius + _GAP_PX * dy, bottom)}
    sizes = {
        (v, h): max(0.0, x[1] - x[0]) * max(0.0, y[1] - y[0]) / 100
        for h, x in spans_x.items()
        for v, y in spans_y.items()
        if x[1] - x[0] >= 4 * dx and y[1] - y[0] >= 4 * dy
    }
    if sum(sizes.values()) < _LEAST_CM2:
        return {}
    share = _share_out(sizes, _WANTED_CM2)
    boxes: dict[str, Box] = {}
    for (v, h), area in share.items():
        (x0, x1), (y0, y1) = spans_x[h], spans_y[v]
        width = min(x1 - x0, max(math.sqrt(100 * area), 100 * area / (y1 - y0)))
        height = 100 * area / width
        x = (x0, x0 + width) if h == "left" else (x1 - width, x1)
        y = (y0, y0 + height) if v == "top" else (y1 - height, y1)
        boxes[f"air {v} {h}"] = (x, y)
    return boxes


def _share_out(sizes: dict[tuple[str, str], float], wanted: float) -> dict[tuple[str, str], float]:
    """Take the same from each as far as each holds it."""
    share = dict.fromkeys(sizes, 0.0)
    left, open_ = min(wanted, sum(sizes.values())), sorted(sizes, key=lambda k: sizes[k])
    while open_:
        name = open_.pop(0)
        share[name] = min(sizes[name], left / (len(open_) + 1))
        left -= share[name]
    return share


@dataclass(frozen=True)
class AirNoise:
    """Noise in air.

    Mean and standard deviation of the magnitude, the distribution they fit, correlation, number of pixels, and how many of
    them make one independent value of a variance: the sum of the autocorrelation of squared deviations, which for
    magnitudes of noise alone is more than the square of their own.
    """

    mean: float
    sd: float
    chi: Chi
    correlation: Correlation
    pixels: int
    shared: float

    @property
    def sigma(self) -> float:
        """Standard deviation of the noise of a real or imaginary part."""
        return self.sd / self.chi.sd

    @property
    def u_relative(self) -> float:
        """Relative standard uncertainty of `sigma` from the independent pixels there are."""
        return math.sqrt((self.chi.kurtosis - 1) / 4 * self.shared / self.pixels)


def air_noise(
    image: Floats, plane: Plane, boxes: dict[str, Box], repeat: Floats | None = None
) -> tuple[AirNoise, dict[str, Box]] | str:
    """Read the noise in air, or say why what is there is not noise of a magnitude image.

    Tested in turn: masked to zero; stored in steps too coarse for its spread; corners that do not agree with each other
    (one that stands out is left out, as something other than noise is in it); a ratio of mean to standard deviation below
    that of one channel, 1.913, or between those of one channel and of two that correlate; where neighbouring pixels
    correlate, a ratio that belongs to no whole number of channels, which tells a filter that worked on magnitudes from one
    that worked before; and, where there is a second image, more spread than the difference of the two shows, because what
    repeats is a ghost or ringing and not noise.

    Parameters
    ----------
    image : (R, C) float
        A magnitude image.
    plane : Plane
        Its plane.
    boxes : dict
        From `air_corners`.
    repeat : (R, C) float, optional
        The same image taken again.

    Returns
    -------
    tuple of AirNoise and the boxes used, or str
    """
    parts = {name: _pixels(image, plane, box) for name, box in boxes.items()}
    parts = _agreeing({name: part for name, part in parts.items() if not is_masked(part)})
    values = np.concatenate([p.ravel() for p in parts.values()]) if parts else np.zeros(0)
    area = values.size * plane.pixel_mm[0] * plane.pixel_mm[1] / 100
    if area < 0.75 * _LEAST_CM2:
        return _too_little(boxes, parts)
    step = float(np.diff(np.unique(values)).min(initial=math.inf))
    if _sum_up(list(parts.values())).sd < step:
        return "air is stored in steps too coarse for its noise: the images were scaled down"
    found = _sum_up(list(parts.values()), step)
    ratio = found.mean / found.sd
    whole = Chi(float(max(1, round(found.chi.channels))))
    near = abs(ratio / whole.ratio - 1) < 3 * found.u_relative + 0.01
    reason = ""
    if repeat is not None:
        again = [part - _pixels(repeat, plane, boxes[name]) for name, part in parts.items()]
        steady = math.sqrt(float(np.mean([p.var() for p in again])) / 2)
        if found.sd > steady * (1.1 + 4 * found.u_relative):
            reason = "the background holds more than noise: part of it is the same in both repeats, as a ghost or ringing is"
    reason = reason or _not_noise(found, ratio, near)
    if reason:
        return reason
    chi = whole if near else found.chi
    return replace(found, chi=chi), {name: boxes[name] for name in parts}


def _not_noise(found: AirNoise, ratio: float, near: bool) -> str:
    """Say why a ratio of mean to standard deviation is not that of noise; an empty string where it is."""
    said = f"the background is not noise: mean over standard deviation is {ratio:.2f}, where"
    if ratio < Chi(1.0).ratio * (1 - 4 * found.u_relative) - 0.02:
        return f"{said} noise has 1.91 or more"
    if not near and found.chi.channels < _LEAST_OF_TWO:
        return f"{said} one channel gives 1.91 and two channels no less than {Chi(_LEAST_OF_TWO).ratio:.2f}"
    if not near and max(found.correlation.along_x[1], found.correlation.along_y[1]) > 0.15:
        return "the background has been filtered: its noise is smoother than that of any number of channels"
    return ""


def _too_little(boxes: dict[str, Box], parts: dict[str, Floats]) -> str:
    if not boxes:
        return "there is too little air clear of ghosts and of truncation ringing: enlarge the field of view"
    return "there is too little air that holds nothing but noise" if parts else "air is masked to zero"


def _pixels(image: Floats, plane: Plane, box: Box) -> Floats:
    """Pixels whose centres lie in a rectangle."""
    (x0, x1), (y0, y1) = box
    dy, dx = plane.pixel_mm
    part: Floats = image[math.ceil(y0 / dy) : math.floor(y1 / dy) + 1, math.ceil(x0 / dx) : math.floor(x1 / dx) + 1]
    return part.astype(np.float64)


def _agreeing(parts: dict[str, Floats]) -> dict[str, Floats]:
    """Leave out corners whose mean stands out above the lowest by more than chance and 5 percent."""
    means = {name: float(p.mean()) for name, p in parts.items()}
    lowest = min(means.values(), default=0.0)
    kept = {}
    for name, part in parts.items():
        chance = 4 * float(part.std()) / math.sqrt(part.size / 4)
        if means[name] - lowest <= chance + 0.05 * lowest:
            kept[name] = part
    return kept


def _sum_up(parts: list[Floats], step: float = 0.0) -> AirNoise:
    """Pool the corners: mean, standard deviation less that of rounding (Sheppard's correction), correlation."""
    values = np.concatenate([p.ravel() for p in parts])
    mean = float(values.mean())
    sd = math.sqrt(max(float(values.var(ddof=1)) - step**2 / 12, 1e-30))
    height, width = max(p.shape[0] for p in parts), sum(p.shape[1] + 8 for p in parts)
    residual, inside = np.zeros((height, width)), np.zeros((height, width))
    at = 0
    for part in parts:
        residual[: part.shape[0], at : at + part.shape[1]] = part - mean
        inside[: part.shape[0], at : at + part.shape[1]] = 1
        at += part.shape[1] + 8
    squared = (residual**2 - float((residual**2).sum()) / values.size) * inside
    shared = max(1.0, correlation(squared, inside).mean_factor)
    return AirNoise(mean, sd, Chi.with_ratio(mean / sd), correlation(residual, inside), values.size, shared)
