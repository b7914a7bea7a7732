"""What every quantity of a digital scan is, by its definition, from the noise-free model.

Nothing here looks at a noisy image, and nothing is shared with the routines that measure. Where a definition works on magnitudes, which noise
raises, the value is that of the expected magnitudes.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from qa.geometry import Floats, Plane
from qa.phantoms import Lattice, Ramps, Rods, Uniform, WedgeBars
from qa.simulate.encode import Scan
from qa.simulate.objects import Profile
from qa.simulate.places import image_place, outline_mm, phantom_place
from qa.simulate.setup import Setup
from qa.simulate.signals import signal_truths

__all__ = ["Truth", "true_values", "uniform_slices"]


@dataclass(frozen=True)
class Truth:
    """The true value of one quantity.

    Attributes
    ----------
    value : float
        In the slice that the quantity is read in, or over all.
    by_slice : mapping
        From slice number, counted from 1 along the normal, to value; empty where no one slice is meant.
    details : mapping
        What a comparison may need besides: named in `true_values`.
    """

    value: float
    by_slice: Mapping[int, float] = field(default_factory=dict)
    details: Mapping[str, Any] = field(default_factory=dict)


def uniform_slices(setup: Setup) -> tuple[int, ...]:
    """Numbers, from 1, of the slices that show nothing but fill, well inside the body."""
    found = []
    axis = setup.axes[:, 2] @ setup.orientation
    for number, plane in enumerate(setup.planes, start=1):
        height = float(phantom_place(setup, plane, *_seen_centre(setup, plane))[2])
        sideways = setup.body_diameter_mm / 2 * math.sqrt(max(0.0, 1 - axis[2] ** 2))
        reach = setup.thickness_mm / 2 * abs(axis[2]) + 3 * setup.profile_edge_mm + sideways
        if setup.phantom.body.shape == "sphere":
            if abs(height) + reach < setup.body_diameter_mm / 2:
                found.append(number)
        elif abs(height) + reach < (setup.phantom.extent_mm or 0) / 2 and setup.phantom.is_uniform(
            height - reach, height + reach
        ):
            found.append(number)
    return tuple(found)


def true_values(setup: Setup) -> dict[str, Truth]:
    """Return the truth of every quantity that this scan can show.

    Parameters
    ----------
    setup : Setup
        The scan.

    Returns
    -------
    dict
        From the quantity's name to `Truth`. Details: `snr`, `ghosting`: `noise_free` and, for ghosting, `regions`;
        `lattice_rms`: `rods` (`i`, `j`, `true_mm`, `measured_mm` in the phantom frame after the rigid fit, `place_mm_in_image` from the
        image's middle) and `slice`; `slice_thickness`: `bars_mm`, `inside_block`, `profile_mm`; `slice_position`: `on_axis_mm`;
        `setup_offset`: `patient_mm`.
    """
    truths: dict[str, Truth] = {"centre_frequency": Truth(setup.frequency_MHz)}
    truths |= _lengths(setup)
    uniform = uniform_slices(setup)
    if uniform:
        chosen = _signal_slice(setup, uniform)
        machine = Scan(setup)
        per_slice = {number: signal_truths(machine, number - 1, _outline(setup, number)) for number in uniform}
        for name in ("snr", "snr_background", "uniformity_piu", "uniformity_naad", "ghosting"):
            if name not in per_slice[chosen]:
                continue
            truths[name] = Truth(
                per_slice[chosen][name][0],
                {number: values[name][0] for number, values in per_slice.items()},
                per_slice[chosen][name][1] | {"slice": chosen},
            )
    for section in setup.phantom.sections:
        match section:
            case Lattice() | Rods():
                truths |= _lattice(setup, section)
            case Ramps():
                truths |= _thickness(setup, section)
            case _:
                pass
    truths |= _positions(setup)
    truths |= _pose(setup)
    return truths


def _seen_centre(setup: Setup, plane: Plane) -> tuple[float, float]:
    """Where the phantom's axis crosses a slice (a sphere's centre projects on it), in-plane mm of the image."""
    x, y = image_place(setup, plane, *_axis_crossing(setup, plane))
    return float(x), float(y)


def _axis_crossing(setup: Setup, plane: Plane) -> tuple[float, float]:
    centre = plane.from_patient(np.asarray(setup.centre_patient))
    if setup.phantom.body.shape == "cylinder":
        axis = setup.axes.T @ setup.orientation[:, 2]
        centre = centre - axis * centre[2] / axis[2]
    return float(centre[0]), float(centre[1])


def _outline(setup: Setup, number: int) -> tuple[tuple[float, float], float]:
    """Centre and mean radius of the body's outline in a slice."""
    plane = setup.planes[number - 1]
    lengths = [_length(setup, plane, angle) for angle in (0, 45, 90, 135)]
    return _seen_centre(setup, plane), float(np.mean(lengths)) / 2


