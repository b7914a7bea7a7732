"""Phantom definitions become what a slice averages: density on a fine grid, with edges that do not alias.

Every edge is blurred by a Gaussian of `blur_mm` (a little below one cell of the fine grid) in closed form, and `qa.simulate.encode`
divides the Gaussian's transform out again inside the acquired part of k-space. So the fine grid's samples carry the exact
edge, not a staircase, and what aliases into the acquired part is some 1e-5 of what belongs there. A Gaussian is separable
and round at once, which is why a turned rectangle, a slab or a disc keeps its closed form.

Averaging over the slice profile is exact (the profile's cumulative integral) for everything bounded by planes that the slice cuts at a slope
(ramps, wedges, end faces), and by Gauss-Legendre quadrature where a tilt only shifts an outline.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats, Plane
from qa.phantoms import Lattice, Ramps, Rods, WedgeBars
from qa.simulate.setup import Setup

__all__ = ["OVERSAMPLING", "FineGrid", "Profile", "density", "object_place", "slice_key"]

OVERSAMPLING = 3
"""Fine cells a pixel along each axis; odd, so that a cell's centre is the pixel's centre."""
_BLUR_CELLS = 0.8
_REACH = 6.0


@dataclass(frozen=True)
class FineGrid:
    """The grid on which one slice's object is sampled: in-plane x (1, C q) and y (R q, 1) of its cells, and the blur, mm."""

    x_mm: Floats
    y_mm: Floats
    blur_mm: float

    @classmethod
    def of(cls, plane: Plane) -> "FineGrid":
        """Lay the grid under an image."""
        q = OVERSAMPLING
        (rows, columns), (dy, dx) = plane.shape, plane.pixel_mm
        x = (np.arange(columns * q) - (q - 1) / 2) * dx / q
        y = (np.arange(rows * q) - (q - 1) / 2) * dy / q
        return cls(x[None, :], y[:, None], _BLUR_CELLS * max(dx, dy) / q)


@dataclass(frozen=True)
class Profile:
    """Slice profile: a rectangle `width_mm` wide blurred by a Gaussian of standard deviation `edge_mm`; its integral is 1."""

    width_mm: float
    edge_mm: float

    def cumulative(self, height_mm: ArrayLike, extra_mm: float = 0.0) -> Floats:
        """Integral of the profile up to a height, with a further Gaussian blur of `extra_mm`."""
        from scipy.special import ndtr

        height = np.asarray(height_mm, dtype=np.float64)
        edge, half = math.hypot(self.edge_mm, extra_mm), self.width_mm / 2
        if edge < 1e-9:
            flat: Floats = np.clip((height + half) / self.width_mm, 0.0, 1.0)
            return flat

        def integral(a: Floats) -> Floats:
            step: Floats = a * ndtr(a) + np.exp(-0.5 * a * a) / math.sqrt(2 * math.pi)
            return step

        rising: Floats = edge / self.width_mm * (integral((height + half) / edge) - integral((height - half) / edge))
        return rising

    def nodes(self, count: int) -> tuple[Floats, Floats]:
        """Heights and weights (sum 1) of a quadrature over the profile."""
        from scipy.special import ndtr

        if count == 1:
            return np.zeros(1), np.ones(1)
        points, weights = np.polynomial.legendre.leggauss(count)
        reach = self.width_mm / 2 + 5 * self.edge_mm
        heights = points * reach
        if self.edge_mm > 0:
            upper, lower = (heights + self.width_mm / 2) / self.edge_mm, (heights - self.width_mm / 2) / self.edge_mm
            weights = weights * (ndtr(upper) - ndtr(lower))
        return heights, weights / weights.sum()


def object_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats]:
    """Tell which in-plane place of the object appears at an in-plane place of the image.

    Gradients that are off scale or not linear act about the isocentre (the origin of patient coordinates), off-resonance along
    the readout.
    """
    iso = plane.from_patient(np.zeros(3))
    shift_x, shift_y = setup.off_resonance_shift_mm
    x = np.asarray(x_mm, dtype=np.float64) - shift_x - iso[0]
    y = np.asarray(y_mm, dtype=np.float64) - shift_y - iso[1]
    across = x / (1 + setup.scale_x_percent / 100)
    down = y / (1 + setup.scale_y_percent / 100)
    if setup.nonlinearity_x_mm or setup.nonlinearity_y_mm:
        square = (x * x + y * y) * 1e-6
        across = across - setup.nonlinearity_x_mm * x * square
        down = down - setup.nonlinearity_y_mm * y * square
    return across + iso[0], down + iso[1]


