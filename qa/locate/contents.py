"""What lies in a body tells how it lies: turn about its axis, which end is which, and its place along the axis.

A first look compares rings of samples round the axis, slice by slice, with what the definition says should be seen at each
height, over all turns at once (circular correlation) and over a range of heights. Then the expected sections are laid over the
pixels round them by least squares, in turn and height together. Nothing is decided by the order of slices alone.
"""

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane
from qa.locate.expected import Places, expected_fill
from qa.locate.marks import find_marks
from qa.locate.match import ideal_marks, match_lattice, rigid_fit
from qa.locate.overlay import overlay
from qa.locate.placing import is_axial, off_sections, suffering
from qa.locate.view import SliceView, slice_of_section
from qa.phantoms import Lattice, Phantom, Ramps, Rods, WedgeBars
from qa.records import Acquisition, NotLocated, Pose

__all__ = ["refine"]

_ANGLES = 112
_RINGS = 12
_INNER, _OUTER = 0.1, 0.94
_STEP_MM = 2.0
_FAR_MM = 40.0
_NEAR_MM = 8.0
_SURE = 0.5
"""Correlation with what is expected from which the phantom is believed to be the one named."""
_MOST_TURN_DEG = 20.0
_ALIKE = 0.97
"""Share of the best agreement from which another is as good."""
_LEAST_U_MM = 0.004
_LEAST_U_DEG = 0.006


@dataclass(frozen=True)
class _Guess:
    """How well one way of lying agrees: correlation, whether back to front, height added to every slice, turn."""

    score: float
    reversed: bool
    shift_mm: float
    turn_deg: float