def _length(setup: Setup, plane: Plane, angle_deg: float) -> float:
    """Diameter through the centre between half heights."""
    x, y = _seen_centre(setup, plane)
    turn = math.radians(angle_deg)
    return sum(outline_mm(setup, plane, (x, y), (s * math.cos(turn), s * math.sin(turn))) for s in (1, -1))


def _square_diameter(setup: Setup, plane: Plane) -> float:
    """Diameter of the cross-section of a perfect scanner's slice through a phantom set up square."""
    if setup.phantom.body.shape == "cylinder":
        return setup.body_diameter_mm
    perfect = setup.but(
        scale_x_percent=0.0, scale_y_percent=0.0, nonlinearity_x_mm=0.0, nonlinearity_y_mm=0.0, off_resonance_hz=0.0
    )
    return _length(perfect, plane, 0.0)


def _lengths(setup: Setup) -> dict[str, Truth]:
    shown: dict[int, dict[str, float]] = {}
    for number, plane in enumerate(setup.planes, start=1):
        height = abs(float(phantom_place(setup, plane, *_seen_centre(setup, plane))[2]))
        half = (setup.phantom.extent_mm or setup.body_diameter_mm) / 2
        if height + setup.thickness_mm / 2 >= half:
            continue
        values = {f"length_{angle}": _length(setup, plane, angle) for angle in (0, 45, 90, 135)}
        true = _square_diameter(setup, plane)
        values["distortion_max"] = 100 * max(abs(v - true) / true for v in values.values())
        values["scale_x"] = 100 * (values["length_0"] / true - 1)
        values["scale_y"] = 100 * (values["length_90"] / true - 1)
        shown[number] = values
    if not shown:
        return {}
    heights = {n: abs(float(setup.planes[n - 1].from_patient(np.asarray(setup.centre_patient))[2])) for n in shown}
    chosen = min(heights, key=lambda n: heights[n])
    return {
        name: Truth(shown[chosen][name], {n: v[name] for n, v in shown.items()}, {"slice": chosen}) for name in shown[chosen]
    }


def _signal_slice(setup: Setup, uniform: tuple[int, ...]) -> int:
    """Return the slice nearest the middle of the uniform section, or of the body where none is named."""
    middle = next(((s.z_from_mm + s.z_to_mm) / 2 for s in setup.phantom.sections if isinstance(s, Uniform)), 0.0)
    place = np.asarray(setup.centre_patient) + setup.orientation[:, 2] * middle
    return min(uniform, key=lambda n: abs(float(setup.planes[n - 1].from_patient(place)[2])))


def _nearest_slice(setup: Setup, z_mm: float) -> int:
    """Return the slice that is meant for a section: by the definition's own stack, else the nearest one."""
    stack = setup.phantom.slices
    if stack is not None and stack.count == setup.slices:
        index = round((z_mm - stack.first_z_mm) / stack.spacing_mm)
        if 0 <= index < stack.count:
            return index + 1
    place = np.asarray(setup.centre_patient) + setup.orientation[:, 2] * z_mm
    return 1 + min(range(setup.slices), key=lambda k: abs(float(setup.planes[k].from_patient(place)[2])))


