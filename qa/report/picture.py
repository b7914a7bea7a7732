"""The image of a session with the regions drawn on it that figures were read in."""

import base64
import math
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from qa.records import Picture, Region
from qa.report.numbers import THIN_SPACE, plain_number
from qa.report.plot import Plot
from qa.report.style import CAP_HEIGHT, INK, MM, TEXT_SIZE, grey_png, new_figure, to_svg

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["DrawnPicture", "KeyEntry", "draw_picture", "grey_window"]

_SCALE_BARS_MM = (1, 2, 5, 10, 20, 50, 100, 200)
_SCALE_STRIP_MM = 4.5
_NUMBER_SIZE = 6.2
_FEW = 4
_CASING = "#000000"
_LINE = "#ffffff"
_ROUND = 4.1 * np.array([(math.cos(turn), math.sin(turn)) for turn in np.linspace(0, 2 * math.pi, 25)])


@dataclass(frozen=True)
class KeyEntry:
    """A number in the picture and what it stands for."""

    number: int
    name: str


@dataclass(frozen=True)
class DrawnPicture:
    """A drawn image: SVG, its size on paper, the key to the numbers in it, and its grey scale in words."""

    svg: bytes
    width_mm: float
    height_mm: float
    key: tuple[KeyEntry, ...]
    grey_scale: str


def grey_window(picture: Picture) -> tuple[float, float]:
    """Choose the pixel values shown as black and white: from zero (or the least value) to the 99.8th percentile."""
    finite = picture.pixels[np.isfinite(picture.pixels)]
    if not finite.size:
        return 0.0, 1.0
    low, high = min(0.0, float(finite.min())), float(np.percentile(finite, 99.8))
    return low, high if high > low else low + 1.0


def _numbered(regions: tuple[Region, ...]) -> list[int]:
    """Tell which regions carry their number: all but the many of one name, such as the rods of a lattice, whose first does."""
    count = Counter(region.name for region in regions)
    first = {region.name: k for k, region in reversed(list(enumerate(regions)))}
    return [k for k, region in enumerate(regions) if count[region.name] <= _FEW or first[region.name] == k]


def _outline(region: Region) -> tuple[list[float], list[float]]:
    """Return x and y of a region's outline in in-plane mm."""
    if region.shape == "circle":
        (x, y), radius = region.points[0], region.radius_mm or 0.0
        angles = np.linspace(0, 2 * math.pi, 73)
        return list(x + radius * np.cos(angles)), list(y + radius * np.sin(angles))
    points = [*region.points, region.points[0]] if region.shape == "polygon" else list(region.points)
    return [x for x, _ in points], [y for _, y in points]


def _anchor(region: Region, x: list[float], y: list[float], label_mm: float) -> tuple[float, float]:
    """Where a region's number goes: inside where there is room, on the edge of a large circle, beside a small one."""
    if region.shape == "line":
        return x[0], y[0]
    if region.shape == "polygon":
        return (min(x) + max(x)) / 2, (min(y) + max(y)) / 2
    turn = math.radians(-60)
    centre, radius = region.points[0], region.radius_mm or 0.0
    radius += label_mm if radius < 2 * label_mm else 0.0
    return centre[0] + radius * math.cos(turn), centre[1] + radius * math.sin(turn)


def _spread(
    anchors: list[tuple[float, float]], least: float, box: tuple[float, float, float, float]
) -> list[tuple[float, float]]:
    """Move numbers apart that would lie on each other, a little at a time, and keep them inside the image."""
    places = np.array(anchors, dtype=np.float64).reshape(-1, 2)
    for _ in range(60):
        steps = places[:, None] - places[None]
        distance = np.hypot(steps[..., 0], steps[..., 1])
        close = (distance < least) & ~np.eye(len(places), dtype=bool)
        if not close.any():
            break
        # Two numbers on the very same spot part along a direction that depends on their order alone.
        order = np.arange(len(places), dtype=np.float64)
        same = distance < 1e-9
        steps[same] = np.stack([np.sign(order[:, None] - order[None]), 0.3 * np.sign(order[:, None] - order[None])], -1)[same]
        length = np.maximum(np.hypot(steps[..., 0], steps[..., 1]), 1e-9)
        push = np.where(close, (least - distance) / 2 / length, 0.0)[..., None] * steps
        places += 0.6 * push.sum(axis=1)
        places[:, 0] = np.clip(places[:, 0], box[0], box[1])
        places[:, 1] = np.clip(places[:, 1], box[2], box[3])
    return [(float(x), float(y)) for x, y in places]