@dataclass(frozen=True)
class _Slice:
    """Phantom coordinates of the fine grid in the slice's middle, and how they change along the slice normal."""

    X: Floats
    Y: Floats
    Z: Floats
    along: Floats  # change of (X, Y, Z) for each mm along the normal
    in_plane: Floats  # (3, 2): change of (X, Y, Z) for each mm of the image along x and y
    blur: float
    profile: Profile

    def slope(self, combination: tuple[float, float, float]) -> float:
        """Gradient in the image of a linear combination of phantom coordinates."""
        return float(np.hypot(*(np.asarray(combination) @ self.in_plane)))

    def shifts(self) -> tuple[Floats, Floats]:
        """Quadrature heights and weights fine enough for outlines that a tilt shifts sideways."""
        sideways = math.hypot(self.along[0], self.along[1]) * (self.profile.width_mm + 10 * self.profile.edge_mm)
        if sideways < 1e-6:
            return self.profile.nodes(1)
        return self.profile.nodes(min(96, max(3, math.ceil(1.5 * sideways / self.blur))))

    def between(self, value: Floats, rate: float, low: float, high: float, gradient: float) -> tuple[Floats, Floats]:
        """Average over the profile of `low < value + rate u < high`, and the mean height u where that holds.

        The edge's slope along the slice and its blur in the image add up in one Gaussian.
        """
        if abs(rate) < 1e-6:
            inside = _step(value - low, self.blur * gradient) * _step(high - value, self.blur * gradient)
            return inside, np.zeros_like(inside)
        first, last = np.sort(np.stack([(low - value) / rate, (high - value) / rate]), axis=0)
        extra = self.blur * gradient / abs(rate)
        share = self.profile.cumulative(last, extra) - self.profile.cumulative(first, extra)
        half = self.profile.width_mm / 2
        middle = 0.5 * (np.clip(first, -half, half) + np.clip(last, -half, half))
        return share, middle


def density(setup: Setup, plane: Plane) -> Floats:
    """Average the phantom's density over a slice, on the fine grid of its image.

    Parameters
    ----------
    setup : Setup
        The scan.
    plane : Plane
        The slice.

    Returns
    -------
    ndarray
        (R q, C q) share of fill, 0 to 1, each edge blurred by `FineGrid.blur_mm`.
    """
    grid = FineGrid.of(plane)
    cut = _cut(setup, plane, grid)
    filled = _sphere(setup, cut) if setup.phantom.body.shape == "sphere" else _cylinder(setup, cut)
    reach = setup.profile_edge_mm * 5 + setup.thickness_mm / 2
    low, high = float(cut.Z.min()) - reach, float(cut.Z.max()) + reach
    for section in setup.phantom.sections_at(low, high):
        match section:
            case Ramps():
                filled = filled - _ramps(section, cut)
            case WedgeBars():
                filled = filled * (1 - _wedge_bars(section, cut, setup.body_diameter_mm / 2))
            case Lattice():
                filled = filled - _lattice(section, cut)
            case Rods():
                filled = filled - _rods(section, cut)
            case _:
                pass
    return filled


def slice_key(setup: Setup, plane: Plane) -> tuple[float, ...] | None:
    """Return the same key for slices that must look the same; None where that cannot be told."""
    if setup.phantom.body.shape == "sphere":
        return (round(abs(float(plane.from_patient(np.asarray(setup.centre_patient))[2])), 9),)
    if setup.tilt_x_deg or setup.tilt_y_deg:
        return None
    height = -float(plane.from_patient(np.asarray(setup.centre_patient))[2])
    reach = setup.profile_edge_mm * 5 + setup.thickness_mm / 2
    extent = setup.phantom.extent_mm
    assert extent is not None  # noqa: S101 - a cylinder has a length
    if abs(height) + reach < extent / 2 and setup.phantom.is_uniform(height - reach, height + reach):
        return ()
    return (round(height, 9),)


