"""The fine grid under a slice, and closed-form edges on it."""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats, Plane
from qa.simulate.profile import Profile

__all__ = ["FineGrid", "FineSlice", "bars", "mixed", "step"]

_CELLS_A_PIXEL = 2
_FAR = 7.0  # blurs from an edge at which a step is plainly 0 or 1


@dataclass(frozen=True)
class FineGrid:
    """The grid on which one slice's object is sampled.

    Attributes
    ----------
    x_mm : (1, C q) float64
        In-plane x of the cells' centres; the grid covers the image's field of view.
    y_mm : (R q, 1) float64
        In-plane y.
    blur_mm : float
        Standard deviation of the Gaussian that every edge is blurred by: one cell, the larger of both axes.
    """

    x_mm: Floats
    y_mm: Floats
    blur_mm: float

    @classmethod
    def of(cls, plane: Plane) -> "FineGrid":
        """Lay the grid under an image."""
        (rows, columns), (dy, dx) = plane.shape, plane.pixel_mm
        q = _CELLS_A_PIXEL
        x = ((np.arange(columns * q) + 0.5) / q - 0.5) * dx
        y = ((np.arange(rows * q) + 0.5) / q - 0.5) * dy
        return cls(x[None, :], y[:, None], max(dx, dy) / q)


@dataclass(frozen=True, eq=False)
class FineSlice:
    """Phantom coordinates on the fine grid in the slice's middle plane, and how they change.

    Attributes
    ----------
    X, Y, Z : (R, C) float64
        Phantom mm.
    basis : (3, 3) float64
        Change of (X, Y, Z) for each mm of the object along the image's x and y and the slice normal.
    stretch : (2, 2) or (2, 2, R, C) float64
        Change of the object's in-plane place for each mm of the image.
    blur : float
        Gaussian blur of every edge, mm of the image.
    profile : Profile
        Slice profile.
    """

    X: Floats
    Y: Floats
    Z: Floats
    basis: Floats
    stretch: Floats
    blur: float
    profile: Profile

    @property
    def along(self) -> Floats:
        """Change of (X, Y, Z) for each mm along the slice normal."""
        return self.basis[:, 2]

    @property
    def reach(self) -> float:
        """Distance from the middle plane beyond which nothing counts."""
        return self.profile.reach_mm

    def slope(self, combination: tuple[float, float, float]) -> Floats:
        """Steepness in the image of a linear combination of phantom coordinates: a scalar array, or one value a cell."""
        gradient = np.tensordot(np.asarray(combination) @ self.basis[:, :2], self.stretch, axes=1)
        return np.asarray(np.hypot(gradient[0], gradient[1]))

    def steepness(self, normal: Floats, where: Any) -> Floats:  # noqa: ANN401 - any index of the grid
        """Steepness in the image of a distance whose unit gradient in the phantom is `normal` (N, 3), at the cells `where`."""
        in_object = normal @ self.basis[:, :2]
        stretch = self.stretch if self.stretch.ndim == 2 else self.stretch[:, :, where]
        across = in_object[:, 0] * stretch[0, 0] + in_object[:, 1] * stretch[1, 0]
        down = in_object[:, 0] * stretch[0, 1] + in_object[:, 1] * stretch[1, 1]
        return np.asarray(np.hypot(across, down))

    def part(self, x: tuple[float, float], y: tuple[float, float]) -> tuple[Any, "FineSlice"]:
        """Cut out the rows and columns that a rectangle of the phantom can touch: their index, and the slice there."""
        far = _FAR * 1.3 * self.blur + self.reach * math.hypot(self.along[0], self.along[1])
        (left, right), (top, bottom) = (x[0] - far, x[1] + far), (y[0] - far, y[1] + far)
        inside = (left < self.X) & (right > self.X) & (top < self.Y) & (bottom > self.Y)
        rows, columns = np.flatnonzero(inside.any(axis=1)), np.flatnonzero(inside.any(axis=0))
        if not rows.size:
            rows = columns = np.zeros(1, dtype=np.intp)
        place = (slice(rows[0], rows[-1] + 1), slice(columns[0], columns[-1] + 1))
        stretch = self.stretch if self.stretch.ndim == 2 else self.stretch[:, :, place[0], place[1]]
        return place, replace(self, X=self.X[place], Y=self.Y[place], Z=self.Z[place], stretch=stretch)

    def shifts(self) -> tuple[Floats, Floats]:
        """Give quadrature heights and weights fine enough for outlines that a tilt shifts sideways."""
        sideways = math.hypot(self.along[0], self.along[1]) * 2 * self.reach
        if sideways < 1e-6:
            return self.profile.nodes(1)
        return self.profile.nodes(min(96, max(3, math.ceil(2 * sideways / self.blur))))

    def between(self, value: Floats, rate: float, low: float, high: float, gradient: ArrayLike) -> tuple[Floats, Floats]:
        """Average over the profile where `low < value + rate u < high`, u the height above the middle plane.

        The blur in the image and the profile's own edge add up to one Gaussian along the slice.

        Returns
        -------
        share, u : ndarray
            How much of the profile lies there, and the mean height where it does.
        """
        steep = np.asarray(gradient)
        if abs(rate) < 1e-6:
            inside = step((value - low) / steep, self.blur) * step((high - value) / steep, self.blur)
            return inside, np.zeros_like(inside)
        first, last = (low - value) / rate, (high - value) / rate
        if rate < 0:
            first, last = last, first
        extra = self.blur * steep / abs(rate)
        share = self.profile.cumulative(last, extra) - self.profile.cumulative(first, extra)
        half = self.profile.width_mm / 2
        return share, 0.5 * (np.clip(first, -half, half) + np.clip(last, -half, half))


def step(distance: Floats, blur: float) -> Floats:
    """Blurred step: 0 far outside (negative distance), 1 far inside; computed only where it is neither."""
    from scipy.special import ndtr

    scaled = distance / blur
    out = (scaled > 0).astype(np.float64)
    near = np.abs(scaled) < _FAR
    out[near] = ndtr(scaled[near])
    return out


def mixed(value: Floats, table: Callable[[float], tuple[Floats, Floats]], blur: float, steepness: ArrayLike) -> Floats:
    """Look a blurred edge up by distance, the blur in the object being `blur` times a steepness that may vary.

    Blurring obeys the heat equation: between the least and the greatest blur the value is all but linear in the blur squared.
    """
    steep = np.asarray(steepness, dtype=np.float64)
    least, most = float(steep.min()), float(steep.max())
    outcome: Floats = np.interp(value, *table(blur * least), right=0.0)
    if most - least < 1e-9:
        return outcome
    other = np.interp(value, *table(blur * most), right=0.0)
    share = (steep**2 - least**2) / (most**2 - least**2)
    return outcome + share * (other - outcome)


def bars(value: Floats, edges: list[tuple[float, float]], blur: float, steepness: ArrayLike) -> Floats:
    """Blurred indicator of disjoint intervals of one phantom coordinate."""
    from scipy.special import ndtr

    def table(width: float) -> tuple[Floats, Floats]:
        low, high = edges[0][0] - _FAR * width, edges[-1][1] + _FAR * width
        near = [np.linspace(e - _FAR * width, e + _FAR * width, 337) for pair in edges for e in pair]
        at = np.unique(np.concatenate([[low, high], *near]))
        shares = np.zeros_like(at)
        for first, last in edges:
            shares += ndtr((at - first) / width) - ndtr((at - last) / width)
        return at, shares

    return mixed(value, table, blur, steepness)
