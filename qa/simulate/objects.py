"""Phantom definitions become what a slice averages: density on a fine grid, with edges that do not alias.

Every edge is blurred by a Gaussian of about one cell of the fine grid, in closed form, and `qa.simulate.encode` divides the
Gaussian's transform out again. So the fine grid's samples carry the exact edge, not a staircase, and what aliases into the
acquired part of k-space is some 1e-5 of what belongs there. A Gaussian is separable and round at once, which is why a turned
rectangle, a slab or a disc keeps its closed form.

Averaging over the slice profile is exact (the profile's cumulative integral) for everything bounded by planes that the slice
cuts at a slope (ramps, wedges, end faces), and by Gauss-Legendre quadrature where a tilt only shifts an outline.
"""

import math
from dataclasses import replace

import numpy as np

from qa.geometry import Floats, Plane
from qa.phantoms import Lattice, Ramps, Rods, WedgeBars
from qa.simulate.fine import FineGrid, FineSlice, bars, mixed, step
from qa.simulate.setup import Setup
from qa.simulate.warp import jacobian, object_place

__all__ = ["density", "slice_key"]

Interval = tuple[float, float]
_BAND = 7.0  # half-width, in blurs, of the ring outside which an outline is plainly 0 or 1


def density(setup: Setup, plane: Plane, grid: FineGrid) -> Floats:
    """Average the phantom's density over a slice.

    Parameters
    ----------
    setup : Setup
        The scan.
    plane : Plane
        The slice.
    grid : FineGrid
        Where to.

    Returns
    -------
    (R q, C q) float64
        Share of fill, 0 to 1, each edge blurred by `grid.blur_mm`.
    """
    cut = _cut(setup, plane, grid)
    filled = _sphere(setup, cut) if setup.phantom.body.shape == "sphere" else _cylinder(setup, cut)
    low, high = float(cut.Z.min()) - cut.reach, float(cut.Z.max()) + cut.reach
    for section in setup.phantom.sections_at(low, high):
        match section:
            case Ramps():
                _take_ramps(section, cut, filled)
            case WedgeBars():
                _take_wedge_bars(section, cut, filled, setup.body_diameter_mm / 2)
            case Lattice():
                _take_lattice(section, cut, filled)
            case Rods():
                _take_rods(section, cut, filled)
            case _:
                pass
    if setup.air_bubble_mm:
        filled *= _below_the_air(setup, cut)
    if min(setup.filling_port_mm) > 0:
        _take_port(setup, cut, filled)
    return filled


def slice_key(setup: Setup, plane: Plane) -> tuple[float, ...] | None:
    """Return the same key for slices that must look the same; None where that cannot be told."""
    height = -float(plane.from_patient(np.asarray(setup.centre_patient))[2])
    if setup.air_bubble_mm or min(setup.filling_port_mm) > 0:
        return None
    if setup.phantom.body.shape == "sphere":
        return (round(abs(height), 9),)
    if setup.tilt_x_deg or setup.tilt_y_deg:
        return None
    reach = setup.profile.reach_mm
    extent = setup.phantom.extent_mm or 0.0
    if abs(height) + reach < extent / 2 and setup.phantom.is_uniform(height - reach, height + reach):
        return ()
    return (round(height, 9),)


def _cut(setup: Setup, plane: Plane, grid: FineGrid) -> FineSlice:
    x, y = object_place(setup, plane, grid.x_mm, grid.y_mm)
    to_phantom = setup.orientation.T
    origin = to_phantom @ (np.asarray(plane.position_patient) - np.asarray(setup.centre_patient))
    basis = to_phantom @ plane.axes
    X, Y, Z = (origin[k] + basis[k, 0] * x + basis[k, 1] * y for k in range(3))
    stretch = jacobian(setup, plane, grid.x_mm, grid.y_mm)
    return FineSlice(X, Y, Z, basis, stretch, grid.blur_mm, setup.profile)


def _sphere(setup: Setup, cut: FineSlice) -> Floats:
    from scipy.special import ndtr

    radius = setup.body_diameter_mm / 2
    along = cut.along
    height = float(cut.X[0, 0] * along[0] + cut.Y[0, 0] * along[1] + cut.Z[0, 0] * along[2])
    out_of = np.sqrt(np.maximum(cut.X**2 + cut.Y**2 + cut.Z**2 - height**2, 0.0))
    heights, weights = cut.profile.nodes(96)
    radii = np.sqrt(np.maximum(radius**2 - (height + heights) ** 2, 0.0))
    low, high = float(radii.min()) - _BAND * cut.blur, float(radii.max()) + _BAND * cut.blur

    def table(blur: float) -> tuple[Floats, Floats]:
        at = np.linspace(max(low, 0.0), high, max(64, math.ceil((high - max(low, 0.0)) / blur * 24)))
        shares = np.zeros_like(at)
        for r, w in zip(radii, weights, strict=True):
            if r > 0:
                shares += w * ndtr((r - blur**2 / (2 * max(r, blur)) - at) / blur)
        return at, shares

    filled = (out_of <= low).astype(np.float64)
    ring = (out_of > low) & (out_of < high)
    normal = np.stack([cut.X[ring], cut.Y[ring], cut.Z[ring]], axis=-1) - height * along
    steep = cut.steepness(normal / np.maximum(out_of[ring], 1e-9)[:, None], ring)
    filled[ring] = mixed(out_of[ring], table, cut.blur, steep)
    return filled