def _draw_scale_bar(figure: "Figure", width_mm: float, paper_mm_per_mm: float) -> None:
    """Draw a bar of a round length under the image."""
    length = max((bar for bar in _SCALE_BARS_MM if bar <= 0.4 * width_mm), default=_SCALE_BARS_MM[0])
    paper = length * paper_mm_per_mm
    box = (0.0, 0.0, width_mm * paper_mm_per_mm, _SCALE_STRIP_MM)
    plot = Plot(figure, box, (0.0, box[2]), (0.0, _SCALE_STRIP_MM))
    plot.path([plot.at([0.1, 0.1, paper, paper], [2.9, 1.9, 1.9, 2.9])], edgecolor=INK, linewidth=0.7, joinstyle="miter")
    baseline = 2.3 * MM - CAP_HEIGHT / 2 * TEXT_SIZE
    plot.text((paper + 1.2) * MM, baseline, f"{length}{THIN_SPACE}mm", TEXT_SIZE, ha="left", va="baseline")


def _underlay(picture: Picture, low: float, high: float, width: float, height: float) -> bytes:
    """Write the image as an SVG element of a size in points: each pixel keeps its edges, whatever its proportions."""
    shown = np.nan_to_num(np.clip((picture.pixels - low) / (high - low), 0, 1), nan=0.0)
    png = base64.b64encode(grey_png(np.round(shown * 255).astype(np.uint8))).decode()
    return (
        f'<image x="0" y="0" width="{width:.3f}" height="{height:.3f}" preserveAspectRatio="none" '
        f'style="image-rendering: pixelated" xlink:href="data:image/png;base64,{png}"/>'
    ).encode()


def draw_picture(
    picture: Picture, largest_width_mm: float, largest_height_mm: float, window: tuple[float, float] | None = None
) -> DrawnPicture:
    """Draw an image in grey, with true proportions whatever its pixels, with regions, their numbers and a scale bar.

    Parameters
    ----------
    picture : Picture
        Image and regions.
    largest_width_mm, largest_height_mm : float
        Space on paper; the image fills one of them.
    window : tuple of float, optional
        Pixel values shown as black and as white; `grey_window` otherwise.

    Returns
    -------
    DrawnPicture
        SVG and what stands beside it.
    """
    rows, columns = picture.pixels.shape
    row_mm, column_mm = picture.plane.pixel_mm
    width, height = columns * column_mm, rows * row_mm
    left, right, top, bottom = -column_mm / 2, width - column_mm / 2, -row_mm / 2, height - row_mm / 2
    scale = min(largest_width_mm / width, (largest_height_mm - _SCALE_STRIP_MM) / height)
    paper_width, paper_height = width * scale, height * scale
    figure = new_figure(paper_width, paper_height + _SCALE_STRIP_MM)
    plot = Plot(figure, (0.0, _SCALE_STRIP_MM, paper_width, paper_height), (left, right), (bottom, top))
    low, high = window or grey_window(picture)

    names = list(dict.fromkeys(region.name for region in picture.regions))
    outlines = [_outline(region) for region in picture.regions]
    lines = [plot.at(x, y) for x, y in outlines]
    for ink, thickness in ((_CASING, 1.7), (_LINE, 0.75)):
        plot.path(lines, edgecolor=ink, linewidth=thickness, joinstyle="round", zorder=3)
    mm_per_point = 1 / (MM * scale)
    inset = 5.5 * mm_per_point
    box = (left + inset, right - inset, top + inset, bottom - inset)
    numbered = _numbered(picture.regions)
    anchors = [_anchor(picture.regions[k], *outlines[k], 4.6 * mm_per_point) for k in numbered]
    anchors = [(min(max(x, box[0]), box[1]), min(max(y, box[2]), box[3])) for x, y in anchors]
    places = [plot.at(x, y)[0] for x, y in _spread(anchors, 9.5 * mm_per_point, box)]
    plot.path([place + _ROUND for place in places], closed=True, facecolor=_LINE, edgecolor=_CASING, linewidth=0.5, zorder=7)
    for (x, y), k in zip(places, numbered, strict=True):
        number = str(names.index(picture.regions[k].name) + 1)
        baseline = float(y) - CAP_HEIGHT / 2 * _NUMBER_SIZE
        plot.text(float(x), baseline, number, _NUMBER_SIZE, weight=600, color=_CASING, ha="center", va="baseline", zorder=8)
    _draw_scale_bar(figure, width, scale)
    return DrawnPicture(
        svg=to_svg(figure, _underlay(picture, low, high, paper_width * MM, paper_height * MM)),
        width_mm=paper_width,
        height_mm=paper_height + _SCALE_STRIP_MM,
        key=tuple(KeyEntry(number, name) for number, name in enumerate(names, start=1)),
        grey_scale=f"black is {plain_number(low, 4)}, white is {plain_number(high, 4)} and above",
    )
