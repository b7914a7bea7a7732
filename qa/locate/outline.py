"""The body's outline in each slice: a circle through its sub-pixel edge.

A coarse silhouette says where to look; edges along radii (`qa.geometry.find_rim`) and a robust fit to them do the rest, so
that a notch, an air bubble or an insert at the rim is left out and not averaged in.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Plane, find_rim, harmonics, robust_fit
from qa.records import CrossSection

__all__ = ["Outline", "Silhouette", "find_outlines", "find_silhouettes"]

_COARSE = 64
_FIRST_RAYS = 96
_RAYS = 192
"""Radii along which an outline is read; the first look needs fewer."""


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
    from scipy import ndimage

    block = max(1, round(min(pixels.shape[1:]) / _COARSE))
    coarse = _coarse(pixels, block)
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
        body = _filled(labels == order[0] + 1)
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


def _filled(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Fill the holes of a mask: what is not joined to the image's border from outside."""
    from scipy import ndimage

    outside, count = ndimage.label(~mask)
    open_air = np.zeros(count + 1, dtype=np.bool_)
    for border in (outside[0], outside[-1], outside[:, 0], outside[:, -1]):
        open_air[border] = True
    open_air[0] = False
    filled: NDArray[np.bool_] = ~open_air[outside]
    return filled


def _coarse(pixels: NDArray[np.float32], block: int) -> NDArray[np.float32]:
    """Means over blocks of pixels; rows and columns left over are cut off."""
    rows, columns = (n // block * block for n in pixels.shape[1:])
    strips = pixels[:, 0:rows:block, :columns].copy()
    for k in range(1, block):
        strips += pixels[:, k:rows:block, :columns]
    blocks = strips[..., 0::block].copy()
    for k in range(1, block):
        blocks += strips[..., k::block]
    return blocks / np.float32(block * block)


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

    angles = np.linspace(0, 2 * np.pi, _FIRST_RAYS, endpoint=False)
    reach = 9 + 0.1 * float(radii.max()) / pixel
    edges = find_rim(
        images, plane, centres, np.broadcast_to(radii[:, None], (len(radii), _FIRST_RAYS)), angles, reach_px=reach, coarse=True
    ).radius_mm
    rigid, _ = robust_fit(harmonics(angles, 1), edges, 0.3 * pixel)
    shape, _ = robust_fit(harmonics(angles, 2), edges, 0.3 * pixel, np.pad(rigid, ((0, 0), (0, 2))))

    sure = np.isfinite(shape).all(axis=1) & (shape[:, 0] > 3 * pixel)
    images, centres, shape = images[sure], centres[sure] + shape[sure, 1:3], shape[sure]
    shape[:, 1:3] = 0
    if not len(images):
        return ()
    angles = np.linspace(0, 2 * np.pi, _RAYS, endpoint=False)
    edges = find_rim(images, plane, centres, shape @ harmonics(angles, 2).T, angles, reach_px=8).radius_mm
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
        independent = min(kept.sum() / 1.5, 2 * np.pi * radius * kept.mean() / (2.5 * pixel))
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
