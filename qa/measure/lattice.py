"""`lattice_rms`, `lattice_max`, `distortion_max`, `scale_x`, `scale_y`: geometric distortion from a lattice of rods or bars.

Every mark's centre is found by a fit of its own shape (`qa.locate.marks`), told apart from its neighbours by growing from
the centre (`qa.locate.match`), and laid over the ideal lattice by a rigid fit: turn and shift, no scale. What is left is the
displacement field; `lattice_rms` and `lattice_max` are the root mean square and the largest of its lengths. On a lattice of
rods, `distortion_max` is the largest deviation of the rods' distances from the centre, rods 50 mm or more out (NEMA MS 2), and
`scale_x`, `scale_y` are the slopes of the displacement along the image's own axes; elsewhere these three come from the body's
diameters (`qa.measure.lengths`).

Noise lengthens displacements: the mean square by the mean square of the noise, the largest by what the noise adds on average
to the largest of so many. Both are taken off; details give the figures as they stand.
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.locate.marks import find_marks, fit_marks
from qa.locate.match import ideal_marks, match_lattice, rigid_fit
from qa.locate.view import SliceView, slice_of_section
from qa.measure.regions import figure, magnitude_only
from qa.phantoms import Lattice, Phantom, Rods
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["lattice"]

_METHOD = ("marks of a lattice after a rigid fit", 1)
_RADIAL = ("largest deviation of the rods' distances from the centre (NEMA MS 2)", 1)
_SCALE = ("slope of the lattice along the image axis", 1)
_FAR_MM = 50.0
_CIRCLES_MM = (100.0, 150.0, 200.0)
_LEAST_U_PX = 0.008
_FAINT_PX = 0.2
"""A mark whose centre is less certain than this is too faint to count."""
_ENOUGH, _LEAST_SHARE = 30, 0.25
_CURVED_MM = 0.003
"""What the bend of a strong distortion within a mark adds to its centre."""
_DRAWS = 64


@dataclass(frozen=True, eq=False)
class _Field:
    """Marks that were seen, laid over the ideal lattice.

    Attributes
    ----------
    index, true_mm, measured_mm : (N, 2)
        Whole-number places, ideal and measured places in the phantom's frame after the rigid fit.
    image_mm, ideal_mm : (N, 2) float
        In-plane places as seen, and the ideal ones laid over them, mm.
    u_mm : (N,) float
        Standard uncertainty of a place along either axis.
    missing : list of dict
        Places where no mark was seen, and why.
    turn_deg : float
        Turn of the lattice against the pose.
    slice_index : int
    """

    index: NDArray[np.intp]
    true_mm: Floats
    measured_mm: Floats
    image_mm: Floats
    ideal_mm: Floats
    u_mm: Floats
    missing: list[dict[str, Any]]
    turn_deg: float
    slice_index: int

    @property
    def away_mm(self) -> Floats:
        """Displacements (N, 2)."""
        return self.measured_mm - self.true_mm


def lattice(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the displacement field of a lattice, and what follows from it.

    Standard uncertainty: of each mark from its fit, or from the marks' scatter about a smooth surface where that is smaller,
    and 0.008 pixel for ringing of what lies round it; of the figures by propagation, and by resampling for the largest.
    """
    section = next((s for s in phantom.sections if isinstance(s, Rods | Lattice)), None)
    names = ("lattice_rms", "lattice_max", *(("distortion_max", "scale_x", "scale_y") if isinstance(section, Rods) else ()))
    if section is None:
        return [NotMeasured(name, "this phantom has no lattice") for name in names]
    field = _field(scan, pose, phantom, section)
    if isinstance(field, str):
        return [NotMeasured(name, field) for name in names]
    results = _displacement(field, section)
    if isinstance(section, Rods):
        results += [_radial(field), *_scales(field)]
    return results


