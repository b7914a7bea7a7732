"""True values of what a phantom's inserts show: lattice, slice thickness, slice position."""

import math

import numpy as np

from qa.geometry import Floats
from qa.phantoms import Lattice, Ramps, Rods, Slot, WedgeBars
from qa.simulate.places import Truth, meant_slice, on_plane, phantom_place, seen_centre
from qa.simulate.setup import Setup
from qa.simulate.warp import image_place

__all__ = ["insert_truths"]

_FAR_ROD_MM = 50.0


def insert_truths(setup: Setup) -> dict[str, Truth]:
    """Return the truths that belong to the sections of the phantom.

    Parameters
    ----------
    setup : Setup
        The scan.

    Returns
    -------
    dict
        From the quantity's name to `Truth`.
    """
    found: dict[str, Truth] = {}
    for section in setup.phantom.sections:
        match section:
            case Lattice() | Rods():
                found |= _lattice(setup, section)
            case Ramps():
                found |= _thickness(setup, section)
            case _:
                pass
    wedges = sorted((s for s in setup.phantom.sections if isinstance(s, WedgeBars)), key=lambda s: s.z_mm)
    if wedges:
        found |= _position(setup, wedges[0], "slice_position")
    if len(wedges) > 1:
        found |= _position(setup, wedges[-1], "slice_position_end")
    return found


def _lattice(setup: Setup, section: Lattice | Rods) -> dict[str, Truth]:
    number = meant_slice(setup, (section.z_from_mm + section.z_to_mm) / 2)
    plane = setup.planes[number - 1]
    height = float(phantom_place(setup, plane, *seen_centre(setup, plane))[2])
    if not section.z_from_mm < height < section.z_to_mm:
        return {}
    marks = section.rods_mm() if isinstance(section, Rods) else section.crossings_mm()
    true = np.array([(x, y) for _, _, x, y in marks])
    crossed = on_plane(setup, plane, true[:, 0], true[:, 1])
    seen = np.stack(image_place(setup, plane, crossed[:, 0], crossed[:, 1]), axis=-1)
    fitted = _rigid(seen, true)
    away = np.hypot(*(fitted - true).T)
    middle = np.asarray(plane.middle_mm)
    rods = [
        {"i": i, "j": j, "true_mm": [x, y], "measured_mm": f.tolist(), "place_mm_in_image": (s - middle).tolist()}
        for (i, j, x, y), f, s in zip(marks, fitted, seen, strict=True)
    ]
    details = {"rods": rods, "slice": number}
    found = {
        "lattice_rms": Truth(float(np.sqrt(np.mean(away**2))), {}, details),
        "lattice_max": Truth(float(away.max()), {}, details),
    }
    if isinstance(section, Rods):
        far = np.hypot(*true.T) >= _FAR_ROD_MM
        ratio = np.hypot(*fitted[far].T) / np.hypot(*true[far].T) - 1
        across, down = _scales(setup, seen, true)
        found |= {
            "distortion_max": Truth(float(100 * np.abs(ratio).max()), {}, {"slice": number}),
            "scale_x": Truth(across, {}, {"slice": number}),
            "scale_y": Truth(down, {}, {"slice": number}),
        }
    return found


def _rigid(seen: Floats, true: Floats) -> Floats:
    """Turn and shift (no scale) that lays the points seen over the true ones best, applied to them."""
    a, b = seen - seen.mean(axis=0), true - true.mean(axis=0)
    u, _, vt = np.linalg.svd(a.T @ b)
    turn = u @ np.diag([1.0, np.sign(np.linalg.det(u @ vt))]) @ vt
    laid: Floats = a @ turn + true.mean(axis=0)
    return laid


def _scales(setup: Setup, seen: Floats, true: Floats) -> tuple[float, float]:
    """Deviation of scale along the image axes, percent: least squares of the place seen on the turned ideal lattice.

    A turn does not scale: what a tilt foreshortens is taken back to the nearest turn.
    """
    u, _, vt = np.linalg.svd(setup.axes.T[:2] @ setup.orientation[:, :2])
    ideal = true @ (u @ vt).T
    a, b = seen - seen.mean(axis=0), ideal - ideal.mean(axis=0)
    slopes = (a * b).sum(axis=0) / (b * b).sum(axis=0)
    return 100 * (float(slopes[0]) - 1), 100 * (float(slopes[1]) - 1)