def _on_plane(setup: Setup, plane: Plane, X: Floats, Y: Floats) -> Floats:
    """Place in the object where lines parallel to the phantom's axis cross a slice, in-plane mm (..., 2)."""
    start = np.asarray(setup.centre_patient) + np.stack([X, Y, np.zeros_like(X)], axis=-1) @ setup.orientation.T
    local = plane.from_patient(start)
    axis = plane.axes.T @ setup.orientation[:, 2]
    crossed: Floats = local - axis * (local[..., 2:] / axis[2])
    return crossed[..., :2]


def _lattice(setup: Setup, section: Lattice | Rods) -> dict[str, Truth]:
    number = _nearest_slice(setup, (section.z_from_mm + section.z_to_mm) / 2)
    plane = setup.planes[number - 1]
    marks = section.rods_mm() if isinstance(section, Rods) else section.crossings_mm()
    true = np.array([(x, y) for _, _, x, y in marks])
    crossed = _on_plane(setup, plane, true[:, 0], true[:, 1])
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
        far = np.hypot(*true.T) >= 50
        ratio = np.hypot(*fitted[far].T) / np.hypot(*true[far].T) - 1
        turn = setup.axes.T[:2] @ setup.orientation[:, :2]
        ideal = true @ turn.T
        centred, wanted = seen - seen.mean(axis=0), ideal - ideal.mean(axis=0)
        found |= {
            "distortion_max": Truth(float(100 * np.abs(ratio).max())),
            "scale_x": Truth(float(100 * ((centred[:, 0] @ wanted[:, 0]) / (wanted[:, 0] @ wanted[:, 0]) - 1))),
            "scale_y": Truth(float(100 * ((centred[:, 1] @ wanted[:, 1]) / (wanted[:, 1] @ wanted[:, 1]) - 1))),
        }
    return found


def _rigid(seen: Floats, true: Floats) -> Floats:
    """Turn and shift (no scale) that lays the points seen over the true ones best, applied to them."""
    a, b = seen - seen.mean(axis=0), true - true.mean(axis=0)
    u, _, vt = np.linalg.svd(a.T @ b)
    turn = u @ np.diag([1, np.sign(np.linalg.det(u @ vt))]) @ vt
    laid: Floats = a @ turn + true.mean(axis=0)
    return laid


def _thickness(setup: Setup, section: Ramps) -> dict[str, Truth]:
    number = _nearest_slice(setup, section.z_mm)
    plane = setup.planes[number - 1]
    along = setup.orientation.T @ setup.axes[:, 2]
    bars, inside = [], True
    left = section.block_centre_mm[0] - section.block_size_mm[0] / 2
    right = left + section.block_size_mm[0]
    height = float(phantom_place(setup, plane, *_seen_centre(setup, plane))[2]) - section.z_mm
    for slot in section.slots:
        middle = slot.crossing_x_mm + height / slot.slope
        half = (setup.thickness_mm + slot.thickness_mm) / 2 / abs(slot.slope)
        inside = inside and left < middle - half and middle + half < right
        rate = abs(along[2] - slot.slope * along[0])
        ends = []
        for side in (-1, 1):
            X = np.array([middle + side * setup.thickness_mm * rate / 2 / abs(slot.slope)])
            ends.append(_slot_edge(setup, plane, section, slot.centre_y_mm, slot.slope, side * rate, slot.crossing_x_mm, X))
        bars.append(float(np.hypot(*(ends[1] - ends[0]))))
    slope = float(np.mean([abs(slot.slope) for slot in section.slots]))
    a, b = bars
    profile = np.linspace(-1.5 * setup.thickness_mm, 1.5 * setup.thickness_mm, 301)
    step = 1e-3
    shape = Profile(setup.thickness_mm, setup.profile_edge_mm)
    details = {
        "slice": number,
        "bars_mm": bars,
        "inside_block": bool(inside),
        "set_mm": setup.thickness_mm,
        "profile_mm": [
            profile.tolist(),
            ((shape.cumulative(profile + step) - shape.cumulative(profile - step)) / (2 * step)).tolist(),
        ],
    }
    return {"slice_thickness": Truth(2 * a * b / (a + b) * slope, {number: 2 * a * b / (a + b) * slope}, details)}


