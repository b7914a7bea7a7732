"""The block of crossed ramps in one slice: a model of its pixels, fitted to them.

Across the block (v) the image is that of sharp edges: fill, block, slot, block, slot, block, fill, each edge with the step
response of the image (`qa.locate.response`), because fill five times as bright as the slots lies half a millimetre from
them and rings into them. Along the slots (u) each bar is the slice profile drawn out by the slope, blurred by the slab's
own thickness: two edges, each a box (the slab) smoothed by a Gaussian (soft edges of the profile). Both are levelled by the
fill on both sides of the block.

The fit is to squared magnitudes, whose expectation is the squared signal plus a constant, for one channel as for many
(Gudbjartsson and Patz 1995; Constantinides et al. 1997), weighted by their variance. So the noise floor, however high, neither
shortens nor lengthens a bar, and half height is half of the signal's height.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.locate.response import Response, Step
from qa.locate.view import SliceView
from qa.measure.profiles import Reader, rise
from qa.phantoms import Ramps

__all__ = ["RampFit", "fit_ramps"]

_LEAK = 0.02
"""Share by which the model of what rings in from the fill may be wrong; it takes weight from pixels near the block's edges."""
_LEAST_SOFT_MM = 0.1
_LEAST_GHOST = 0.006
"""What else may lie over the block in phase with it, as a share of the fill: a ghost of the body, in most scans."""
_STEPS = 20
_SETTLED_MM = 0.05
_ACROSS_MM = 0.1
_PARAMETERS = 14
_SHIFT, _TURN, _FLOOR, _SOFT, _SPACING, _BOX, _GHOST, _SCALE = 0, 1, 8, 9, 10, 11, 12, 13


def _bar(slot: int) -> tuple[int, int, int]:
    """Places of a bar's middle, length and height in the list of parameters."""
    return 2 + 3 * slot, 3 + 3 * slot, 4 + 3 * slot


@dataclass(frozen=True, eq=False)
class _Pixels:
    """The block's pixels: u along and v across it from its middle (mm), squared magnitude, level of the fill and noise.

    `where` tells which pixels of the window (R, C) they are.
    """

    u: Floats
    v: Floats
    power: Floats
    level: Floats
    sigma: float
    where: NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class RampFit:
    """What the fit found.

    Attributes
    ----------
    middles_mm, lengths_mm, heights : (2,) float
        Of the bars in the two slots: phantom x of the middle, full width at half maximum along phantom x, and height as a
        share of the fill's signal.
    covariance_mm2 : (2, 2) float
        Of the lengths.
    u_heights : (2,) float
        Standard uncertainty of the heights.
    soft_mm : float
        Standard deviation of the profile's edges, in slice thickness.
    thickness_mm : float
        Slope times the lengths' harmonic mean, both along phantom x.
    shift_mm, turn_deg : float
        Of the block against the pose, across the slots.
    floor : float
        Noise floor as a magnitude.
    misfit : float
        Mean squared residual over its expectation from noise, where little rings in.
    heights_mm, amplitudes : (N,) float
        Every pixel of both slots: height in the slice, and signal as a share of the bar's.
    """

    middles_mm: Floats
    lengths_mm: Floats
    heights: Floats
    covariance_mm2: Floats
    u_heights: Floats
    soft_mm: float
    thickness_mm: float
    shift_mm: float
    turn_deg: float
    floor: float
    misfit: float
    heights_mm: Floats
    amplitudes: Floats


def fit_ramps(image: Floats, view: SliceView, section: Ramps, thickness_mm: float) -> RampFit | str:
    """Fit the model to the block's pixels.

    Parameters
    ----------
    image : (R, C) array
        Magnitude image of the slice through the ramps.
    view : SliceView
        The slice in the phantom's frame.
    section : Ramps
        The block.
    thickness_mm : float
        About how thick the slice is.

    Returns
    -------
    RampFit or str
        Or a plain reason why the bars cannot be read.
    """
    across = view.pitch_mm(0.0, 1.0)
    pixels = _read(image, view, section, across)
    if isinstance(pixels, str):
        return pixels
    model = _Model(section, view, pixels, across)
    start = model.start(thickness_mm)
    return model.solve(start)


