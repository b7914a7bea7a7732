"""What every quantity of a digital scan is, by its definition, from the noise-free model.

Nothing here looks at a noisy image, and nothing is shared with the routines that measure. Where a definition works on
magnitudes, which noise raises, the value is that of the expected magnitudes.
"""

import math

import numpy as np

from qa.geometry import Floats, Plane
from qa.phantoms import LowContrast, Uniform
from qa.simulate.encode import Scan
from qa.simulate.inserts import insert_truths
from qa.simulate.objects import slice_key
from qa.simulate.places import Truth, outline_mm, phantom_place, seen_centre
from qa.simulate.setup import Setup
from qa.simulate.signals import Found, signal_truths
from qa.simulate.warp import image_place

__all__ = ["Truth", "true_values", "uniform_slices"]

_ANGLES = (0, 45, 90, 135)


def true_values(setup: Setup, machine: Scan | None = None) -> dict[str, Truth]:
    """Return the truth of every quantity that this scan can show.

    Parameters
    ----------
    setup : Setup
        The scan.
    machine : Scan, optional
        The same scan already on the scanner, so that `simulate` can share its noise-free images.

    Returns
    -------
    dict
        From the quantity's name to `Truth`. Its details: of `snr`, `snr_background` and `uniformity_piu` `noise_free`; of
        `uniformity_naad`, which is the noise-free value, `with_noise`; of `ghosting` `noise_free` (with ringing),
        `ghost_percent` (the ghost alone) and `regions`; of `lattice_rms` `rods` (`i`, `j`, `true_mm`, `measured_mm` in the
        phantom frame after the rigid fit, `place_mm_in_image` from the image's middle); of `slice_thickness` `bars_mm`,
        `set_mm`, `inside_block` (both bars, feet and all) and `profile` (heights and values); of `slice_position`
        `on_axis_mm`; of `setup_offset` `patient_mm`; of all that are read in one slice, `slice`.
    """
    truths = {"centre_frequency": Truth(setup.frequency_MHz)}
    if setup.lengthwise:
        return truths | _axial_length(setup)
    truths |= _lengths(setup)
    uniform = uniform_slices(setup)
    if uniform:
        chosen = _signal_slice(setup, uniform)
        per_slice = _signals(machine or Scan(setup), uniform)
        for name, (value, details) in per_slice[chosen].items():
            by_slice = {number: found[name][0] for number, found in per_slice.items() if name in found}
            truths[name] = Truth(value, by_slice, details | {"slice": chosen})
    truths |= insert_truths(setup)
    truths |= _pose(setup)
    return truths


def uniform_slices(setup: Setup) -> tuple[int, ...]:
    """Numbers, from 1, of the slices in which the model shows nothing but fill, well inside the body."""
    found = []
    axis = abs(float(setup.axis[2]))
    half = (setup.phantom.extent_mm or setup.body_diameter_mm) / 2
    sideways = setup.body_diameter_mm / 2 * math.sqrt(max(0.0, 1 - axis**2))
    reach = setup.profile.reach_mm * axis
    if setup.phantom.body.shape == "cylinder":
        reach += sideways
    for number, plane in enumerate(setup.planes, start=1):
        height = _height(setup, plane)
        plain = all(isinstance(s, Uniform | LowContrast) for s in setup.phantom.sections_at(height - reach, height + reach))
        if abs(height) + reach < half and plain:
            found.append(number)
    return tuple(found)


def _height(setup: Setup, plane: Plane) -> float:
    """Height of a slice in the phantom: along its axis, or of a sphere along the slice normal."""
    if setup.phantom.body.shape == "sphere":
        return -float(plane.from_patient(np.asarray(setup.centre_patient))[2])
    return float(phantom_place(setup, plane, *seen_centre(setup, plane))[2])


def _signals(machine: Scan, uniform: tuple[int, ...]) -> dict[int, Found]:
    """Truths of the signal in every uniform slice, worked out once for slices that look the same."""
    setup = machine.setup
    known: dict[object, Found] = {}
    per_slice = {}
    for number in uniform:
        plane = setup.planes[number - 1]
        same = slice_key(setup, plane)
        key = number if same is None else same
        if key not in known:
            radius = float(_diameters(setup, plane).mean()) / 2
            inner = setup.region_radius_mm(radius, _section_percent(setup, plane))
            known[key] = signal_truths(machine, number - 1, (_outline_centre(setup, plane), radius), inner)
        per_slice[number] = known[key]
    return per_slice


def _section_percent(setup: Setup, plane: Plane) -> float | None:
    """Share of the cross-section that a uniform section asks for, None where the body's holds."""
    height = _height(setup, plane)
    named = (s for s in setup.phantom.sections_at(height, height + 1e-9) if isinstance(s, Uniform))
    return next((s.region_percent for s in named if s.region_percent is not None), None)