def _slot_edge(
    setup: Setup,
    plane: Plane,
    section: Ramps,
    y_mm: float,
    slope: float,
    lift_per_half: float,
    crossing_mm: float,
    X: Floats,
) -> Floats:
    """Image place of the half height of a bar's end: where the slab's middle lies half a slice away along the normal."""
    half = setup.thickness_mm / 2
    along = setup.orientation.T @ setup.axes[:, 2]
    rate = along[2] - slope * along[0]
    wanted = math.copysign(half, lift_per_half) * abs(rate)
    for _ in range(30):
        place = _on_plane(setup, plane, X, np.full_like(X, y_mm))
        at = phantom_place(setup, plane, place[:, 0], place[:, 1], seen=False)
        # lift of the plane over the slab's middle, as a function of X on the line Y = y: solve lift = -wanted sign(slope)
        lift = at[:, 2] - section.z_mm - slope * (at[:, 0] - crossing_mm)
        X = X + (lift + wanted * math.copysign(1, slope)) / slope
    place = _on_plane(setup, plane, X, np.full_like(X, y_mm))
    x, y = image_place(setup, plane, place[:, 0], place[:, 1])
    return np.array([x[0], y[0]])


def _positions(setup: Setup) -> dict[str, Truth]:
    found: dict[str, Truth] = {}
    wedges = sorted((s for s in setup.phantom.sections if isinstance(s, WedgeBars)), key=lambda s: s.z_mm)
    for section, name in zip(
        (wedges[:1] + wedges[-1:])[: len(wedges)], ("slice_position", "slice_position_end"), strict=False
    ):
        number = _nearest_slice(setup, section.z_mm)
        plane = setup.planes[number - 1]
        ends = []
        for bar in section.bars:
            X = np.array([(bar.x_from_mm + bar.x_to_mm) / 2])
            Y = np.array([section.start_y_mm + section.length_mm])
            for _ in range(40):
                place = _on_plane(setup, plane, X, Y)
                Z = phantom_place(setup, plane, place[:, 0], place[:, 1], seen=False)[:, 2]
                Y = section.start_y_mm + section.length_mm + bar.slope * (Z - section.z_mm)
            place = _on_plane(setup, plane, X, Y)
            ends.append(np.stack(image_place(setup, plane, place[:, 0], place[:, 1]), axis=-1)[0])
        down = setup.axes.T[:2] @ setup.orientation[:, 1]
        difference = float((ends[0] - ends[1]) @ (down / np.hypot(*down))) * math.copysign(1, section.bars[0].slope)
        on_axis = float(phantom_place(setup, plane, *_seen_centre(setup, plane))[2]) - section.z_mm
        if abs(on_axis) < section.reach_mm:
            found[name] = Truth(difference / 2, {number: difference / 2}, {"slice": number, "on_axis_mm": on_axis})
    return found


def _pose(setup: Setup) -> dict[str, Truth]:
    middle = setup.planes[(setup.slices - 1) // 2]
    centre = middle.from_patient(np.asarray(setup.centre_patient))
    x, y = image_place(setup, middle, centre[0], centre[1])
    seen = middle.to_patient(float(x), float(y), float(centre[2]))
    in_plane = middle.from_patient(seen) - middle.from_patient(np.zeros(3))
    angle = math.degrees(math.acos(min(1.0, abs(float(setup.axes[:, 2] @ setup.orientation[:, 2])))))
    found = {"setup_offset": Truth(float(np.hypot(in_plane[0], in_plane[1])), {}, {"patient_mm": seen.tolist()})}
    if setup.phantom.body.shape == "cylinder":
        found["setup_tilt"] = Truth(angle)
    return found
