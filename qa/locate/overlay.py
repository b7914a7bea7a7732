"""Laying the expected sections over the pixels round them, in turn and height, by least squares."""

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from qa.geometry import Floats
from qa.locate.expected import TELLING, Places, expected_fill
from qa.locate.view import SliceView
from qa.phantoms import Lattice, Phantom, Ramps, WedgeBars
from qa.records import Acquisition, Pose

__all__ = ["overlay"]

_STEPS = 5
_SETTLED_DEG, _SETTLED_MM = 0.03, 0.03
_STEP = 0.25
_BLUR = 1.2
_USUAL_DEG, _USUAL_MM = 2.0, 3.0
"""How far turn and rise may be off at the start; they are held back with that weight."""
_PIXELS = 700
"""About how many pixels of each section are looked at, drawn evenly: a regular choice would beat against bars and edges."""
_LEAST_U_DEG = 0.006
_LEAST_U_MM = 0.07
_UNKNOWN_TILT_MM = 1.0
"""What a tilt of a degree that one slice cannot show does to the height on the axis, told from bars at the rim."""


@dataclass(frozen=True, eq=False)
class _Patch:
    """Pixels round one section in one slice, in the phantom's frame as it was first guessed."""

    section: Any
    slice_index: int
    values: Floats
    X: Floats
    Y: Floats
    Z: Floats