def _read(image: Floats, view: SliceView, section: Ramps, across_mm: float) -> _Pixels | str:
    """Cut the block out, and level it by the fill on both sides."""
    (x, y), (width, height) = section.block_centre_mm, section.block_size_mm
    band = 10.0 + 1.6 * across_mm
    window = view.window((x - width / 2 - 3, x + width / 2 + 3), (y - height / 2 - band, y + height / 2 + band))
    part = image[window.rows, window.columns].astype(np.float64)
    u, v = window.X - x, window.Y - y
    along = np.abs(u) < width / 2 - 1.5 * view.pitch_mm(1.0, 0.0)
    beside = np.abs(v) - height / 2
    fill = (np.abs(u) < width / 2 + 3) & (beside > 1.6 * across_mm) & (beside < band)
    block = along & (beside < 1.5 * across_mm)
    for sign in (-1, 1):
        if np.count_nonzero(fill & (sign * v > 0)) < 50 or np.count_nonzero(block) < 100:
            return "the image does not reach round the ramp block"
    terms = _surface(u[fill] / width, v[fill] / height)
    coefficients = np.linalg.solve(terms.T @ terms, terms.T @ part[fill])
    sigma = 1.4826 * float(np.median(np.abs(part[fill] - terms @ coefficients)))
    level = _surface(u[block] / width, v[block] / height) @ coefficients
    if sigma <= 0 or level.min() <= 0:
        return "there is no fill signal beside the ramp block to level it by"
    if level.min() < 3 * sigma:
        return "the ramps are lost in the noise"
    return _Pixels(u[block], v[block], part[block] ** 2, level, sigma, block)


def _surface(u: Floats, v: Floats) -> Floats:
    return np.stack([np.ones_like(u), u, u * u, u**3, v, u * v], axis=-1)


def _together(residual: Floats, where: NDArray[np.bool_]) -> float:
    """Return how many pixels share their noise: the sum of the autocorrelation over the nearest lags, axis by axis."""
    spread = np.zeros(where.shape)
    spread[where] = residual
    own = float(np.mean(residual**2))
    factor = 1.0
    for values, known in ((spread, where), (spread.T, where.T)):
        count = max(1, int(np.count_nonzero(known[1:] & known[:-1])))
        share = float((values[1:] * values[:-1]).sum()) / count / own
        factor *= 1 + 2 * share if share > 3 / math.sqrt(count) else 1.0
    return factor


@dataclass(frozen=True, eq=False)
class _Expected:
    """Squared magnitudes (P,), slopes by the parameters (12, P), variance from noise, and what doubt of the leak adds."""

    power: Floats
    slopes: Floats
    noise: Floats
    leak: Floats