def _outline_centre(setup: Setup, plane: Plane) -> tuple[float, float]:
    """Centre of the circle through the outline: where gradients are bent, not where the phantom's centre appears."""
    x, y = seen_centre(setup, plane)
    turns = np.arange(24) * 2 * math.pi / 24
    directions = np.stack([np.cos(turns), np.sin(turns)], axis=-1)
    away = outline_mm(setup, plane, (x, y), directions)[:, None] * directions
    shift = away.sum(axis=0) / 12
    return x + float(shift[0]), y + float(shift[1])


def _signal_slice(setup: Setup, uniform: tuple[int, ...]) -> int:
    """Return the slice nearest the middle of the uniform section, or of the body where none is named."""
    middle = next(((s.z_from_mm + s.z_to_mm) / 2 for s in setup.phantom.sections if isinstance(s, Uniform)), 0.0)
    place = np.asarray(setup.centre_patient) + setup.orientation[:, 2] * middle
    return min(uniform, key=lambda n: abs(float(setup.planes[n - 1].from_patient(place)[2])))


def _diameters(setup: Setup, plane: Plane) -> Floats:
    """Diameters through the centre between half heights, at `_ANGLES`."""
    turns = np.radians(np.concatenate([_ANGLES, np.add(_ANGLES, 180)]))
    radii = outline_mm(setup, plane, seen_centre(setup, plane), np.stack([np.cos(turns), np.sin(turns)], axis=-1))
    return radii[: len(_ANGLES)] + radii[len(_ANGLES) :]


def _square_diameter(setup: Setup, plane: Plane) -> float:
    """Diameter of the cross-section as a perfect scanner shows it, the phantom set up square."""
    if setup.phantom.body.diameter_mm is None:
        return float(_diameters(setup, plane).mean())  # nobody knows another: held against its own mean
    if setup.phantom.body.shape == "cylinder":
        return setup.body_diameter_mm
    perfect = setup.but(
        scale_x_percent=0.0, scale_y_percent=0.0, nonlinearity_x_mm=0.0, nonlinearity_y_mm=0.0, off_resonance_hz=0.0
    )
    return float(_diameters(perfect, plane)[0])


def _lengths(setup: Setup) -> dict[str, Truth]:
    half = (setup.phantom.extent_mm or setup.body_diameter_mm) / 2
    shown: dict[int, dict[str, float]] = {}
    heights: dict[int, float] = {}
    for number, plane in enumerate(setup.planes, start=1):
        heights[number] = abs(_height(setup, plane))
        if heights[number] + setup.profile.reach_mm >= half:
            continue
        values = {f"length_{a}": float(d) for a, d in zip(_ANGLES, _diameters(setup, plane), strict=True)}
        true = _square_diameter(setup, plane)
        values["distortion_max"] = 100 * max(abs(v - true) / true for v in values.values())
        values["scale_x"] = 100 * (values["length_0"] / true - 1)
        values["scale_y"] = 100 * (values["length_90"] / true - 1)
        shown[number] = values
    if not shown:
        return {}
    chosen = min(shown, key=lambda n: heights[n])
    return {
        name: Truth(shown[chosen][name], {n: v[name] for n, v in shown.items()}, {"slice": chosen}) for name in shown[chosen]
    }


def _axial_length(setup: Setup) -> dict[str, Truth]:
    """Length end to end of a cylinder cut lengthwise, along its axis as the image shows it."""
    centre = np.asarray(setup.centre_patient)
    number = 1 + min(range(setup.slices), key=lambda k: abs(float(setup.planes[k].from_patient(centre)[2])))
    plane = setup.planes[number - 1]
    if abs(float(plane.from_patient(centre)[2])) >= setup.body_diameter_mm / 2:
        return {}
    start = seen_centre(setup, plane)
    direction = setup.axis[:2] / math.hypot(*setup.axis[:2])
    length = float(outline_mm(setup, plane, start, [direction, -direction]).sum())
    return {"length_axial": Truth(length, {number: length}, {"slice": number})}


def _pose(setup: Setup) -> dict[str, Truth]:
    middle = setup.planes[(setup.slices - 1) // 2]
    centre = middle.from_patient(np.asarray(setup.centre_patient))
    x, y = image_place(setup, middle, centre[0], centre[1])
    if setup.slices == 1 and setup.phantom.body.shape == "cylinder" and not setup.lengthwise:
        # One slice cannot tell the height: where it shows the axis stands in for the centre.
        x, y = (np.asarray(v) for v in seen_centre(setup, middle))
        centre[2] = 0.0
    seen = middle.to_patient(float(x), float(y), float(centre[2]))
    from_isocentre = middle.axes.T @ seen
    found = {"setup_offset": Truth(math.hypot(from_isocentre[0], from_isocentre[1]), {}, {"patient_mm": seen.tolist()})}
    if setup.phantom.body.shape == "cylinder":
        found["setup_tilt"] = Truth(math.degrees(math.acos(min(1.0, abs(float(setup.axis[2]))))))
    return found