def _cut(setup: Setup, plane: Plane, grid: FineGrid) -> _Slice:
    x, y = object_place(setup, plane, grid.x_mm, grid.y_mm)
    to_phantom = setup.orientation.T
    origin = to_phantom @ (np.asarray(plane.position_patient) - np.asarray(setup.centre_patient))
    basis = to_phantom @ plane.axes
    X, Y, Z = (origin[k] + basis[k, 0] * x + basis[k, 1] * y for k in range(3))
    scale = np.array([1 / (1 + setup.scale_x_percent / 100), 1 / (1 + setup.scale_y_percent / 100)])
    profile = Profile(setup.thickness_mm, setup.profile_edge_mm)
    return _Slice(X, Y, Z, basis[:, 2], basis[:, :2] * scale, grid.blur_mm, profile)


def _step(distance: Floats, blur: float) -> Floats:
    """Blurred step: 0 far outside (negative distance), 1 far inside; computed only where it is neither."""
    from scipy.special import ndtr

    scaled = distance / blur
    out = (scaled > 0).astype(np.float64)
    near = np.abs(scaled) < _REACH
    out[near] = ndtr(scaled[near])
    return out


def _bars(value: Floats, edges: list[tuple[float, float]], blur: float) -> Floats:
    """Blurred indicator of disjoint intervals."""
    from scipy.special import ndtr

    low, high = edges[0][0] - _REACH * blur, edges[-1][1] + _REACH * blur
    at = np.linspace(low, high, max(64, math.ceil((high - low) / blur * 24)))
    table = np.zeros_like(at)
    for first, last in edges:
        table += ndtr((at - first) / blur) - ndtr((at - last) / blur)
    inside: Floats = np.interp(value, at, table, left=0.0, right=0.0)
    return inside


def _sphere(setup: Setup, cut: _Slice) -> Floats:
    from scipy.special import ndtr

    radius = setup.body_diameter_mm / 2
    along = cut.X * cut.along[0] + cut.Y * cut.along[1] + cut.Z * cut.along[2]  # height above the centre, the same everywhere
    height = float(along.mean())
    out_of = np.sqrt(np.maximum(cut.X**2 + cut.Y**2 + cut.Z**2 - height**2, 0.0))
    heights, weights = cut.profile.nodes(96)
    radii = np.sqrt(np.maximum(radius**2 - (height + heights) ** 2, 0.0))
    at = np.linspace(0.0, radius + 8 * cut.blur, math.ceil((radius + 8 * cut.blur) / cut.blur * 16))
    table = np.zeros_like(at)
    for r, w in zip(radii, weights, strict=True):
        if r > 0:
            table += w * ndtr((r - cut.blur**2 / (2 * max(r, cut.blur)) - at) / cut.blur)
    stretch = math.sqrt(abs(np.linalg.det(cut.in_plane.T @ cut.in_plane)))
    if abs(stretch - 1) < 1e-12:
        filled: Floats = np.interp(out_of, at, table, right=0.0)
        return filled
    return np.asarray(np.interp(out_of, at, table, right=0.0))


def _cylinder(setup: Setup, cut: _Slice) -> Floats:
    radius, half = setup.body_diameter_mm / 2, setup.phantom.extent_mm
    assert half is not None  # noqa: S101 - a cylinder has a length
    total: Floats | float = 0.0
    heights, weights = cut.shifts()
    for u, w in zip(heights, weights, strict=True):
        X, Y = cut.X + u * cut.along[0], cut.Y + u * cut.along[1]
        out_of = np.hypot(X, Y)
        near = np.abs(out_of - radius) < 10 * cut.blur
        part = (out_of < radius).astype(np.float64)
        unit = np.stack([X[near], Y[near]], axis=-1) / out_of[near][:, None]
        gradient = np.hypot(*(unit @ cut.in_plane[:2]).T)
        part[near] = _step((radius - out_of[near]) / gradient - cut.blur**2 / (2 * radius), cut.blur)
        total = total + w * part
    filled = np.asarray(total)
    reach = cut.profile.width_mm / 2 + 5 * cut.profile.edge_mm
    if np.abs(cut.Z).max() + reach > half / 2:
        filled = filled * cut.between(cut.Z, cut.along[2], -half / 2, half / 2, cut.slope((0, 0, 1)))[0]
    return filled


def _box(cut: _Slice, u: Floats, x: tuple[float, float], y: tuple[float, float]) -> Floats:
    across = _bars(cut.X + u * cut.along[0], [x], cut.blur * cut.slope((1, 0, 0)))
    return across * _bars(cut.Y + u * cut.along[1], [y], cut.blur * cut.slope((0, 1, 0)))


