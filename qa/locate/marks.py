"""Finding the dark marks of a lattice: rods cut across, or the crossings of bars.

A first look finds them to about a pixel (`find_marks`); a fit of the mark's own shape, blurred as the image is, to the pixels
round each one finds its centre to hundredths of a pixel (`fit_marks`).
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.locate.response import Response
from qa.locate.shapes import Crossing, Rod, Shape
from qa.locate.view import SliceView
from qa.phantoms import Lattice, Rods

__all__ = ["Fitted", "find_marks", "fit_marks"]

_BLURS = ((1.0, 0.1), (1.1, 1.0), (1.4, 0.8), (1.8, 1.8))
"""Spacing and box, in pixels, among which the image's own blur is told: sharp, averaged over a pixel, or zero filled."""
_STEPS = 4
_TRIAL = 6
_SETTLED_PX = 0.02


@dataclass(frozen=True, eq=False)
class Fitted:
    """Centres of marks.

    Attributes
    ----------
    place_mm : (N, 2) float
        In-plane mm of the image.
    u_mm : (N,) float
        Standard uncertainty along either axis.
    depth : (N,) float
        How dark the mark is, as a share of the fill's signal round it.
    good : (N,) bool
        The fit stayed near its start, all of its pixels lie in the image, and the mark is about as dark as the others.
    """

    place_mm: Floats
    u_mm: Floats
    depth: Floats
    good: NDArray[np.bool_]


def find_marks(image: NDArray[np.floating], view: SliceView, section: Rods | Lattice, reach_mm: float) -> Floats:
    """Find dark spots of about a mark's size, strongest contrast with what surrounds them.

    Parameters
    ----------
    image : (R, C) array
        Magnitude image.
    view : SliceView
        The slice in the phantom's frame.
    section : Rods or Lattice
        Size and pitch of the marks.
    reach_mm : float
        How far from the axis to look.

    Returns
    -------
    (M, 2) float
        Their places in the phantom's frame, mm; false ones may be among them.
    """
    from scipy import ndimage

    window = view.window((-reach_mm, reach_mm), (-reach_mm, reach_mm))
    part = np.asarray(image[window.rows, window.columns], dtype=np.float32)
    pixel = np.array(view.plane.pixel_mm)

    def box(width_mm: float) -> NDArray[np.float32]:
        size = [max(1, 2 * round((width_mm / mm - 1) / 2) + 1) for mm in pixel]
        averaged: NDArray[np.float32] = ndimage.uniform_filter(part, size, mode="nearest")
        return averaged

    width = section.rod_diameter_mm if isinstance(section, Rods) else 2 * section.bar_width_mm
    inner, outer = box(width), box(0.95 * section.pitch_mm)
    dark = (outer - inner) / np.maximum(outer, 1e-3 * float(outer.max()) + 1e-9)
    dark[np.hypot(window.X, window.Y) > reach_mm] = -1
    reach = (0.33 if isinstance(section, Rods) else 0.52) * section.pitch_mm
    half = [max(1, round(reach / mm)) for mm in pixel]
    peak = ndimage.maximum_filter(dark, [2 * h + 1 for h in half], mode="constant", cval=-1.0)
    rows, columns = np.nonzero((dark == peak) & (dark > 0.05))
    if not len(rows):
        return np.zeros((0, 2))
    strength = dark[rows, columns]
    usual = float(np.median(np.sort(strength)[::-1][: _expected(section)]))
    kept = strength > 0.45 * usual
    rows, columns = rows[kept], columns[kept]
    places = np.stack(
        [
            (window.columns.start + columns + _vertex(dark, rows, columns, across=True)) * pixel[1],
            (window.rows.start + rows + _vertex(dark, rows, columns, across=False)) * pixel[0],
        ],
        axis=1,
    )
    return view.to_phantom(places)


def _vertex(values: NDArray[np.floating], rows: NDArray[np.intp], columns: NDArray[np.intp], *, across: bool) -> Floats:
    """Place of a parabola's vertex through a peak and its two neighbours along one axis, pixels from the peak."""
    down, right = (0, 1) if across else (1, 0)
    height, width = values.shape
    before = values[np.maximum(rows - down, 0), np.maximum(columns - right, 0)].astype(np.float64)
    after = values[np.minimum(rows + down, height - 1), np.minimum(columns + right, width - 1)].astype(np.float64)
    bend = before - 2 * values[rows, columns] + after
    shift: Floats = np.clip(0.5 * (before - after) / np.where(bend < 0, bend, -1.0), -0.5, 0.5)
    return shift


def _expected(section: Rods | Lattice) -> int:
    return len(section.rods_mm()) if isinstance(section, Rods) else section.bars**2