class _Model:
    """Squared magnitudes of the block's pixels as a function of twelve parameters, with its slopes."""

    def __init__(self, section: Ramps, view: SliceView, pixels: _Pixels, across_mm: float) -> None:
        self.section = section
        self.pixels = pixels
        self.across_mm = across_mm
        self.slopes = np.array([slot.slope for slot in section.slots])
        self.slope = float(np.mean(np.abs(self.slopes)))
        lean_x, lean_y = view.lean
        y = section.block_centre_mm[1]
        self.offset = np.array([slot.centre_y_mm - y for slot in section.slots])
        self.u = [pixels.u + lean_y * (pixels.v - v) / (lean_x - s) for v, s in zip(self.offset, self.slopes, strict=True)]
        climb = self.slopes - lean_x
        crossing = np.array([slot.crossing_x_mm - section.block_centre_mm[0] for slot in section.slots])
        at = np.array(
            [float(view.height(c + section.block_centre_mm[0], v + y)) for c, v in zip(crossing, self.offset, strict=True)]
        )
        self.middles = crossing + (at - section.z_mm) / climb
        self.per_mm = 1 / np.abs(climb)

    def start(self, thickness_mm: float) -> Floats:
        """Parameters to start from: bars where the pose says, as long as the thickness or a first look at the slot says."""
        start = np.zeros(_PARAMETERS)
        start[_SOFT], start[_SPACING], start[_BOX] = 0.04, 1.0, 0.5
        pixels = self.pixels
        share = pixels.power / pixels.level**2
        quiet = float(np.percentile(share, 5))
        start[_FLOOR] = quiet * float(np.mean(pixels.level**2))
        tries = []
        for k, slot in enumerate(self.section.slots):
            near = np.abs(pixels.v - self.offset[k]) < max(0.3 * slot.height_mm, 0.7 * self.across_mm)
            within = near & (np.abs(pixels.u - self.middles[k]) < 0.3 * thickness_mm * self.per_mm[k])
            height = math.sqrt(max(float(np.mean(share[within])) - quiet, 1e-4)) if within.any() else 0.1
            strong = near & (share > quiet + height**2 / 4)
            seen = self.section.block_size_mm[0] * int(np.count_nonzero(strong)) / max(1, int(np.count_nonzero(near)))
            tries.append((height, seen))
        for k, (height, seen) in enumerate(tries):
            expected = thickness_mm * self.per_mm[k]
            length = expected if 0.6 < seen / expected < 1.6 else max(seen, 2.0)
            start[list(_bar(k))] = self.middles[k], length, height
        return start

    def evaluate(self, q: Floats) -> _Expected:
        """Return what the parameters make of the pixels."""
        pixels, section = self.pixels, self.section
        u, level = pixels.u, pixels.level
        fill, *slits = self._across(q)((pixels.v - q[_SHIFT] - q[_TURN] * u) * (1 - q[_SCALE]))
        edge = _edge_table(section, math.sqrt(q[_SOFT]))
        lengths = q[[_bar(0)[1], _bar(1)[1]]]
        thickness = self.slope * 2 * lengths.prod() / lengths.sum()
        slopes = np.zeros((_PARAMETERS, u.size))
        signal, steep, by_spacing, by_box = (part.copy() for part in fill)
        for k, slit in enumerate(slits):
            to, lo, ho = _bar(k)
            middle, length, height = q[[to, lo, ho]]
            scale = thickness / length
            place = (self.u[k] - middle) * scale
            ((left, left_slope, left_soft),) = edge(place + thickness / 2)
            ((right, right_slope, right_soft),) = edge(place - thickness / 2)
            shape, seen = left - right, slit[0] * height
            bar = height * shape
            signal += slit[0] * bar
            steep += slit[1] * bar
            by_spacing += slit[2] * bar
            by_box += slit[3] * bar
            slopes[to] = seen * (right_slope - left_slope) * scale
            slopes[lo] = seen * (right_slope + left_slope) * (scale / 2)
            slopes[ho] = slit[0] * shape
            slopes[_SOFT] += seen * (left_soft - right_soft) / (2 * math.sqrt(q[_SOFT]))
        slopes[_SHIFT], slopes[_TURN], slopes[_SCALE] = -steep, -steep * u, -steep * pixels.v
        slopes[_SPACING], slopes[_BOX] = by_spacing * self.across_mm, by_box * self.across_mm
        strong = 2 * level**2 * signal
        slopes *= 2 * level**2 * (signal + q[_GHOST])
        slopes[_FLOOR], slopes[_GHOST] = 1.0, strong
        squared = (level * signal) ** 2
        noise = pixels.sigma**2
        return _Expected(
            squared + q[_GHOST] * strong + q[_FLOOR],
            slopes,
            2 * noise * (2 * squared + max(q[_FLOOR], noise)),
            (strong * _LEAK * fill[0]) ** 2,
        )

    def _across(self, q: Floats) -> Reader:
        """Image across the block of the fill and of each slot, with slopes by place, spacing and box."""
        response = Response(q[_SPACING] * self.across_mm, q[_BOX] * self.across_mm)
        far = float(np.abs(self.pixels.v).max()) + 3.5
        v: Floats = np.arange(-far, far + _ACROSS_MM, _ACROSS_MM)
        half = self.section.block_size_mm[1] / 2
        bounds = [(half, -half)]
        bounds += [(y - s.height_mm / 2, y + s.height_mm / 2) for y, s in zip(self.offset, self.section.slots, strict=True)]
        parts = [_combine(response.slopes(v - first), response.slopes(v - second)) for first, second in bounds]
        parts[0][0] += 1.0
        return Reader(-far, _ACROSS_MM, parts)

    def solve(self, start: Floats) -> RampFit | str:
        """Gauss-Newton with limited steps; blur and softness are held near what is usual by weak pulls."""
        pixels = self.pixels
        width = self.section.block_size_mm[0]
        q = start
        usual = np.array([1.0, 0.5, 0.04, 0.0, 0.0])
        pull = 1 / np.array([0.3, 0.7, 1.0, _LEAST_GHOST, 0.01]) ** 2
        held = [_SPACING, _BOX, _SOFT, _GHOST, _SCALE]
        limit = np.array([0.5, 0.02, 5, 6, 0.1, 5, 6, 0.1, np.inf, 0.1, 0.15, 0.3, 0.02, 0.02])
        low = np.array([-3, -0.1, -width, 1, 0.005, -width, 1, 0.005, 0, _LEAST_SOFT_MM**2, 0.9, 0.1, -0.1, -0.06])
        high = np.array([3, 0.1, width, 2 * width, 2, width, 2 * width, 2, np.inf, 4, 3, 3, 0.1, 0.06])
        for _ in range(_STEPS):
            expected = self.evaluate(q)
            residual = pixels.power - expected.power
            weighted = expected.slopes / (expected.noise + expected.leak)
            normal = weighted @ expected.slopes.T
            right = weighted @ residual
            normal[held, held] += pull
            right[held] += pull * (usual - q[held])
            scale = np.sqrt(np.diag(normal))
            if not np.isfinite(scale).all() or scale.min() <= 0:
                return "the bars of the ramps cannot be told from noise"
            change = np.linalg.solve(normal / np.outer(scale, scale) + 1e-6 * np.eye(_PARAMETERS), right / scale) / scale
            moved = np.clip(q + np.clip(change, -limit, limit), low, high)
            done = np.abs(moved - q)[[2, 3, 5, 6]].max() < _SETTLED_MM
            q = moved
            if done:
                break
        clean = expected.leak < 0.25 * expected.noise
        clean = clean if np.count_nonzero(clean) > 100 else np.ones_like(clean)
        where = pixels.where.copy()
        where[pixels.where] = clean
        noise = residual[clean] / np.sqrt(expected.noise[clean])
        misfit = float(np.mean(noise**2))
        scatter = (weighted * expected.noise) @ weighted.T * (misfit * _together(noise, where))
        return self._result(q, normal, scatter, misfit, residual)

    def _result(self, q: Floats, normal: Floats, scatter: Floats, misfit: float, residual: Floats) -> RampFit:
        free = [k for k in range(_PARAMETERS) if not (k == _SOFT and q[k] <= _LEAST_SOFT_MM**2 * 1.001)]
        covariance = np.zeros_like(normal)
        scale = np.sqrt(np.diag(normal)[free])
        part = normal[np.ix_(free, free)] / np.outer(scale, scale)
        inverse = np.linalg.inv(part + 1e-9 * np.eye(len(free))) / np.outer(scale, scale)
        covariance[np.ix_(free, free)] = inverse @ scatter[np.ix_(free, free)] @ inverse
        bars = np.array([_bar(0), _bar(1)])
        lengths = q[bars[:, 1]]
        thickness = float(self.slope * 2 * lengths.prod() / lengths.sum())
        heights, amplitudes = self._profile(q, residual)
        return RampFit(
            middles_mm=q[bars[:, 0]] + self.section.block_centre_mm[0],
            lengths_mm=lengths,
            heights=q[bars[:, 2]],
            covariance_mm2=covariance[np.ix_(bars[:, 1], bars[:, 1])],
            u_heights=np.sqrt(np.diag(covariance)[bars[:, 2]]),
            soft_mm=math.sqrt(q[_SOFT]),
            thickness_mm=thickness,
            shift_mm=float(q[_SHIFT]),
            turn_deg=math.degrees(q[_TURN]),
            floor=math.sqrt(q[_FLOOR]),
            misfit=misfit,
            heights_mm=heights,
            amplitudes=amplitudes,
        )

    def _profile(self, q: Floats, residual: Floats) -> tuple[Floats, Floats]:
        """Height in the slice and squared amplitude, in shares of the bar's, of the pixels in the middle of each slot.

        The squared amplitude is that of the fitted shape and what the pixel's power is off it: what rings in is left out.
        """
        pixels, section = self.pixels, self.section
        edge = _edge_table(section, math.sqrt(q[_SOFT]))
        lengths = q[[_bar(0)[1], _bar(1)[1]]]
        thickness = self.slope * 2 * lengths.prod() / lengths.sum()
        places, amplitudes = [], []
        for k, slot in enumerate(section.slots):
            middle, length, height = q[list(_bar(k))]
            near = np.abs(pixels.v - q[_SHIFT] - q[_TURN] * pixels.u - self.offset[k]) < max(
                0.3 * slot.height_mm, 0.6 * self.across_mm
            )
            place = (self.u[k][near] - middle) * thickness / length
            ((left, *_),), ((right, *_),) = edge(place + thickness / 2), edge(place - thickness / 2)
            places.append(place * math.copysign(1, self.slopes[k]))
            amplitudes.append((left - right) ** 2 + residual[near] / (pixels.level[near] * height) ** 2)
        return np.concatenate(places), np.concatenate(amplitudes)


def _combine(first: Step, second: Step) -> list[Floats]:
    """Difference of two steps: value, and slopes by place, spacing and box."""
    return [
        first.value - second.value,
        first.by_place - second.by_place,
        first.by_spacing - second.by_spacing,
        first.by_box - second.by_box,
    ]


def _edge_table(section: Ramps, soft_mm: float) -> Reader:
    """Rise of a bar's edge, with slopes by place and softness, against height in the slice."""
    box = float(np.mean([slot.thickness_mm for slot in section.slots]))
    far = box / 2 + 5 * soft_mm
    step = min(soft_mm / 4, box / 8)
    edge = rise(np.arange(-far, far + step, step), box, soft_mm)
    return Reader(-far, step, [[edge.value, edge.by_place, edge.by_soft]])
