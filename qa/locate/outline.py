"""The body's outline in each slice: a circle through its sub-pixel edge.

The edge along a radius lies at half height between the local plateau inside and the local floor outside. Heights are compared
as squared magnitudes less the squared floor, because the expectation of a squared magnitude is the squared signal plus a
constant (Gudbjartsson and Patz 1995), so that noise, of one channel or of many, does not move the edge.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from qa.geometry import Floats, Plane, harmonics, robust_fit, sample
from qa.records import CrossSection

__all__ = ["Outline", "Silhouette", "find_outlines", "find_silhouettes"]

_COARSE = 64
_REJECTED_AT = 4.685


@dataclass(frozen=True)
class Silhouette:
    """What a slice shows at coarse resolution: the largest bright object, and how large the next one is.

    Centre and radius (of the circle of equal area) are in-plane mm; `second` is the area of the next object relative to the
    first; `brightness` its median.
    """

    slice_index: int
    centre_mm: tuple[float, float]
    radius_mm: float
    second: float
    brightness: float


@dataclass(frozen=True)
class Outline:
    """The edge of the body in one slice.

    `ovality` is the half difference of the longest and shortest radius over their mean; `outside` the share of the
    circle that lies beyond the image.
    """

    section: CrossSection
    ovality: float
    outside: float


def find_silhouettes(pixels: NDArray[np.float32], plane: Plane) -> tuple[Silhouette, ...] | str:
    """Find the bright object in each slice, or say why there is none.

    Parameters
    ----------
    pixels : (S, R, C) float32
        Magnitude images.
    plane : Plane
        Spacing and size of any of them.

    Returns
    -------
    tuple of Silhouette, or str
        One for each slice that shows an object; or a plain reason.
    """
    block = max(1, round(min(pixels.shape[1:]) / _COARSE))
    rows, columns = (n // block * block for n in pixels.shape[1:])
    coarse = pixels[:, :rows, :columns].reshape(len(pixels), rows // block, block, columns // block, block).mean(axis=(2, 4))
    low, high = (float(v) for v in np.percentile(coarse, [5, 99.5]))
    if high <= 0:
        return "the images hold no signal: check that the phantom was in the coil and that the right series was sent"
    bright = coarse[coarse > low + 0.15 * (high - low)]
    level = float(np.median(bright)) if bright.size else high
    if high < 2 * low or level < 2 * low:
        return (
            "nothing stands out from the background: check that the phantom was in the coil and that the right series was sent"
        )
    threshold = low + 0.3 * (level - low)
    area = block * block * plane.pixel_mm[0] * plane.pixel_mm[1]
    found = []
    for index, image in enumerate(coarse):
        labels, count = ndimage.label(image > threshold)
        if not count:
            continue
        sizes = np.bincount(labels.ravel())[1:]
        order = np.argsort(sizes)[::-1]
        body = ndimage.binary_fill_holes(labels == order[0] + 1)
        i, j = np.nonzero(body)
        y, x = ((k.mean() * block + (block - 1) / 2) * mm for k, mm in zip((i, j), plane.pixel_mm, strict=True))
        found.append(
            Silhouette(
                slice_index=index,
                centre_mm=(float(x), float(y)),
                radius_mm=float(np.sqrt(len(i) * area / np.pi)),
                second=float(sizes[order[1]] / len(i)) if count > 1 else 0.0,
                brightness=float(np.median(image[body])),
            )
        )
    return tuple(found) or "nothing stands out from the background: check that the phantom was in the coil"


def find_outlines(pixels: NDArray[np.float32], plane: Plane, silhouettes: tuple[Silhouette, ...]) -> tuple[Outline, ...]:
    """Find the sub-pixel edge in each slice that shows an object, and the circle through it.

    Parameters
    ----------
    pixels : (S, R, C) float32
        Magnitude images.
    plane : Plane
        Spacing and size of any of them.
    silhouettes : tuple of Silhouette
        Where to look.

    Returns
    -------
    tuple of Outline
        For each silhouette that has an edge all the way round or nearly so.
    """
    if not silhouettes:
        return ()
    images = pixels[[s.slice_index for s in silhouettes]]
    centres = np.array([s.centre_mm for s in silhouettes])
    radii = np.array([s.radius_mm for s in silhouettes])
    pixel = float(np.mean(plane.pixel_mm))

    angles = np.linspace(0, 2 * np.pi, 96, endpoint=False)
    reach = 3 * max(1, round(min(plane.shape) / _COARSE)) * pixel + 0.1 * float(radii.max())
    edges = _edges(images, plane, centres, np.broadcast_to(radii[:, None], (len(radii), 96)), angles, reach=reach, step=pixel)
    rigid, _ = robust_fit(harmonics(angles, 1), edges, 0.3 * pixel)
    shape, _ = robust_fit(harmonics(angles, 2), edges, 0.3 * pixel, np.pad(rigid, ((0, 0), (0, 2))))

    sure = np.isfinite(shape).all(axis=1) & (shape[:, 0] > 3 * pixel)
    images, centres, shape = images[sure], centres[sure] + shape[sure, 1:3], shape[sure]
    shape[:, 1:3] = 0
    if not len(images):
        return ()
    angles = np.linspace(0, 2 * np.pi, 192, endpoint=False)
    edges = _edges(images, plane, centres, shape @ harmonics(angles, 2).T, angles, reach=8 * pixel, step=pixel / 2)
    shape, weights = robust_fit(harmonics(angles, 2), edges, 0.05 * pixel, shape)

    outlines = []
    for silhouette, centre, fit, edge, weight in zip(
        (s for s, good in zip(silhouettes, sure, strict=True) if good), centres, shape, edges, weights, strict=True
    ):
        kept = weight > 0
        if not np.isfinite(fit).all() or kept.sum() < 16:
            continue
        radius = float(fit[0])
        middle = centre + fit[1:3]
        off_circle = edge[kept] - harmonics(angles[kept], 1) @ fit[:3]
        off_shape = edge[kept] - harmonics(angles[kept], 2) @ fit
        independent = min(float(kept.sum()), 2 * np.pi * radius * kept.mean() / (1.5 * pixel))
        scatter = float(np.sqrt(np.mean(off_shape**2)))
        x, y = middle[0] + radius * np.cos(angles), middle[1] + radius * np.sin(angles)
        far = [(-1.5 * mm, (n + 0.5) * mm) for mm, n in zip(plane.pixel_mm[::-1], plane.shape[::-1], strict=True)]
        beyond = (x < far[0][0]) | (x > far[0][1]) | (y < far[1][0]) | (y > far[1][1])
        outlines.append(
            Outline(
                section=CrossSection(
                    slice_index=silhouette.slice_index,
                    centre_mm=(float(middle[0]), float(middle[1])),
                    radius_mm=radius,
                    u_centre_mm=float(scatter * np.sqrt(2 / independent)),
                    u_radius_mm=float(scatter / np.sqrt(independent)),
                    rms_mm=float(np.sqrt(np.mean(off_circle**2))),
                    edge_fraction=float(kept.mean()),
                ),
                ovality=float(np.hypot(fit[3], fit[4]) / radius),
                outside=float(beyond.mean()),
            )
        )
    return tuple(outlines)


def _edges(
    images: NDArray[np.float32],
    plane: Plane,
    centres: Floats,
    radii: Floats,
    angles: Floats,
    *,
    reach: float,
    step: float,
) -> Floats:
    """Radius (S, N) in mm of the outermost fall through half height near the expected one; NaN where there is none."""
    pixel = float(np.mean(plane.pixel_mm))
    offsets = np.arange(-reach, reach + step / 2, step)
    distance = radii[:, :, None] + offsets
    x = centres[:, 0, None, None] + distance * np.cos(angles)[:, None]
    y = centres[:, 1, None, None] + distance * np.sin(angles)[:, None]
    power = sample(images, y / plane.pixel_mm[0], x / plane.pixel_mm[1]) ** 2
    power[distance < 0] = np.nan
    margin = min(2.5 * pixel, reach / 2)
    smooth = _around(power)
    inside, outside = smooth[..., offsets <= -margin], smooth[..., offsets >= margin]
    plateau = _levelled(np.sqrt(inside), offsets[offsets <= -margin]) ** 2 if reach <= 8 * pixel else _middle(inside)
    known = np.isfinite(outside)
    floor = np.where(known, outside, 0).sum(axis=-1) / np.maximum(known.sum(axis=-1), 1)
    rest = np.median(floor, axis=1, keepdims=True)
    floor = np.where(known.any(axis=-1), floor, rest)
    level = floor + (plateau - floor) / 4
    above = np.nan_to_num(power) > level[..., None]
    last = offsets.size - 1 - np.argmax(above[..., ::-1], axis=-1)
    last = np.where(above.any(axis=-1) & (last < offsets.size - 1) & (last > 0), last, 0)
    upper, lower = (np.sqrt(np.take_along_axis(power, k[..., None], axis=-1)[..., 0]) for k in (last, last + 1))
    root = np.sqrt(level)
    with np.errstate(invalid="ignore", divide="ignore"):
        edge = np.take_along_axis(distance, last[..., None], axis=-1)[..., 0] + step * (upper - root) / (upper - lower)
    typical = np.nanmedian(np.where(np.isfinite(plateau), plateau, np.nan), axis=1, keepdims=True)
    good = (last > 0) & (plateau > 0.05 * typical) & (plateau > 2 * floor)
    return np.where(good, edge, np.nan)


def _around(profiles: Floats) -> Floats:
    """Average each profile with its neighbours, two on either side."""
    wrapped = np.concatenate([profiles[:, -2:], profiles, profiles[:, :2]], axis=1)
    total = np.cumsum(np.nan_to_num(np.pad(wrapped, ((0, 0), (1, 0), (0, 0)))), axis=1)
    mean = (total[:, 5:] - total[:, :-5]) / 5
    return np.where(np.isfinite(profiles), mean, np.nan)


def _middle(inside: Floats) -> Floats:
    """Median over the inner samples: a plateau that an insert does not pull down."""
    filled = np.where(np.isfinite(inside), inside, 0.0)
    middle: Floats = np.median(filled, axis=-1)
    return middle


def _levelled(inside: Floats, offsets: Floats) -> Floats:
    """Carry the inner plateau to the edge along a straight line, because shading tilts it."""
    design = np.stack([np.ones_like(offsets), offsets], axis=1)
    weights = np.linalg.pinv(design)[0]
    carried: Floats = np.clip(np.nan_to_num(inside) @ weights, 0, None)
    return carried