def fit_marks(
    image: NDArray[np.floating],
    view: SliceView,
    section: Rods | Lattice,
    start_mm: Floats,
    *,
    turn_deg: float,
    arms: NDArray[np.bool_],
) -> Fitted:
    """Find the centres of marks by least squares on the pixels round each of them.

    The fit has a level with its slopes, the mark's depth and its centre; the shape is that of the definition, blurred as the
    image is. It is symmetric about its centre (at the rim of bars, where it is not, missing arms are left out), so that
    neither blur nor noise floor moves the centre. Standard uncertainty: from the residuals, taken to be correlated as they
    are found to be.

    Parameters
    ----------
    image : (R, C) array
        Magnitude image.
    view : SliceView
        The slice in the phantom's frame.
    section : Rods or Lattice
        Shape of the marks.
    start_mm : (N, 2) float
        Places to about a pixel, phantom mm.
    turn_deg : float
        Turn of the lattice in the phantom's frame.
    arms : (N, 4) bool
        Whether a bar runs on towards smaller x, larger x, smaller y, larger y of the lattice; without meaning for rods.

    Returns
    -------
    Fitted
        Centres with their uncertainty.
    """
    patches = _Patches.cut(image, view, view.to_image(start_mm[:, 0], start_mm[:, 1]), _window_mm(view, section))
    axes = _axes(turn_deg)
    middle = np.argsort(np.hypot(*start_mm.T))[:_TRIAL]
    trial = patches.some(middle)
    shapes = (_shape(view, section, axes, arms=arms[middle], reach_mm=trial.reach_mm, blur=blur) for blur in _BLURS)
    blur = _BLURS[int(np.argmin([_fit(trial, shape, 1).misfit for shape in shapes]))]
    shape = _shape(view, section, axes, arms=arms, reach_mm=patches.reach_mm, blur=blur)
    return _judge(_fit(patches, shape, _STEPS), patches, section)


def _window_mm(view: SliceView, section: Rods | Lattice) -> float:
    """Radius of the pixels that a fit looks at: the mark and some fill round it, well short of the next mark."""
    pixel = max(view.plane.pixel_mm)
    if isinstance(section, Rods):
        return min(0.45 * section.pitch_mm, section.rod_diameter_mm / 2 + 2.5 * pixel)
    return min(0.5 * section.pitch_mm, section.bar_width_mm / 2 + 3 * pixel)


def _axes(turn_deg: float) -> Floats:
    """Phantom directions of the lattice's two axes, as rows."""
    turn = np.radians(turn_deg)
    return np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])


def _shape(
    view: SliceView,
    section: Rods | Lattice,
    axes: Floats,
    *,
    arms: NDArray[np.bool_],
    reach_mm: float,
    blur: tuple[float, float],
) -> Shape:
    """Return the mark under one blur: spacing and box in pixels."""
    spacing, box = blur
    if isinstance(section, Rods):
        rows, columns = view.plane.pixel_mm
        along = tuple(Response(spacing * mm, box * mm) for mm in (columns, rows))
        return Rod(section.rod_diameter_mm / 2, (along[0], along[1]), reach_mm, min(rows, columns) / 8)
    along = tuple(Response(spacing * mm, box * mm) for mm in (view.pitch_mm(*axis) for axis in axes))
    return Crossing(section.bar_width_mm, (along[0], along[1]), axes @ view.lay[:2], arms=arms, reach_mm=reach_mm)


@dataclass(frozen=True, eq=False)
class _Patches:
    """Pixels round each mark: values (N, P), in-plane places (1, P) from the patch's own middle, and the weight's reach.

    `kept` tells which pixels of a rectangle of `shape` they are.
    """

    values: Floats
    x_mm: Floats
    y_mm: Floats
    start_mm: Floats
    middle_mm: Floats
    window_mm: float
    soft_mm: float
    inside: NDArray[np.bool_]
    kept: NDArray[np.intp]
    shape: tuple[int, int]

    @property
    def reach_mm(self) -> float:
        """Farthest that a pixel may lie from a centre."""
        return float(np.hypot(np.abs(self.x_mm).max(), np.abs(self.y_mm).max())) + 2 * self.soft_mm

    @classmethod
    def cut(cls, image: NDArray[np.floating], view: SliceView, places: Floats, window_mm: float) -> "_Patches":
        rows_mm, columns_mm = view.plane.pixel_mm
        soft = max(rows_mm, columns_mm)
        down, across = (np.arange(-h, h + 1) for h in (int(np.ceil(window_mm / mm)) + 1 for mm in (rows_mm, columns_mm)))
        y, x = (v.ravel() for v in np.meshgrid(down * rows_mm, across * columns_mm, indexing="ij"))
        kept = np.flatnonzero(np.hypot(x, y) < window_mm + 1.2 * soft)
        row, column = np.round(places[:, 1] / rows_mm).astype(np.intp), np.round(places[:, 0] / columns_mm).astype(np.intp)
        i, j = row[:, None] + np.repeat(down, len(across))[kept], column[:, None] + np.tile(across, len(down))[kept]
        height, width = image.shape
        inside = ((i >= 0) & (i < height) & (j >= 0) & (j < width)).all(axis=1)
        values = image[np.clip(i, 0, height - 1), np.clip(j, 0, width - 1)].astype(np.float64)
        middle = np.stack([column * columns_mm, row * rows_mm], axis=1)
        return cls(
            values=values,
            x_mm=x[None, kept],
            y_mm=y[None, kept],
            start_mm=places - middle,
            middle_mm=middle,
            window_mm=window_mm,
            soft_mm=soft,
            inside=inside,
            kept=kept,
            shape=(len(down), len(across)),
        )

    def some(self, which: NDArray[np.intp]) -> "_Patches":
        """Return a part of the marks."""
        return replace(
            self,
            values=self.values[which],
            start_mm=self.start_mm[which],
            middle_mm=self.middle_mm[which],
            inside=self.inside[which],
        )