def overlay(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> Pose:
    """Improve a pose's turn about its axis and its height.

    Level (with slopes), floor and contrast of each section's pixels are fitted with them, so that shading and noise floor do
    not matter. Standard uncertainties come from the residuals; what the straight edges of the model leave out adds 0.006
    degrees and 0.07 mm.

    Parameters
    ----------
    acquisition : Acquisition
        Magnitude images.
    pose : Pose
        Right to a degree or two and to a few mm.
    phantom : Phantom
        What should be seen.

    Returns
    -------
    Pose
        With turn and height, each with its uncertainty, or None for what the slices do not show; remarks name slices that do
        not show the section they should.
    """
    thickness = acquisition.settings.slice_thickness_mm or (phantom.slices.thickness_mm if phantom.slices else 5.0)
    soft = _BLUR * max(acquisition.planes[0].pixel_mm)
    patches = _patches(acquisition, pose, phantom, thickness)
    if not patches:
        return pose
    turn, rise = 0.0, 0.0
    rises = any(isinstance(p.section, Ramps | WedgeBars) for p in patches)
    held = np.diag([_USUAL_DEG**-2, _USUAL_MM**-2 if rises else 1e9])
    for _ in range(_STEPS):
        normal, right = np.zeros((2, 2)), np.zeros(2)
        squares, count = 0.0, 0
        contrasts = []
        for patch in patches:
            slopes, residual, contrast = _linearised(patch, turn, rise, thickness, soft)
            contrasts.append(contrast)
            normal += slopes @ slopes.T
            right += slopes @ residual
            squares += float(residual @ residual)
            count += residual.size
        spread = max(squares / max(1, count - 2), 1e-12)
        inverse = np.linalg.inv(normal + spread * held)
        change = inverse @ right
        turn += float(np.clip(change[0], -2, 2))
        rise += float(np.clip(change[1], -3, 3))
        if abs(change[0]) < _SETTLED_DEG and abs(change[1]) < _SETTLED_MM:
            break
    u_turn, u_rise = (math.sqrt(spread * inverse[k, k]) for k in (0, 1))
    if pose.u_tilt_deg is None:
        u_rise = math.hypot(u_rise, _UNKNOWN_TILT_MM)
    c, s = math.cos(math.radians(turn)), math.sin(math.radians(turn))
    axes = pose.orientation @ np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
    known = any(isinstance(p.section, Ramps | WedgeBars) and seen > 0.3 for p, seen in zip(patches, contrasts, strict=True))
    missing = tuple(
        f"slice {p.slice_index + 1} does not show the {p.section.kind.replace('-', ' ')} that it should"
        for p, seen in zip(patches, contrasts, strict=True)
        if seen < 0.15
    )
    return replace(
        pose,
        orientation=axes,
        centre_patient=pose.centre_patient - rise * axes[:, 2],
        rotation_deg=(pose.rotation_deg + turn + 180) % 360 - 180,
        u_rotation_deg=math.hypot(u_turn, _LEAST_U_DEG),
        u_centre_mm=(*pose.u_centre_mm[:2], math.hypot(u_rise, _LEAST_U_MM) if known and u_rise < 2 else pose.u_centre_mm[2]),
        remarks=(
            *(r for r in pose.remarks if not (known and "stands in" in r)),
            *missing,
        ),
    )


def _patches(acquisition: Acquisition, pose: Pose, phantom: Phantom, thickness: float) -> list[_Patch]:
    """Cut out the pixels round each section, in the slice that lies deepest in it."""
    views = {s.slice_index: SliceView.of(acquisition.planes[s.slice_index], pose) for s in pose.sections}
    heights = {index: float(view.height(0.0, 0.0)) for index, view in views.items()}
    found = []
    for section in phantom.sections:
        if not isinstance(section, TELLING):
            continue
        low, high = section.z_from_mm, section.z_to_mm
        index = min(heights, key=lambda n: abs(heights[n] - (low + high) / 2))
        z = heights[index]
        if min(z + thickness / 2, high) - max(z - thickness / 2, low) < 0.5 * thickness:
            continue
        x_mm, y_mm = _around(section)
        window = views[index].window(x_mm, y_mm)
        X, Y = window.X, window.Y
        inside = (np.abs(X - sum(x_mm) / 2) < (x_mm[1] - x_mm[0]) / 2) & (np.abs(Y - sum(y_mm) / 2) < (y_mm[1] - y_mm[0]) / 2)
        inside &= np.hypot(X, Y) < 0.96 * (phantom.radius_mm or math.inf)
        if inside.sum() < 50:
            continue
        chosen = np.flatnonzero(inside)
        if len(chosen) > 1.5 * _PIXELS:
            chosen = np.sort(np.random.default_rng(0).choice(chosen, _PIXELS, replace=False, shuffle=False))
        values = acquisition.pixels[index][window.rows, window.columns].reshape(-1)[chosen].astype(np.float64)
        X, Y = X.reshape(-1)[chosen], Y.reshape(-1)[chosen]
        found.append(_Patch(section, index, values, X, Y, views[index].height(X, Y)))
    return found


def _around(section: Any) -> tuple[tuple[float, float], tuple[float, float]]:  # noqa: ANN401 - any telling section
    """Rectangle round a section in the phantom's x and y."""
    match section:
        case Ramps():
            (x, y), (width, height) = section.block_centre_mm, section.block_size_mm
            return (x - width / 2 - 6, x + width / 2 + 6), (y - height / 2 - 6, y + height / 2 + 6)
        case WedgeBars():
            ends = [v for bar in section.bars for v in (bar.x_from_mm, bar.x_to_mm)]
            far = section.start_y_mm + section.length_mm + section.reach_mm + 6
            return (min(ends) - 6, max(ends) + 6), (section.start_y_mm, far)
        case Lattice():
            half = section.span_mm / 2 + 4
            return (-half, half), (-half, half)
        case _:
            raise TypeError(section)


def _linearised(patch: _Patch, turn_deg: float, rise_mm: float, thickness: float, soft: float) -> tuple[Floats, Floats, float]:
    """Slopes (2, P) of a section's pixels by turn in degrees and rise in mm, and residuals; level and floor are fitted out.

    The third value is the contrast: how much darker the inserts are than the fill, as a share of the fill's signal.
    """
    turns = np.radians(turn_deg + np.array([[0.0], [_STEP], [-_STEP], [0.0], [0.0]]))
    rises = rise_mm + np.array([[0.0], [0.0], [0.0], [_STEP], [-_STEP]])
    c, s = np.cos(turns), np.sin(turns)
    places = Places(c * patch.X + s * patch.Y, c * patch.Y - s * patch.X, patch.Z + rises)
    now, more_turn, less_turn, higher, lower = expected_fill((patch.section,), places, thickness, soft)
    by_turn, by_rise = (more_turn - less_turn) / (2 * _STEP), (higher - lower) / (2 * _STEP)
    x, y = patch.X - patch.X.mean(), patch.Y - patch.Y.mean()
    design = np.stack([np.ones_like(now), now, now * x, now * y])
    gram = design @ design.T
    gram[range(4), range(4)] *= 1 + 1e-9
    fitted = np.linalg.solve(gram, design @ patch.values)
    level = fitted[1] + fitted[2] * x + fitted[3] * y
    slopes = np.stack([by_turn * level, by_rise * level])
    slopes -= (np.linalg.solve(gram, design @ slopes.T).T) @ design
    return slopes, patch.values - fitted @ design, float(fitted[1] / max(fitted[1] + fitted[0], 1e-9))