def _cylinder(setup: Setup, cut: FineSlice) -> Floats:
    radius, extent = setup.body_diameter_mm / 2, setup.phantom.extent_mm or 0.0
    out_of = np.hypot(cut.X, cut.Y)
    heights, weights = cut.shifts()
    sideways = float(np.abs(heights).max()) * math.hypot(cut.along[0], cut.along[1])
    band = _BAND * 1.3 * cut.blur + sideways
    filled = (out_of < radius).astype(np.float64)
    ring = np.abs(out_of - radius) < band
    X, Y = cut.X[ring], cut.Y[ring]
    unit = np.stack([X, Y, np.zeros_like(X)], axis=-1) / out_of[ring][:, None]
    steep = np.maximum(cut.steepness(unit, ring), 1e-3)  # a slice that grazes the side
    bend = cut.blur**2 / (2 * radius) * float(setup.axis[2]) ** 2
    share = np.zeros_like(X)
    for u, w in zip(heights, weights, strict=True):
        away = np.hypot(X + u * cut.along[0], Y + u * cut.along[1])
        share += w * step((radius - bend - away) / steep, cut.blur)
    filled[ring] = share
    if float(np.abs(cut.Z).max()) + cut.reach > extent / 2:
        filled *= cut.between(cut.Z, cut.along[2], -extent / 2, extent / 2, cut.slope((0, 0, 1)))[0]
    return filled


def _below_the_air(setup: Setup, cut: FineSlice) -> Floats:
    """Share of the profile below the level to which the body is filled; air gathers at the patient's front."""
    up = setup.orientation[1]  # patient y, which points to the back, in phantom coordinates
    highest = setup.body_diameter_mm / 2
    if setup.phantom.body.shape == "cylinder":
        highest = highest * math.sqrt(max(0.0, 1 - up[2] ** 2)) + (setup.phantom.extent_mm or 0.0) / 2 * abs(up[2])
    back = up[0] * cut.X + up[1] * cut.Y + up[2] * cut.Z
    return cut.between(back, float(up @ cut.along), setup.air_bubble_mm - highest, 1e6, cut.slope((up[0], up[1], up[2])))[0]


def _take_port(setup: Setup, whole: FineSlice, filled: Floats) -> None:
    turn, (wide, deep), radius = math.radians(setup.port_direction_deg), setup.filling_port_mm, setup.body_diameter_mm / 2
    turned = np.array([[math.cos(turn), math.sin(turn), 0], [-math.sin(turn), math.cos(turn), 0], [0, 0, 1]])
    outwards = turned[0, 0] * whole.X + turned[0, 1] * whole.Y
    sideways = turned[1, 0] * whole.X + turned[1, 1] * whole.Y
    # carried on outside the body, or the blurred edges of both would leave a film of signal
    depth, width = (radius - deep, radius + 20.0), (-wide / 2, wide / 2)
    place, cut = replace(whole, X=outwards, Y=sideways, basis=turned @ whole.basis).part(depth, width)
    share, u = _within(cut, -wide / 2, wide / 2)
    filled[place] *= 1 - share * _box(cut, np.asarray(u), depth, width)


def _box(cut: FineSlice, u: Floats, x: Interval, y: Interval) -> Floats:
    across = bars(cut.X + u * cut.along[0], [x], cut.blur, cut.slope((1, 0, 0)))
    return across * bars(cut.Y + u * cut.along[1], [y], cut.blur, cut.slope((0, 1, 0)))


def _within(cut: FineSlice, low: float, high: float) -> tuple[Floats | float, Floats | float]:
    """Share of the profile between two heights of the phantom, and the mean height above the slice's middle where it is."""
    if float(cut.Z.min()) - cut.reach >= low and float(cut.Z.max()) + cut.reach <= high:
        return 1.0, 0.0
    return cut.between(cut.Z, cut.along[2], low, high, cut.slope((0, 0, 1)))