def _field(scan: Acquisition, pose: Pose, phantom: Phantom, section: Rods | Lattice) -> _Field | str:
    reason = magnitude_only(scan)
    if reason:
        return reason
    index = slice_of_section(scan, pose, phantom, (section.z_from_mm + section.z_to_mm) / 2)
    if isinstance(index, str):
        return index
    view = SliceView.of(scan.planes[index], pose)
    image = scan.pixels[index]
    places, true = ideal_marks(section)
    found = find_marks(image, view, section, float(np.hypot(*true.T).max()) + 0.4 * section.pitch_mm)
    low, high = places.min(axis=0), places.max(axis=0)
    arms = np.stack([places > low, places < high], axis=2).reshape(len(places), 4)
    whole = None if isinstance(section, Rods) else np.asarray(arms.all(axis=1), dtype=np.bool_)
    matched = match_lattice(found, places, section.pitch_mm, np.zeros(2), trusted=whole)
    if isinstance(matched, str):
        return matched
    start = matched.foretold_mm
    if isinstance(section, Rods):
        start = np.where((matched.mark >= 0)[:, None], found[matched.mark], start)
    fitted = fit_marks(image, view, section, start, turn_deg=matched.turn_deg, arms=arms)
    pixel = float(np.mean(view.plane.pixel_mm))
    clear = fitted.good & (fitted.u_mm < _FAINT_PX * pixel)
    seen, image_mm, u = np.flatnonzero(clear), fitted.place_mm[clear], fitted.u_mm[clear]
    if len(seen) < max(9, len(places) // 3):
        return (
            f"only {len(seen)} of the lattice's {len(places)} marks were found: the field of view cuts it, or noise hides it"
        )
    axes = _nearest_turn(view.lay[:2])
    laid = image_mm @ axes.T
    turn, shift = rigid_fit(laid, true[seen])
    u = np.hypot(u * _scatter_share((laid - shift) @ turn - true[seen], true[seen], u), _LEAST_U_PX * pixel)
    size = view.plane.size_mm
    gone = np.delete(np.arange(len(places)), seen)
    wanted = (true[gone] @ turn.T + shift) @ axes
    outside = [bool(x < 0 or y < 0 or x > size[0] or y > size[1]) for x, y in wanted]
    return _Field(
        index=places[seen],
        true_mm=true[seen],
        measured_mm=(laid - shift) @ turn,
        image_mm=image_mm,
        ideal_mm=(true[seen] @ turn.T + shift) @ axes,
        u_mm=u,
        missing=[
            {"i": int(i), "j": int(j), "reason": "outside the image" if out else "too faint" if fitted.good[k] else "not seen"}
            for k, (i, j), out in zip(gone, places[gone], outside, strict=True)
        ],
        turn_deg=math.degrees(math.atan2(turn[1, 0], turn[0, 0])),
        slice_index=index,
    )


def _scatter_share(away: Floats, true: Floats, u: Floats) -> float:
    """Compare the marks' scatter about a smooth displacement (third order) with their uncertainties, at most 1.

    Residuals of a fit hold ringing that does not move a mark, so uncertainties from them are upper bounds; where the marks lie
    on a smooth surface more closely than these say, their scatter counts.
    """
    if len(away) < _ENOUGH:
        return 1.0
    x, y = true.T / np.abs(true).max()
    design = np.stack([x ** (n - k) * y**k for n in range(4) for k in range(n + 1)], axis=1)
    weighted = design / u[:, None]
    left = (away - design @ np.linalg.lstsq(weighted, away / u[:, None], rcond=None)[0]) / u[:, None]
    scatter = math.sqrt(float(np.sum(left**2)) / (left.size - 2 * design.shape[1]))
    return min(1.0, max(_LEAST_SHARE, scatter))


def _nearest_turn(matrix: Floats) -> Floats:
    """Return the orthogonal matrix nearest to one that is nearly so."""
    u, _, vt = np.linalg.svd(matrix)
    nearest: Floats = u @ vt
    return nearest


def _displacement(field: _Field, section: Rods | Lattice) -> list[Measurement | NotMeasured]:
    """Root mean square and largest displacement."""
    length = np.hypot(*field.away_mm.T)
    count = len(length)
    power = float(np.mean(length**2))
    noise = 2 * float(np.mean(field.u_mm**2)) * (1 - 1.5 / count)
    true_power = max(power - noise, 0.0)
    rms = math.sqrt(true_power)
    u_power = math.sqrt(4 * float(np.sum(true_power * field.u_mm**2 + field.u_mm**4))) / count
    u_power = math.hypot(u_power, 0.4 * noise)
    u_rms = max(math.sqrt(true_power + 2 * u_power) - rms, rms - math.sqrt(max(true_power - 2 * u_power, 0.0))) / 2
    u_rms = math.hypot(u_rms, _CURVED_MM)
    shrink = math.sqrt(true_power / power) if power > 0 else 0.0
    worst = int(np.argmax(length))
    largest, u_largest = _largest(field.away_mm * shrink, field.u_mm, float(length[worst]))
    u_largest = math.hypot(u_largest, 2 * u_rms)
    common: dict[str, Any] = {
        "rods": [
            {"i": int(i), "j": int(j), "measured_mm": m.tolist(), "true_mm": t.tolist(), "u_mm": float(u)}
            for (i, j), m, t, u in zip(field.index, field.measured_mm, field.true_mm, field.u_mm, strict=True)
        ],
        "missing": field.missing,
        "turn_deg": field.turn_deg,
        "largest_inside_mm": _inside_circles(field, length),
    }
    regions = _regions(field, section)
    return [
        figure(
            "lattice_rms",
            rms,
            u_rms,
            _METHOD,
            slice_index=field.slice_index,
            details=common | {"as_read_mm": math.sqrt(power), "noise_mm": math.sqrt(noise)},
            regions=regions,
        ),
        figure(
            "lattice_max",
            largest,
            u_largest,
            _METHOD,
            slice_index=field.slice_index,
            details=common | {"as_read_mm": float(length[worst]), "at": [int(v) for v in field.index[worst]]},
            regions=regions,
        ),
    ]


def _inside_circles(field: _Field, length: Floats) -> dict[str, float]:
    """Largest displacement as read inside circles of each diameter about the centre."""
    distance = np.hypot(*field.true_mm.T)
    found = {f"{d:g}": length[distance <= d / 2 + 1e-9] for d in _CIRCLES_MM}
    return {d: float(v.max()) for d, v in found.items() if v.size}


def _largest(displacements: Floats, u: Floats, as_read: float) -> tuple[float, float]:
    """Take off the largest length what noise adds to it on average; the scatter of the same is its standard uncertainty.

    Parametric resampling about the displacements, of shape (N, K), given with the noise's share already taken off.
    """
    draws = np.random.default_rng(0).standard_normal((_DRAWS, *displacements.shape)) * u[:, None]
    drawn = np.sqrt(np.sum((displacements + draws) ** 2, axis=2)).max(axis=1)
    added = float(drawn.mean() - np.sqrt(np.sum(displacements**2, axis=1)).max())
    return max(as_read - added, 0.0), float(drawn.std())


def _radial(field: _Field) -> Measurement | NotMeasured:
    """Largest deviation of the distances from the centre."""
    distance = np.hypot(*field.true_mm.T)
    far = distance >= _FAR_MM - 1e-9
    if far.sum() < 8:
        return NotMeasured("distortion_max", f"too few rods were found {_FAR_MM:g} mm or more from the centre")
    deviation = np.hypot(*field.measured_mm[far].T) / distance[far] - 1
    u = field.u_mm[far] / distance[far]
    power = float(np.mean(deviation**2))
    shrink = math.sqrt(max(power - float(np.mean(u**2)), 0.0) / power) if power > 0 else 0.0
    worst = int(np.argmax(np.abs(deviation)))
    value, u_value = _largest(deviation[:, None] * shrink, u, float(abs(deviation[worst])))
    details = {
        "as_read_percent": 100 * float(abs(deviation[worst])),
        "deviation_percent": 100 * float(deviation[worst]),
        "at": [int(v) for v in field.index[far][worst]],
    }
    return figure("distortion_max", 100 * value, 100 * u_value, _RADIAL, slice_index=field.slice_index, details=details)


def _scales(field: _Field) -> list[Measurement]:
    """Slope of the displacement along each image axis, in the image's own axes."""
    ideal = field.ideal_mm - field.ideal_mm.mean(axis=0)
    moved = field.image_mm - field.ideal_mm
    design = np.column_stack([ideal, np.ones(len(ideal))])
    inverse = np.linalg.inv(design.T @ design)
    slopes = inverse @ design.T @ moved
    u = math.sqrt(float(np.mean(field.u_mm**2)))
    results = []
    for k, name in enumerate(("scale_x", "scale_y")):
        results.append(
            figure(
                name,
                100 * slopes[k, k],
                100 * u * math.sqrt(inverse[k, k]),
                _SCALE,
                slice_index=field.slice_index,
                details={"marks": len(ideal)},
            )
        )
    return results


def _regions(field: _Field, section: Rods | Lattice) -> tuple[Region, ...]:
    """Draw a circle round every mark that was found."""
    name, radius = ("rods", section.rod_diameter_mm / 2) if isinstance(section, Rods) else ("crossings", section.bar_width_mm)
    return tuple(Region(name, "circle", field.slice_index + 1, ((float(x), float(y)),), radius) for x, y in field.image_mm)