@dataclass(frozen=True, eq=False)
class _Fit:
    """Centres from the patches' middles (N, 2), depth, level and variance of the centre per unit of noise (N,).

    Residuals and weights are (N, P).
    """

    centre_mm: Floats
    depth: Floats
    level: Floats
    spread: Floats
    residual: Floats
    weight: Floats

    @property
    def misfit(self) -> float:
        """Residual in shares of the level, over all marks."""
        share = (self.residual / self.level[:, None]) ** 2
        return float((share * self.weight).sum() / self.weight.sum())


def _fit(patches: _Patches, shape: Shape, steps: int) -> _Fit:
    """Gauss-Newton on level (1 + slopes) (1 - depth shape), all marks at once."""
    values = patches.values
    centre = patches.start_mm.copy()
    level = np.maximum(0.95 * values.max(axis=1), 1e-9)
    slopes = np.zeros((len(values), 2))
    depth = np.full(len(values), 0.9)
    limit = 0.7 * patches.soft_mm
    design = np.empty((len(values), 6, values.shape[1]))
    for _ in range(steps):
        x, y = patches.x_mm - centre[:, :1], patches.y_mm - centre[:, 1:]
        weight = np.clip((patches.window_mm - np.hypot(x, y)) / patches.soft_mm + 0.5, 0.0, 1.0)
        dark, by_x, by_y = shape(x, y)
        plane = level[:, None] + slopes[:, :1] * patches.x_mm + slopes[:, 1:] * patches.y_mm
        left = 1 - depth[:, None] * dark
        steep = plane * depth[:, None]
        design[:, 0], design[:, 1], design[:, 2] = left, patches.x_mm * left, patches.y_mm * left
        design[:, 3], design[:, 4], design[:, 5] = -plane * dark, steep * by_x, steep * by_y
        residual = values - plane * left
        weighted = design * weight[:, None, :]
        normal = weighted @ design.transpose(0, 2, 1)
        normal[:, range(6), range(6)] *= 1 + 1e-9
        normal[:, range(6), range(6)] += 1e-12
        change = np.linalg.solve(normal, (weighted @ residual[:, :, None]))[:, :, 0]
        level, slopes = level + change[:, 0], slopes + change[:, 1:3]
        depth = np.clip(depth + change[:, 3], 0.02, 2.0)
        centre = centre + np.clip(change[:, 4:], -limit, limit)
        moved = np.sort(np.abs(change[:, 4:]), axis=None)
        if moved[int(0.95 * moved.size)] < _SETTLED_PX * patches.soft_mm:
            break
    residual = residual - (change[:, None, :] @ design)[:, 0]
    spread = np.linalg.inv(normal)[:, [4, 5], [4, 5]].mean(axis=1)
    return _Fit(centre, depth, level, spread, residual, weight)


def _judge(fit: _Fit, patches: _Patches, section: Rods | Lattice) -> Fitted:
    """Keep the fits that can be believed, and tell how well."""
    limit = 0.3 * (section.rod_diameter_mm if isinstance(section, Rods) else section.pitch_mm / 2) + patches.soft_mm
    moved = np.hypot(*(fit.centre_mm - patches.start_mm).T)
    usual = float(np.median(fit.depth))
    scatter = np.sqrt((fit.residual**2 * fit.weight).sum(axis=1) / fit.weight.sum(axis=1))
    good = patches.inside & (moved < limit) & (fit.depth > 0.5 * usual) & (fit.depth < 1.6 * usual) & (fit.level > 0)
    typical = float(np.median(scatter[good])) if good.any() else 0.0
    good &= scatter < 4 * typical + 0.05 * np.abs(fit.level)
    noise = np.maximum(scatter, 0.7 * typical)
    factor = _independent(fit, good, patches)
    return Fitted(fit.centre_mm + patches.middle_mm, noise * np.sqrt(fit.spread * factor), fit.depth, good)


def _independent(fit: _Fit, good: NDArray[np.bool_], patches: _Patches) -> float:
    """Return how many pixels make one independent value: the sum of the residuals' autocorrelation over the nearest lags."""
    residual = np.zeros((np.count_nonzero(good), patches.shape[0] * patches.shape[1]))
    residual[:, patches.kept] = (fit.residual * (fit.weight > 0.5))[good]
    residual = residual.reshape(-1, *patches.shape)
    own = float((residual**2).sum())
    if own <= 0:
        return 1.0
    down = 2 * float((residual[:, 1:] * residual[:, :-1]).sum()) / own
    across = 2 * float((residual[:, :, 1:] * residual[:, :, :-1]).sum()) / own
    return max(1.0, 1 + down) * max(1.0, 1 + across)