def refine(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> Pose | NotLocated:
    """Complete a pose found from the body alone by what the slices show of its contents.

    Parameters
    ----------
    acquisition : Acquisition
        Magnitude images.
    pose : Pose
        Axis and outline of the body; its height and turn are stand-ins.
    phantom : Phantom
        What should be in it.

    Returns
    -------
    Pose or NotLocated
        The pose with turn and height and their uncertainties; unchanged where the phantom has no such contents; or how the
        phantom was set up wrongly, in words a technologist can act on.
    """
    if not pose.sections:
        return pose
    upright = _upright(pose, acquisition.planes[0])
    if not any(isinstance(s, Ramps | WedgeBars) for s in phantom.sections):
        section = next((s for s in phantom.sections if isinstance(s, Rods | Lattice)), None)
        return pose if section is None else _turned_by_lattice(acquisition, upright, phantom, section)
    rings = _Rings.of(acquisition, upright, phantom)
    axial = is_axial(acquisition.planes[0])
    complete = phantom.slices is not None and len(acquisition.planes) == phantom.slices.count
    far = _FAR_MM if complete else (phantom.extent_mm or 0.0) / 2
    best = rings.best(phantom, reach_mm=_NEAR_MM if complete else far, ways=(False,))
    expected = best.score >= _SURE and (abs(best.turn_deg) <= _MOST_TURN_DEG or not axial)
    if not expected:
        best = max((rings.best(phantom, reach_mm=far, ways=(way,)) for way in (False, True)), key=lambda guess: guess.score)
    if best.score < _SURE:
        return NotLocated(
            f"the slices show none of the inserts of {phantom.name} where they should be: another phantom was scanned, "
            "slices were placed where it has none, or noise hides them"
        )
    if axial:
        wrong = _set_up_wrongly(best)
        if wrong:
            return NotLocated(wrong)
    laid = overlay(acquisition, _moved(upright, best), phantom)
    away = off_sections(acquisition, laid, phantom)
    if isinstance(away, NotLocated):
        return away
    return replace(laid, remarks=(*laid.remarks, *away, *suffering(acquisition, laid, phantom)))


def _turned_by_lattice(acquisition: Acquisition, pose: Pose, phantom: Phantom, section: Rods | Lattice) -> Pose:
    """Turn an upright pose by what a square lattice shows, which is its turn up to quarter turns: the smallest is taken."""
    index = slice_of_section(acquisition, pose, phantom, (section.z_from_mm + section.z_to_mm) / 2)
    if isinstance(index, str):
        return replace(pose, remarks=(*pose.remarks, index))
    view = SliceView.of(acquisition.planes[index], pose)
    places, true = ideal_marks(section)
    marks = find_marks(acquisition.pixels[index], view, section, float(np.hypot(*true.T).max()) + 0.4 * section.pitch_mm)
    matched = match_lattice(marks, places, section.pitch_mm, np.zeros(2))
    if isinstance(matched, str):
        return replace(pose, remarks=(*pose.remarks, matched))
    seen = matched.mark >= 0
    found, ideal = marks[matched.mark[seen]], true[seen]
    rotation, shift = rigid_fit(found, ideal)
    turn = math.degrees(math.atan2(rotation[1, 0], rotation[0, 0]))
    left = found - ideal @ rotation.T - shift
    reach = float(np.sum((ideal - ideal.mean(axis=0)) ** 2))
    u_turn = math.degrees(math.sqrt(float(np.sum(left**2)) / max(1, left.size - 3) / reach))
    turned = _moved(pose, _Guess(1.0, reversed=False, shift_mm=0.0, turn_deg=turn))
    return replace(turned, u_rotation_deg=math.hypot(u_turn, _LEAST_U_DEG))


def _upright(pose: Pose, plane: Plane) -> Pose:
    """Give the pose the orientation of a phantom set up square to the image, its z along the slice normal or against it.

    On axial slices, +z is towards the head and x is the image axis nearest the patient's left; on others the image's own axes
    serve.
    """
    axes = plane.axes
    if is_axial(plane):
        z = axes[:, 2] * np.sign(axes[2, 2])
        across = axes[:, :2]
        k = int(np.argmax(np.abs(across[0])))
        x = across[:, k] * np.sign(across[0, k])
        axes = np.stack([x, np.cross(z, x), z], axis=1)
    axis = pose.orientation[:, 2] * np.sign(pose.orientation[:, 2] @ axes[:, 2])
    x = axes[:, 0] - (axes[:, 0] @ axis) * axis
    x /= np.linalg.norm(x)
    u_x, u_y = (None if u is None else math.hypot(u, _LEAST_U_MM) for u in pose.u_centre_mm[:2])
    return replace(
        pose,
        orientation=np.stack([x, np.cross(axis, x), axis], axis=1),
        u_centre_mm=(u_x, u_y, pose.u_centre_mm[2]),
        u_tilt_deg=None if pose.u_tilt_deg is None else math.hypot(pose.u_tilt_deg, _LEAST_U_DEG),
    )


def _moved(pose: Pose, guess: _Guess) -> Pose:
    """Apply a guess to an upright pose."""
    axes = pose.orientation
    if guess.reversed:
        axes = axes * np.array([-1.0, 1.0, -1.0])
    c, s = math.cos(math.radians(guess.turn_deg)), math.sin(math.radians(guess.turn_deg))
    axes = axes @ np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
    return replace(
        pose,
        orientation=axes,
        centre_patient=pose.centre_patient - guess.shift_mm * axes[:, 2],
        rotation_deg=guess.turn_deg,
    )


def _set_up_wrongly(guess: _Guess) -> str:
    """Say what is wrong with how the phantom lies; an empty string when nothing is."""
    turned = f"turned by {round(abs(guess.turn_deg)):d} degrees about the bore axis"
    square = abs(guess.turn_deg) <= _MOST_TURN_DEG
    if guess.reversed:
        also = "" if square else f", and {turned}"
        return f"the phantom lies back to front{also}: set it up again with its first section towards the feet"
    return "" if square else f"the phantom is {turned}: set it up again"


def _ring_places(radii_mm: Floats) -> tuple[Floats, Floats]:
    """Phantom x and y (rings, angles) of the samples."""
    angles = np.arange(_ANGLES) * (2 * np.pi / _ANGLES)
    return radii_mm[:, None] * np.cos(angles), radii_mm[:, None] * np.sin(angles)


@lru_cache(maxsize=8)
def _expected_rings(phantom: Phantom, thickness_mm: float) -> tuple[Floats, NDArray[np.complex64], Floats]:
    """Radii, and for heights at steps along the whole body the Fourier series of each ring's darkness, and its energy."""
    assert phantom.radius_mm is not None  # noqa: S101 - a body with sections is a cylinder
    radii: Floats = np.linspace(_INNER, _OUTER, _RINGS) * phantom.radius_mm
    half = (phantom.extent_mm or 0.0) / 2
    count = int(half / _STEP_MM)
    heights: Floats = np.arange(-count, count + 1).astype(np.float64) * _STEP_MM
    X, Y = _ring_places(radii)
    places = Places(X[None], Y[None], heights[:, None, None])
    dark = 1 - expected_fill(phantom.sections, places, thickness_mm, np.pi * phantom.radius_mm / _ANGLES)
    dark *= np.sqrt(radii)[:, None]
    return radii, np.fft.rfft(dark, axis=-1).astype(np.complex64), np.sum(dark**2, axis=(1, 2))


@dataclass(frozen=True, eq=False)
class _Rings:
    """Darkness on rings round the axis of each slice, as Fourier series (S, rings, waves); its energy; the slices' heights."""

    series: NDArray[np.complex64]
    energy: float
    heights_mm: Floats
    thickness_mm: float

    @classmethod
    def of(cls, acquisition: Acquisition, pose: Pose, phantom: Phantom) -> "_Rings":
        stack = phantom.slices
        thickness = 5.0 if stack is None else stack.thickness_mm
        radii, _, _ = _expected_rings(phantom, thickness)
        X, Y = _ring_places(radii)
        slices = sorted({s.slice_index for s in pose.sections})
        plane = acquisition.planes[0]
        views = [SliceView.of(acquisition.planes[index], pose) for index in slices]
        heights = np.array([float(view.height(0.0, 0.0)) for view in views])
        first = views[0].to_image(X, Y)
        moves = np.array([view.to_image(np.zeros(()), np.zeros(())) for view in views])
        places = first + (moves - moves[0])[:, None, None]
        columns, rows = (
            np.clip((places[..., k] / plane.pixel_mm[1 - k] + 0.5).astype(np.intp), 0, plane.shape[1 - k] - 1) for k in (0, 1)
        )
        values = acquisition.pixels[np.array(slices)[:, None, None], rows, columns].astype(np.float64)
        dark = 1 - values / _level(values)
        dark = np.clip(dark, -0.5, 1.0) * np.sqrt(radii)[:, None]
        return cls(np.fft.rfft(dark, axis=-1).astype(np.complex64), float(np.sum(dark**2)), heights, thickness)

    def best(self, phantom: Phantom, *, reach_mm: float, ways: tuple[bool, ...]) -> _Guess:
        """Return the best agreement over all turns and over heights within reach.

        Of ways that agree alike (a lattice looks the same after a quarter turn) the one nearest to the nominal set-up is
        taken.
        """
        _, templates, energies = _expected_rings(phantom, self.thickness_mm)
        last = len(templates) // 2
        count = int(reach_mm / _STEP_MM)
        shifts = np.arange(-count, count + 1) * _STEP_MM
        found = _Guess(-1.0, reversed=False, shift_mm=0.0, turn_deg=0.0)
        waves = np.arange(templates.shape[-1])
        turns = (np.arange(_ANGLES) * 360 / _ANGLES + 180) % 360 - 180
        for way in ways:
            signed = -self.heights_mm if way else self.heights_mm
            number = np.round((signed[None, :] + shifts[:, None]) / _STEP_MM).astype(np.intp)
            known = np.abs(number) <= last
            at = np.where(known, number + last, 0)
            chosen = templates[at] * known[..., None, None]
            if way:
                chosen = chosen.conj() * np.exp(-1j * np.pi * waves).astype(np.complex64)
            product = np.einsum("srw,nsrw->nw", self.series, chosen.conj())
            agreement = np.fft.irfft(product, n=_ANGLES, axis=-1)
            norm = np.sqrt(np.maximum((energies[at] * known).sum(axis=1), 1e-9) * max(self.energy, 1e-9))
            score = agreement / norm[:, None]
            near = np.where(np.abs(turns) <= _MOST_TURN_DEG, score, -1.0)
            best = near if near.max() > _ALIKE * score.max() else score
            n, turn = np.unravel_index(int(np.argmax(best)), score.shape)
            if _ALIKE * score[n, turn] > found.score:
                fine = _vertex(score[n, [turn - 1, turn, (turn + 1) % _ANGLES]])
                height = _middle_of_peak(score[:, turn], int(n))
                found = _Guess(
                    score=float(score[n, turn]),
                    reversed=way,
                    shift_mm=float(shifts[0] + height * _STEP_MM),
                    turn_deg=float(turns[turn] + fine * 360 / _ANGLES),
                )
        return found


def _middle_of_peak(scores: Floats, top: int) -> float:
    """Place of a peak in steps: its vertex, or, where several steps agree alike (within a lattice), the middle of these."""
    alike = scores >= _ALIKE * scores[top]
    low, high = top, top
    while low > 0 and alike[low - 1]:
        low -= 1
    while high < len(scores) - 1 and alike[high + 1]:
        high += 1
    if high - low >= 3 or not 0 < top < len(scores) - 1:
        return (low + high) / 2
    return top + _vertex(scores[top - 1 : top + 2])


def _vertex(three: Floats) -> float:
    """Place of a parabola's vertex through three values at -1, 0, 1, the middle one the largest."""
    bend = three[0] - 2 * three[1] + three[2]
    return float(np.clip(0.5 * (three[0] - three[2]) / bend, -0.5, 0.5)) if bend < 0 else 0.0


@lru_cache(maxsize=1)
def _surface_terms() -> Floats:
    """Powers of x and y up to the fourth (samples, 15) at the rings' samples, in units of the outermost ring."""
    X, Y = _ring_places(np.linspace(_INNER, _OUTER, _RINGS) / _OUTER)
    powers: Floats = np.stack([X ** (n - k) * Y**k for n in range(5) for k in range(n + 1)], axis=-1).reshape(-1, 15)
    return powers


def _level(values: Floats) -> Floats:
    """Signal of the fill on the rings, (S, rings, angles): one smooth surface for all slices, with a gain for each."""
    rank = int(0.7 * (len(values) - 1) + 0.5)
    usual = np.partition(values, rank, axis=0)[rank]
    terms, flat = _surface_terms(), usual.reshape(-1)
    middle = float(np.median(flat))
    kept = flat > 0.7 * middle
    for _ in range(3):
        some = terms[kept]
        surface = terms @ np.linalg.solve(some.T @ some + 1e-9 * np.eye(15), some.T @ flat[kept])
        kept = flat > 0.9 * surface
        if kept.sum() < 40:
            break
    surface = np.maximum(surface.reshape(usual.shape), 0.1 * middle + 1e-9)
    gain = np.median((values / surface).reshape(len(values), -1)[:, ::4], axis=1)
    level: Floats = surface * np.maximum(gain, 1e-6)[:, None, None]
    return level
