"""What a mark of a lattice looks like in an image: a rod cut across, or two bars that cross, blurred as the image is."""

from functools import lru_cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.locate.response import Response

__all__ = ["Crossing", "Rod", "Shape"]


class Shape(Protocol):
    """A mark's image, 0 in the fill and 1 where all signal is missing, and its slopes along the image's x and y."""

    def __call__(self, x_mm: Floats, y_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Evaluate at places (N, P) from each mark's centre, in-plane mm."""
        ...


class Rod:
    """A disc, blurred along both image axes: exact, from a table over one quadrant.

    Parameters
    ----------
    radius_mm : float
        Of the rod.
    responses : tuple of Response
        Along the image's x and y.
    reach_mm : float
        How far from the centre it will be asked for.
    step_mm : float
        Step of the table.
    """

    def __init__(self, radius_mm: float, responses: tuple[Response, Response], reach_mm: float, step_mm: float) -> None:
        self._tables = _rod_tables(radius_mm, responses, int(np.ceil(reach_mm / step_mm)) + 3, step_mm)
        self._step = step_mm

    def __call__(self, x_mm: Floats, y_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Evaluate at places (N, P) from each mark's centre, in-plane mm."""
        width = len(self._tables[0])
        x, y = np.abs(x_mm) / self._step, np.abs(y_mm) / self._step
        j, i = np.minimum(x.astype(np.intp), width - 2), np.minimum(y.astype(np.intp), width - 2)
        right, below = np.minimum(x - j, 1.0), np.minimum(y - i, 1.0)
        at = i * width + j
        dark, by_x, by_y = (_between(table.reshape(-1), at, width, right, below) for table in self._tables)
        return dark, by_x * np.sign(x_mm), by_y * np.sign(y_mm)


def _between(flat: Floats, at: NDArray[np.intp], width: int, right: Floats, below: Floats) -> Floats:
    """Bilinear interpolation in a table of rows `width` long."""
    upper = flat[at] + right * (flat[at + 1] - flat[at])
    lower = flat[at + width] + right * (flat[at + width + 1] - flat[at + width])
    mixed: Floats = upper + below * (lower - upper)
    return mixed


@lru_cache(maxsize=32)
def _rod_tables(radius_mm: float, responses: tuple[Response, Response], count: int, step_mm: float) -> tuple[Floats, ...]:
    """Darkness of the disc over the quadrant from its centre, and its slopes along x and y.

    The disc is cut into strips along x; each strip's image along x is a difference of steps, and along y a line's, summed by
    Gauss-Legendre quadrature over the angle at which the strip's ends lie on the rim.
    """
    across, down = responses
    places = np.arange(count) * step_mm
    nodes, weights = np.polynomial.legendre.leggauss(24)
    turn = nodes * np.pi / 2
    chord = radius_mm * np.cos(turn)
    strip = across.step(places + chord[:, None]) - across.step(places - chord[:, None])
    line = down.slopes(places - radius_mm * np.sin(turn)[:, None]).by_place
    table: Floats = (line * (weights * chord * np.pi / 2)[:, None]).T @ strip
    slopes = [np.asarray(np.gradient(table, step_mm, axis=axis), dtype=np.float64) for axis in (1, 0)]
    slopes[0][:, 0], slopes[1][0] = 0.0, 0.0
    return table, slopes[0], slopes[1]


class Crossing:
    """Two bars that cross, in a lattice turned against the image; at the rim the arms that are missing are left out.

    Parameters
    ----------
    width_mm : float
        Of the bars.
    responses : tuple of Response
        Along the lattice's own two axes.
    lay : (2, 2) float
        Places along the lattice's axes of in-plane places: (u, v) = lay @ (x, y).
    arms : (N, 4) bool
        For each mark, whether bars run on towards smaller u, larger u, smaller v, larger v.
    reach_mm : float
        How far from the centre it will be asked for.
    """

    def __init__(
        self,
        width_mm: float,
        responses: tuple[Response, Response],
        lay: Floats,
        *,
        arms: NDArray[np.bool_],
        reach_mm: float,
    ) -> None:
        self._half = width_mm / 2
        self._lay = lay
        self._ends = ~arms.all(axis=1)
        self._arms = arms[self._ends][:, :, None]
        self._tables = tuple(_Table(response, reach_mm + width_mm) for response in responses)

    def __call__(self, x_mm: Floats, y_mm: Floats) -> tuple[Floats, Floats, Floats]:
        """Evaluate at places (N, P) from each mark's centre, in-plane mm."""
        (a, b), (c, d) = self._lay
        u, v = a * x_mm + b * y_mm, c * x_mm + d * y_mm
        (u_low, u_low_slope), (u_high, u_high_slope) = (self._tables[0](u + side * self._half) for side in (1, -1))
        (v_low, v_low_slope), (v_high, v_high_slope) = (self._tables[1](v + side * self._half) for side in (1, -1))
        bar_u, bar_v = u_low - u_high, v_low - v_high
        by_u, by_v = u_low_slope - u_high_slope, v_low_slope - v_high_slope
        dark = bar_u + bar_v - bar_u * bar_v
        dark_by_u, dark_by_v = by_u * (1 - bar_v), by_v * (1 - bar_u)
        if self._ends.any():
            e = self._ends
            left, right, up, down = (self._arms[:, k] for k in range(4))
            lost_u, lost_u_slope = (
                _lost(left, right, u_low[e], u_high[e]),
                _lost(left, right, u_low_slope[e], u_high_slope[e], 0),
            )
            lost_v, lost_v_slope = _lost(up, down, v_low[e], v_high[e]), _lost(up, down, v_low_slope[e], v_high_slope[e], 0)
            dark[e] -= bar_u[e] * lost_v + bar_v[e] * lost_u
            dark_by_u[e] -= by_u[e] * lost_v + bar_v[e] * lost_u_slope
            dark_by_v[e] -= by_v[e] * lost_u + bar_u[e] * lost_v_slope
        return dark, a * dark_by_u + c * dark_by_v, b * dark_by_u + d * dark_by_v


def _lost(before: NDArray[np.bool_], after: NDArray[np.bool_], low: Floats, high: Floats, whole: float = 1.0) -> Floats:
    """How much of the other bar is missing beyond the ends of this one; with `whole` 0, the slope of that."""
    missing: Floats = np.where(before, 0.0, whole - low) + np.where(after, 0.0, high)
    return missing


class _Table:
    """A step response and its slope, read off a fine table."""

    _FINE = 24

    def __init__(self, response: Response, reach_mm: float) -> None:
        count = int(np.ceil(reach_mm / response.spacing_mm * self._FINE)) + 2
        self._scale = self._FINE / response.spacing_mm
        step = response.slopes(np.arange(-count, count + 1) / self._scale)
        self._values, self._slopes = step.value, step.by_place
        self._rises, self._bends = np.diff(step.value, append=step.value[-1]), np.diff(step.by_place, append=step.by_place[-1])
        self._middle = count

    def __call__(self, place_mm: Floats) -> tuple[Floats, Floats]:
        at = place_mm * self._scale + self._middle
        k = at.astype(np.intp)
        rest = at - k
        value, rise, slope, bend = (
            np.take(table, k, mode="clip") for table in (self._values, self._rises, self._slopes, self._bends)
        )
        return value + rest * rise, slope + rest * bend