def _take_ramps(section: Ramps, whole: FineSlice, filled: Floats) -> None:
    (cx, cy), (wide, high) = section.block_centre_mm, section.block_size_mm
    across, block = (cx - wide / 2, cx + wide / 2), (cy - high / 2, cy + high / 2)
    place, cut = whole.part(across, block)
    share, u = _within(cut, section.z_from_mm, section.z_to_mm)
    missing = share * _box(cut, np.asarray(u), across, block)
    for slot in section.slots:
        lift = cut.Z - section.z_mm - slot.slope * (cut.X - slot.crossing_x_mm)
        rate = float(cut.along[2] - slot.slope * cut.along[0])
        half = slot.thickness_mm / 2
        share, u = cut.between(lift, rate, -half, half, cut.slope((-slot.slope, 0, 1)))
        y = (slot.centre_y_mm - slot.height_mm / 2, slot.centre_y_mm + slot.height_mm / 2)
        missing = missing - share * _box(cut, u, across, y)
    filled[place] -= missing


def _take_wedge_bars(section: WedgeBars, whole: FineSlice, filled: Floats, radius: float) -> None:
    # A bar that starts at the body's edge is carried on outside, or the blurred edges of both would leave a film of signal.
    start = section.start_y_mm - 20.0 if abs(section.start_y_mm) > radius - 1 else section.start_y_mm
    nominal = section.start_y_mm + section.length_mm
    longest = nominal + section.reach_mm * max(abs(bar.slope) for bar in section.bars)
    wide = (min(bar.x_from_mm for bar in section.bars), max(bar.x_to_mm for bar in section.bars))
    place, cut = whole.part(wide, (start, longest))
    valid, _ = _within(cut, section.z_from_mm, section.z_to_mm)
    covered = np.zeros_like(cut.Z)
    for bar in section.bars:
        end = cut.Y - nominal - bar.slope * (cut.Z - section.z_mm)
        rate = float(cut.along[1] - bar.slope * cut.along[2])
        share, u = cut.between(end, rate, -1e6, 0.0, cut.slope((0, 1, -bar.slope)))
        covered += np.minimum(share, valid) * _box(cut, u, (bar.x_from_mm, bar.x_to_mm), (start, start + 1e3))
    filled[place] *= 1 - covered


def _take_lattice(section: Lattice, whole: FineSlice, filled: Floats) -> None:
    half, middle = section.bar_width_mm / 2, (section.bars - 1) / 2
    edges = [((k - middle) * section.pitch_mm - half, (k - middle) * section.pitch_mm + half) for k in range(section.bars)]
    span = (-section.span_mm / 2, section.span_mm / 2)
    place, cut = whole.part(span, span)
    along_x, along_y = cut.slope((1, 0, 0)), cut.slope((0, 1, 0))
    total = np.zeros_like(cut.Z)
    for u, w in zip(*cut.shifts(), strict=True):
        X, Y = cut.X + u * cut.along[0], cut.Y + u * cut.along[1]
        upright, level = bars(X, edges, cut.blur, along_x), bars(Y, edges, cut.blur, along_y)
        inside_x, inside_y = bars(X, [span], cut.blur, along_x), bars(Y, [span], cut.blur, along_y)
        total += w * (upright * inside_y + level * inside_x - upright * level)
    filled[place] -= total * _within(cut, section.z_from_mm, section.z_to_mm)[0]


def _take_rods(section: Rods, whole: FineSlice, filled: Floats) -> None:
    from scipy.special import chndtr

    radius, pitch = section.rod_diameter_mm / 2, section.pitch_mm

    def table(blur: float) -> tuple[Floats, Floats]:
        at = np.linspace(0.0, radius + _BAND * blur, 1024)
        return at, chndtr((radius / blur) ** 2, 2, (at / blur) ** 2)  # a disc blurred by a Gaussian, exactly

    most = math.floor(section.reach_mm / pitch)
    present = np.zeros((2 * most + 3, 2 * most + 3))
    for i, j, _, _ in section.rods_mm():
        present[j + most + 1, i + most + 1] = 1.0
    side = (-section.reach_mm - pitch / 2, section.reach_mm + pitch / 2)
    place, cut = whole.part(side, side)
    steep = np.sqrt(0.5 * (np.square(cut.slope((1, 0, 0))) + np.square(cut.slope((0, 1, 0)))))
    total = np.zeros_like(cut.Z)
    for u, w in zip(*cut.shifts(), strict=True):
        X, Y = cut.X + u * cut.along[0], cut.Y + u * cut.along[1]
        i, j = np.rint(X / pitch), np.rint(Y / pitch)
        column, row = (np.clip(k, -most - 1, most + 1).astype(np.intp) + most + 1 for k in (i, j))
        away = np.hypot(X - i * pitch, Y - j * pitch)
        total += w * present[row, column] * mixed(away, table, cut.blur, steep)
    filled[place] -= total * _within(cut, section.z_from_mm, section.z_to_mm)[0]