def _thickness(setup: Setup, section: Ramps) -> dict[str, Truth]:
    number = meant_slice(setup, section.z_mm)
    plane = setup.planes[number - 1]
    height = float(phantom_place(setup, plane, *seen_centre(setup, plane))[2])
    if not section.z_from_mm < height < section.z_to_mm:
        return {}
    left = section.block_centre_mm[0] - section.block_size_mm[0] / 2
    right = left + section.block_size_mm[0]
    widths, inside = [], True
    for slot in section.slots:
        ends = _bar_ends(setup, number, section, slot, setup.thickness_mm)
        feet = _bar_ends(setup, number, section, slot, setup.thickness_mm + slot.thickness_mm)
        inside = inside and left < feet.min() and feet.max() < right
        across = on_plane(setup, plane, ends, slot.centre_y_mm)
        x, y = image_place(setup, plane, across[:, 0], across[:, 1])
        widths.append(math.hypot(x[1] - x[0], y[1] - y[0]))
    slope = math.sqrt(abs(section.slots[0].slope * section.slots[1].slope))
    value = 2 * widths[0] * widths[1] / (widths[0] + widths[1]) * slope
    heights = np.linspace(-1.5 * setup.thickness_mm, 1.5 * setup.thickness_mm, 301)
    details = {
        "slice": number,
        "bars_mm": widths,
        "inside_block": bool(inside),
        "set_mm": setup.thickness_mm,
        "profile": [heights.tolist(), setup.profile.density(heights).tolist()],
    }
    return {"slice_thickness": Truth(value, {number: value}, details)}


def _bar_ends(setup: Setup, number: int, section: Ramps, slot: Slot, width_mm: float) -> Floats:
    """Phantom x, lower first, where the slab's middle lies half of `width_mm` from the slice's middle along the normal."""
    plane = setup.planes[number - 1]
    along = setup.orientation.T @ setup.axes[:, 2]
    rate = float(along[2] - slot.slope * along[0])
    at = on_plane(setup, plane, np.array([0.0, 1.0]), slot.centre_y_mm)
    phantom = phantom_place(setup, plane, at[:, 0], at[:, 1], seen=False)
    lift = phantom[:, 2] - section.z_mm - slot.slope * (phantom[:, 0] - slot.crossing_x_mm)
    reached = (np.array([-0.5, 0.5]) * width_mm * rate - lift[0]) / (lift[1] - lift[0])
    return np.sort(reached)


def _position(setup: Setup, section: WedgeBars, name: str) -> dict[str, Truth]:
    number = meant_slice(setup, section.z_mm)
    plane = setup.planes[number - 1]
    on_axis = float(phantom_place(setup, plane, *seen_centre(setup, plane))[2]) - section.z_mm
    if abs(on_axis) >= section.reach_mm:
        return {}
    ends = []
    for bar in section.bars:
        X = (bar.x_from_mm + bar.x_to_mm) / 2
        at = on_plane(setup, plane, X, np.array([0.0, 1.0]))
        Z = phantom_place(setup, plane, at[:, 0], at[:, 1], seen=False)[:, 2]
        tip = section.start_y_mm + section.length_mm + bar.slope * (Z[0] - section.z_mm)
        Y = tip / (1 - bar.slope * (Z[1] - Z[0]))
        place = on_plane(setup, plane, X, Y)
        ends.append(np.stack(image_place(setup, plane, place[0], place[1])))
    down = setup.axes.T[:2] @ setup.orientation[:, 1]
    apart = section.bars[0].slope - section.bars[1].slope
    value = float((ends[0] - ends[1]) @ (down / np.hypot(*down))) / apart
    return {name: Truth(value, {number: value}, {"slice": number, "on_axis_mm": on_axis})}