def _ramps(section: Ramps, cut: _Slice) -> Floats:
    (cx, cy), (wide, high) = section.block_centre_mm, section.block_size_mm
    across = (cx - wide / 2, cx + wide / 2)
    share, u = cut.between(cut.Z, cut.along[2], section.z_from_mm, section.z_to_mm, cut.slope((0, 0, 1)))
    missing = share * _box(cut, u, across, (cy - high / 2, cy + high / 2))
    for slot in section.slots:
        lift = cut.Z - section.z_mm - slot.slope * (cut.X - slot.crossing_x_mm)
        rate = float(cut.along[2] - slot.slope * cut.along[0])
        half = slot.thickness_mm / 2
        share, u = cut.between(lift, rate, -half, half, cut.slope((-slot.slope, 0, 1)))
        missing = missing - share * _box(
            cut, u, across, (slot.centre_y_mm - slot.height_mm / 2, slot.centre_y_mm + slot.height_mm / 2)
        )
    return missing


def _wedge_bars(section: WedgeBars, cut: _Slice, radius: float) -> Floats:
    missing: Floats = np.zeros_like(cut.Z)
    start = section.start_y_mm if abs(section.start_y_mm) < radius - 1 else section.start_y_mm - 20.0
    for bar in section.bars:
        end = cut.Y - (section.start_y_mm + section.length_mm) - bar.slope * (cut.Z - section.z_mm)
        rate = float(cut.along[1] - bar.slope * cut.along[2])
        share, u = cut.between(end, rate, -1e6, 0.0, cut.slope((0, 1, -bar.slope)))
        valid, _ = cut.between(cut.Z, cut.along[2], section.z_from_mm, section.z_to_mm, cut.slope((0, 0, 1)))
        side = _box(cut, u, (bar.x_from_mm, bar.x_to_mm), (start, start + 1e3))
        missing = missing + np.minimum(share, valid) * side
    return missing


def _lattice(section: Lattice, cut: _Slice) -> Floats:
    half, middle = section.bar_width_mm / 2, (section.bars - 1) / 2
    edges = [((k - middle) * section.pitch_mm - half, (k - middle) * section.pitch_mm + half) for k in range(section.bars)]
    span = [(-section.span_mm / 2, section.span_mm / 2)]
    total: Floats | float = 0.0
    blur_x, blur_y = cut.blur * cut.slope((1, 0, 0)), cut.blur * cut.slope((0, 1, 0))
    for u, w in zip(*cut.shifts(), strict=True):
        X, Y = cut.X + u * cut.along[0], cut.Y + u * cut.along[1]
        upright, level = _bars(X, edges, blur_x), _bars(Y, edges, blur_y)
        total = total + w * (upright * _bars(Y, span, blur_y) + level * _bars(X, span, blur_x) - upright * level)
    share, _ = cut.between(cut.Z, cut.along[2], section.z_from_mm, section.z_to_mm, cut.slope((0, 0, 1)))
    return np.asarray(total) * share


def _rods(section: Rods, cut: _Slice) -> Floats:
    from scipy.special import chndtr

    radius, blur, pitch = section.rod_diameter_mm / 2, cut.blur, section.pitch_mm
    at = np.linspace(0.0, radius + _REACH * blur, 2048)
    table = chndtr((radius / blur) ** 2, 2, (at / blur) ** 2)  # a disc blurred by a Gaussian, exactly
    most = math.floor(section.reach_mm / pitch)
    present = np.zeros((2 * most + 3, 2 * most + 3))
    for i, j, _, _ in section.rods_mm():
        present[j + most + 1, i + most + 1] = 1.0
    total: Floats | float = 0.0
    for u, w in zip(*cut.shifts(), strict=True):
        X, Y = np.broadcast_arrays(cut.X + u * cut.along[0], cut.Y + u * cut.along[1])
        i, j = np.rint(X / pitch), np.rint(Y / pitch)
        away = np.hypot(X - i * pitch, Y - j * pitch)
        column, row = (np.clip(k, -most - 1, most + 1).astype(np.intp) + most + 1 for k in (i, j))
        total = total + w * np.interp(away, at, table, right=0.0) * present[row, column]
    share, _ = cut.between(cut.Z, cut.along[2], section.z_from_mm, section.z_to_mm, cut.slope((0, 0, 1)))
    return np.asarray(total) * share
