"""Planes, millimetres and pixels.

Conventions, the same in every room
-----------------------------------
- An image is indexed ``[row, column]``; a stack ``[slice, row, column]``. An integer index is the *centre* of a pixel:
  a 250 x 250 image reaches from -0.5 to 249.5, and its middle is 124.5.
- *Patient* millimetres are DICOM's patient coordinates (left, posterior, head: PS3.3, C.7.6.2.1.1). Names end in
  ``_patient``.
- *In-plane* millimetres ``(x, y)`` belong to one image: x along the row direction (increasing column index), y along the
  column direction (increasing row index), zero at the centre of pixel [0, 0]. So column = x / column spacing and
  row = y / row spacing. Anisotropic pixels need no special case there.
- *Phantom* millimetres are the phantom's own frame: origin at the body's centre, z along its axis.
- ``pixel_mm`` is (row spacing, column spacing), DICOM's order: the first is the step between rows, along y.
- Angles in an image are from the row direction towards increasing row index, so 45 degrees runs towards increasing column
  and row index alike.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Floats", "Plane", "Rim", "disc_overlap", "find_rim", "harmonics", "robust_fit", "sample"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Plane:
    """Where one image lies in space.

    Attributes
    ----------
    position_patient : tuple of float
        Centre of pixel [0, 0], mm (DICOM Image Position (Patient)).
    row_direction : tuple of float
        Unit vector of increasing column index (the first three values of Image Orientation (Patient)).
    column_direction : tuple of float
        Unit vector of increasing row index (the last three).
    pixel_mm : tuple of float
        Row spacing and column spacing.
    shape : tuple of int
        Rows and columns.
    """

    position_patient: tuple[float, float, float]
    row_direction: tuple[float, float, float]
    column_direction: tuple[float, float, float]
    pixel_mm: tuple[float, float]
    shape: tuple[int, int]

    @cached_property
    def axes(self) -> Floats:
        """Row direction, column direction and normal as the columns of a (3, 3) matrix."""
        row, column = np.asarray(self.row_direction), np.asarray(self.column_direction)
        return np.stack([row, column, np.cross(row, column)], axis=1)

    @property
    def normal(self) -> Floats:
        """Unit vector along which slices are ordered: row direction cross column direction."""
        return self.axes[:, 2]

    @property
    def position_along_normal(self) -> float:
        """Signed distance of the plane from the origin of patient coordinates, mm."""
        return float(self.normal @ np.asarray(self.position_patient))

    @property
    def size_mm(self) -> tuple[float, float]:
        """Field of view along x and y: columns and rows times their spacing."""
        return self.shape[1] * self.pixel_mm[1], self.shape[0] * self.pixel_mm[0]

    @property
    def middle_mm(self) -> tuple[float, float]:
        """In-plane (x, y) of the middle of the image."""
        return (self.shape[1] - 1) / 2 * self.pixel_mm[1], (self.shape[0] - 1) / 2 * self.pixel_mm[0]

    def to_patient(self, x_mm: ArrayLike, y_mm: ArrayLike, height_mm: ArrayLike = 0.0) -> Floats:
        """Map in-plane mm (and a height above the plane along its normal) to patient mm, shape (..., 3)."""
        local = np.stack(np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in (x_mm, y_mm, height_mm))), axis=-1)
        mapped: Floats = np.asarray(self.position_patient) + local @ self.axes.T
        return mapped

    def from_patient(self, points: ArrayLike) -> Floats:
        """Map patient mm, shape (..., 3), to in-plane x and y and the height above the plane, shape (..., 3)."""
        local: Floats = (np.asarray(points, dtype=np.float64) - np.asarray(self.position_patient)) @ self.axes
        return local

    def grid_mm(self) -> tuple[Floats, Floats]:
        """In-plane x, shape (1, C), and y, shape (R, 1), of the pixel centres, ready to broadcast."""
        rows, columns = (np.arange(count, dtype=np.float64) for count in self.shape)
        return (columns * self.pixel_mm[1])[None, :], (rows * self.pixel_mm[0])[:, None]


def sample(images: NDArray[np.floating], rows: Floats, columns: Floats) -> Floats:
    """Read images between pixels by bilinear interpolation.

    Parameters
    ----------
    images : (S, R, C) array
        A stack of images.
    rows, columns : (S, ...) float
        Places in pixels, for each image its own.

    Returns
    -------
    (S, ...) float
        Interpolated values; NaN where a place lies outside its image.
    """
    count, height, width = images.shape
    inside = (rows >= 0) & (rows <= height - 1) & (columns >= 0) & (columns <= width - 1)
    i = np.clip(rows.astype(np.intp), 0, max(height - 2, 0))
    j = np.clip(columns.astype(np.intp), 0, max(width - 2, 0))
    down, right = rows - i, columns - j
    flat = images.reshape(-1)
    at = (np.arange(count) * (height * width)).reshape((-1,) + (1,) * (rows.ndim - 1)) + i * width + j
    step_right, step_down = (1 if width > 1 else 0), (width if height > 1 else 0)
    first, second = np.take(flat, at), np.take(flat, at + step_right)
    upper = first + (second - first) * right
    at += step_down
    first, second = np.take(flat, at), np.take(flat, at + step_right)
    lower = first + (second - first) * right
    read: Floats = upper + (lower - upper) * down
    read[~inside] = np.nan
    return read


def harmonics(angles: ArrayLike, order: int) -> Floats:
    """Return 1, cos, sin, cos 2, sin 2, ... of the angles up to an order, shape (..., 1 + 2 order)."""
    angle = np.asarray(angles, dtype=np.float64)
    waves = [part(n * angle) for n in range(1, order + 1) for part in (np.cos, np.sin)]
    return np.stack([np.ones_like(angle), *waves], axis=-1)


def robust_fit(design: Floats, values: Floats, least_scale: float, start: Floats | None = None) -> tuple[Floats, Floats]:
    """Fit a linear model to many sets of values at once, so that outliers on one side do not draw it.

    Iteratively reweighted least squares: absolute deviations first (unless a start is given), then Tukey's biweight with the
    scale from the median absolute residual (Huber, Robust Statistics; tuning constant 4.685 for 95 % efficiency).

    Parameters
    ----------
    design : (N, P) float
        The model.
    values : (S, N) float
        One set a row; NaN is left out.
    least_scale : float
        The scale of the residuals is not taken to be smaller than this.
    start : (S, P) float, optional
        Parameters to start from.

    Returns
    -------
    parameters : (S, P) float
        NaN for a set with too few values.
    weights : (S, N) float
        Final weights, 0 for what was rejected.
    """
    known = np.isfinite(values)
    filled = np.where(known, values, 0.0)
    outer = design[:, :, None] * design[:, None, :]
    tiny = 1e-9 * np.eye(design.shape[1])
    settled = 1e-3 * least_scale

    def solve(weights: Floats) -> Floats:
        matrix = (weights @ outer.reshape(len(outer), -1)).reshape(-1, *tiny.shape) + tiny
        solved: Floats = np.linalg.solve(matrix, ((weights * filled) @ design)[:, :, None])[:, :, 0].astype(np.float64)
        return solved

    parameters = solve(known.astype(np.float64)) if start is None else start
    if start is None:
        for _ in range(12):
            residual = np.abs(filled - parameters @ design.T)
            before, parameters = parameters, solve(known / np.maximum(residual, least_scale))
            if np.abs(parameters - before).max() < settled:
                break
    weights = known.astype(np.float64)
    for _ in range(8):
        residual = np.abs(filled - parameters @ design.T)
        ranked = np.sort(np.where(known, residual, np.inf), axis=1)
        middle = ranked[np.arange(len(values)), np.maximum(known.sum(axis=1) - 1, 0) // 2]
        scale = np.maximum(1.4826 * np.where(np.isfinite(middle), middle, 0.0), least_scale)
        weights = known * np.clip(1 - (residual / (4.685 * scale[:, None])) ** 2, 0, None) ** 2
        before, parameters = parameters, solve(weights)
        if np.abs(parameters - before).max() < settled:
            break
    poor = (weights > 0).sum(axis=1) <= design.shape[1]
    return np.where(poor[:, None], np.nan, parameters), weights


@dataclass(frozen=True, eq=False)
class Rim:
    """The edge of a bright round object, seen along radii from near its centre.

    Attributes
    ----------
    radius_mm : (S, N) float
        Where the signal falls through half height; NaN where it does not.
    plateau, floor : (S, N) float
        Squared magnitude inside, carried to the edge along its slope, and outside.
    """

    radius_mm: Floats
    plateau: Floats
    floor: Floats


def find_rim(
    images: NDArray[np.floating],
    plane: Plane,
    centres_mm: Floats,
    radii_mm: Floats,
    angles: Floats,
    *,
    reach_px: float,
    coarse: bool = False,
) -> Rim:
    """Find the outermost fall through half height near an expected radius.

    Half height lies between the local plateau inside, levelled for shading, and the local floor outside. Heights are
    compared as squared magnitudes less the squared floor: the expectation of a squared magnitude is the squared signal plus
    a constant (Gudbjartsson and Patz 1995; for several channels Constantinides et al. 1997), so noise does not move the
    edge. Plateau and floor are read under a Hann window, which truncation ringing does not pass.

    Parameters
    ----------
    images : (S, R, C) array
        Magnitude images.
    plane : Plane
        Spacing and size of any of them.
    centres_mm : (S, 2) float
        Where radii start, in-plane mm.
    radii_mm : (S, N) float
        Where the edge is expected.
    angles : (N,) float
        Angles of the radii, evenly round the circle, radians.
    reach_px : float
        How far from the expected radius to look, mean pixels.
    coarse : bool
        Look in steps of a pixel, and take the median inside as plateau, which an insert does not pull down.

    Returns
    -------
    Rim
        Edge, plateau and floor along each radius.
    """
    pixel = float(np.mean(plane.pixel_mm))
    step = pixel if coarse else pixel / 2
    offsets = np.arange(-reach_px * pixel, reach_px * pixel + step / 2, step)
    distance = radii_mm[:, :, None] + offsets
    x = centres_mm[:, 0, None, None] + distance * np.cos(angles)[:, None]
    y = centres_mm[:, 1, None, None] + distance * np.sin(angles)[:, None]
    power = sample(images, y / plane.pixel_mm[0], x / plane.pixel_mm[1]) ** 2
    power[distance < 0] = np.nan
    power = _fill_outwards(power)
    inner, outer = offsets <= -min(2.0, reach_px / 4) * pixel, offsets >= min(2.0, reach_px / 4) * pixel
    if coarse:
        plateau = np.median(power[..., inner], axis=-1)
    else:
        plateau = np.clip(_around(np.sqrt(power[..., inner]) @ _hann_fit(offsets[inner], 1)), 0, None) ** 2
    floor = _around(power[..., outer] @ _hann_fit(offsets[outer], 0))
    level = floor + (plateau - floor) / 4
    above = power > level[..., None]
    last = offsets.size - 1 - np.argmax(above[..., ::-1], axis=-1)
    last = np.where(above.any(axis=-1) & (last < offsets.size - 1), last, 0)
    upper, lower = (np.sqrt(np.take_along_axis(power, k[..., None], axis=-1)[..., 0]) for k in (last, last + 1))
    root = np.sqrt(level)
    fall = np.where(upper > lower, upper - lower, 1.0)
    edge = radii_mm + offsets[last] + step * (upper - root) / fall
    usual = np.median(plateau, axis=1, keepdims=True)
    good = (last > 0) & (upper > lower) & (plateau > 0.04 * usual) & (plateau > 2 * floor)
    return Rim(np.where(good, edge, np.nan), plateau, floor)


def _fill_outwards(power: Floats) -> Floats:
    """Give places beyond the image the mean of what the same radius shows inside it, or nothing."""
    known = np.isfinite(power)
    if known.all():
        return power
    count = known.sum(axis=-1, keepdims=True)
    low = np.where(known, power, np.inf).min(axis=-1, keepdims=True)
    return np.where(known, power, np.where(count > 0, low, 0.0))


def _hann_fit(offsets: Floats, degree: int) -> Floats:
    """Weights (N,) that give the value at offset 0 of a polynomial fitted under a Hann window."""
    window = np.sin(np.pi * (np.arange(offsets.size) + 0.5) / offsets.size) ** 2
    design = offsets[:, None] ** np.arange(degree + 1)
    weights: Floats = np.linalg.solve((design * window[:, None]).T @ design, (design * window[:, None]).T)[0]
    return weights


def _around(values: Floats) -> Floats:
    """Average over each angle and its two neighbours on either side, shape (S, N)."""
    wrapped = np.concatenate([values[:, -2:], values, values[:, :2]], axis=1)
    total = np.cumsum(np.pad(wrapped, ((0, 0), (1, 0))), axis=1)
    mean: Floats = (total[:, 5:] - total[:, :-5]) / 5
    return mean


def disc_overlap(plane: Plane, centre_mm: tuple[float, float], radius_mm: float) -> Floats:
    """Return the share of each pixel's area that a disc covers, shape (R, C), exact to rounding.

    The area of a disc left of and above a corner has a closed form; a pixel's share is the sum over its four corners with
    alternating sign. The sum of the result times the pixel area is pi r^2 where the disc lies wholly in the image.
    """
    x, y = (
        ((np.arange(count + 1, dtype=np.float64) - 0.5) * mm - middle) / radius_mm
        for count, mm, middle in zip(plane.shape[::-1], plane.pixel_mm[::-1], centre_mm, strict=True)
    )
    columns, rows = (np.flatnonzero((v[1:] > -1) & (v[:-1] < 1)) for v in (x, y))
    share = np.zeros(plane.shape)
    if not len(columns) or not len(rows):
        return share
    x, y = x[columns[0] : columns[-1] + 2], y[rows[0] : rows[-1] + 2]
    area = _quadrant_area(x[None, :], y[:, None])
    pixel = (plane.pixel_mm[0] / radius_mm) * (plane.pixel_mm[1] / radius_mm)
    part = np.diff(np.diff(area, axis=0), axis=1) / pixel
    share[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1] = np.clip(part, 0.0, 1.0)
    return share


def _quadrant_area(x: Floats, y: Floats) -> Floats:
    """Area of the unit disc left of x and above y (that is, with smaller coordinates), for broadcast x and y."""
    x, y = np.clip(x, -1, 1), np.clip(y, -1, 1)

    def under_arc(u: Floats) -> Floats:
        half: Floats = (u * np.sqrt(np.clip(1 - u * u, 0, None)) + np.arcsin(u)) / 2
        return half

    reach = np.sqrt(1 - y * y)
    end = np.clip(x, -reach, reach)
    cap = under_arc(end) - under_arc(-reach) - np.abs(y) * (end + reach)
    return np.where(y < 0, cap, 2 * (under_arc(x) + np.pi / 4) - cap)
