"""Matching the marks that were seen to the ideal square lattice, whatever its turn, and however it is bent.

Growing from the centre: ring by ring, a smooth surface through the marks matched so far foretells where the next ring lies,
and a mark is taken when it is nearest to one foretold place and clearly nearer than half a pitch. What is not clear stays
unmatched: a mark is rather missing than mistaken.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.phantoms import Lattice, Rods

__all__ = ["Matched", "ideal_marks", "match_lattice", "rigid_fit"]

_CLEAR = 0.38
"""Share of the pitch within which a mark is taken for the one foretold there."""
_STRAIGHT = 0.01
"""Scatter, in pitches, below which a lattice is not looked at for bends."""
_PLAIN = 0.2
"""Displacement, in pitches, below which the nearest place is taken without growing."""
_SURE = 0.8
"""Share of the marks that must find a place, or none is believed."""


@dataclass(frozen=True, eq=False)
class Matched:
    """Which mark is which.

    Attributes
    ----------
    mark : (N,) int
        For each place of the ideal lattice the index of the mark that was seen there, -1 where none was.
    foretold_mm : (N, 2) float
        Where a smooth surface through all marks puts each place.
    turn_deg : float
        Turn of the lattice about its centre, x towards y.
    """

    mark: NDArray[np.intp]
    foretold_mm: Floats
    turn_deg: float


def ideal_marks(section: Rods | Lattice) -> tuple[NDArray[np.intp], Floats]:
    """Whole-number places i, j (N, 2) of a section's rods or crossings, and where they lie in the phantom, mm (N, 2)."""
    listed = section.rods_mm() if isinstance(section, Rods) else section.crossings_mm()
    return np.array([mark[:2] for mark in listed], dtype=np.intp), np.array([mark[2:] for mark in listed])


def rigid_fit(seen: Floats, true: Floats) -> tuple[Floats, Floats]:
    """Return turn R and shift t with `seen` about `true @ R.T + t`, by least squares and without scale (Kabsch)."""
    a, b = seen - seen.mean(axis=0), true - true.mean(axis=0)
    u, _, vt = np.linalg.svd(a.T @ b)
    turn = u @ np.diag([1.0, np.sign(np.linalg.det(u @ vt))]) @ vt
    return turn, seen.mean(axis=0) - turn @ true.mean(axis=0)


def match_lattice(
    marks_mm: Floats,
    lattice: NDArray[np.intp],
    pitch_mm: float,
    centre_mm: Floats,
    turn_deg: float = 0.0,
    *,
    trusted: NDArray[np.bool_] | None = None,
) -> Matched | str:
    """Tell which mark is which place of a square lattice.

    Parameters
    ----------
    marks_mm : (M, 2) float
        Places that were seen, mm, in any order, with false ones among them.
    lattice : (N, 2) int
        The whole-number places i, j of the ideal lattice.
    pitch_mm : float
        Distance between neighbours.
    centre_mm : (2,) float
        About where place 0, 0 lies: off by less than half a pitch.
    turn_deg : float
        About how the lattice is turned; a square lattice tells its turn only up to quarter turns, and the nearest is taken.
    trusted : (N,) bool, optional
        Places whose marks are seen without bias, and which alone foretell the others; all when left out.

    Returns
    -------
    Matched or str
        Or a plain reason why the marks are no such lattice.
    """
    marks = (np.asarray(marks_mm, dtype=np.float64) - centre_mm) / pitch_mm
    if len(marks) < 5:
        return f"only {len(marks)} marks of the lattice stand out"
    turn = _turn(marks, np.radians(turn_deg))
    if turn is None:
        return "the marks in the image form no square lattice of this pitch"
    c, s = np.cos(turn), np.sin(turn)
    back = np.array([[c, -s], [s, c]])
    marks = marks @ back
    start = _start(marks)
    if start is None:
        return "the marks in the middle of the image form no square lattice of this pitch"
    index = _straight(marks, start)
    if index is None:
        index = _grow(marks, start, lattice)
    within = np.hypot(*marks.T) < np.hypot(*lattice.T).max() + 0.5
    if (index[within, 0] > _NEVER).sum() < _SURE * within.sum():
        return "the marks in the image follow no square lattice of this pitch, not even a bent one"
    shift = _shift(index, lattice)
    placed = np.flatnonzero(index[:, 0] > _NEVER)
    where = np.full(_SPAN, -1, dtype=np.intp)
    where[tuple(np.clip(index[placed] + shift + _MIDDLE, 0, _SPAN[0] - 1).T)] = placed
    mark = where[tuple((lattice + _MIDDLE).T)]
    if trusted is not None and np.count_nonzero(trusted & (mark >= 0)) >= 5:
        biased = mark[~trusted & (mark >= 0)]
        index = index.copy()
        index[biased] = _NEVER
    foretold = _foretell(index, marks, lattice - shift) @ back.T
    return Matched(mark, foretold * pitch_mm + centre_mm, float(np.degrees(turn)))


_NEVER = -1000
_SPAN = (256, 256)
_MIDDLE = 128


def _turn(marks: Floats, near: float) -> float | None:
    """Turn of the lattice, up to quarter turns, from the vectors between neighbours; marks in units of the pitch."""
    apart = marks[:, None, :] - marks[None, :, :]
    length = np.hypot(apart[..., 0], apart[..., 1])
    pairs = (length > 0.75) & (length < 1.25)
    pairs &= np.hypot(*marks.T)[:, None] < 3.6
    if pairs.sum() < 4:
        return None
    angle = np.arctan2(apart[..., 1], apart[..., 0])[pairs]
    waves = np.exp(4j * angle)
    mean = waves.mean()
    if abs(mean) < 0.3:
        return None
    turn = float(np.angle(mean)) / 4
    quarter = np.pi / 2
    return turn + quarter * round((near - turn) / quarter)


def _start(marks: Floats) -> tuple[int, Floats] | None:
    """Return the mark nearest the centre that has at least three neighbours where a lattice has them, and its own place."""
    steps = np.array([(1, 0), (-1, 0), (0, 1), (0, -1)], dtype=np.float64)
    for k in np.argsort(np.hypot(*marks.T))[:9]:
        wanted = marks[k] + steps
        away = np.hypot(*(wanted[:, None, :] - marks[None, :, :]).transpose(2, 0, 1)).min(axis=1)
        if (away < 0.3).sum() >= 3:
            return int(k), np.round(marks[k])
    return None


def _terms(places: Floats, order: int) -> Floats:
    """Powers of i and j up to an order, shape (..., T); scaled so that they stay of order one."""
    x, y = places[..., 0] / 4, places[..., 1] / 4
    terms: Floats = np.stack([x ** (n - b) * y**b for n in range(order + 1) for b in range(n + 1)], axis=-1)
    return terms


def _straight(marks: Floats, start: tuple[int, Floats]) -> NDArray[np.intp] | None:
    """Whole-number places (M, 2) of the marks of a lattice that is hardly bent: the nearest; None where it is not so plain."""
    seed, place = start
    index = np.round(marks - marks[seed] + place)
    design = np.column_stack([np.ones(len(marks)), index])
    away = marks - design @ np.linalg.lstsq(design, marks, rcond=None)[0]
    plain = np.abs(index - marks + marks[seed] - place).max() < _PLAIN and np.abs(away).max() < _PLAIN / 2
    unique = len({(float(i), float(j)) for i, j in index}) == len(index)
    return index.astype(np.intp) if plain and unique else None


def _grow(marks: Floats, start: tuple[int, Floats], lattice: NDArray[np.intp]) -> NDArray[np.intp]:
    """Whole-number places (M, 2) of the marks, far below zero where a mark has none."""
    seed, place = start
    index = np.full((len(marks), 2), _NEVER, dtype=np.intp)
    index[seed] = place
    low, high = lattice.min(axis=0) - 1, lattice.max(axis=0) + 1
    spans = [np.arange(a, b + 1) for a, b in zip(low, high, strict=True)]
    places = np.stack(np.meshgrid(*spans, indexing="ij"), axis=-1).reshape(-1, 2)
    distance = np.hypot(*(places - place).T)
    farthest = float(distance.max())
    rings = [1.05, *np.arange(1.5, farthest + 0.85, 0.85), farthest, farthest]
    for ring in rings:
        here = places[distance <= ring]
        foretold = _foretell(index, marks, here)
        squares = _squares(foretold, marks)
        nearest = squares.argmin(axis=1)
        clear = (squares[np.arange(len(here)), nearest] < _CLEAR**2) & (
            squares.argmin(axis=0)[nearest] == np.arange(len(here))
        )
        index[:] = _NEVER
        index[nearest[clear]] = here[clear]
    return _without_strays(index, marks)


def _squares(a: Floats, b: Floats) -> Floats:
    """Squared distance of every point of a (A, 2) from every one of b (B, 2)."""
    squared: Floats = (a[:, None, 0] - b[None, :, 0]) ** 2 + (a[:, None, 1] - b[None, :, 1]) ** 2
    return squared


def _foretell(index: NDArray[np.intp], marks: Floats, places: NDArray[np.intp]) -> Floats:
    """Where places of the lattice should be seen, from a smooth displacement through the marks that have a place so far.

    A displacement of higher order is taken only where it explains the marks far better: a bend does that, scatter does not.
    """
    placed = np.flatnonzero(index[:, 0] > _NEVER)
    known = index[placed].astype(np.float64)
    moved = marks[placed] - known
    if len(placed) < 5:
        shifted: Floats = places + moved.mean(axis=0)
        return shifted
    coefficients, rms = _smooth(_terms(known, 1), moved)
    order = 1
    for higher, least in ((2, 13), (3, 25)):
        if len(placed) >= least and rms > _STRAIGHT:
            bent, smaller = _smooth(_terms(known, higher), moved)
            if smaller < 0.6 * rms:
                coefficients, rms, order = bent, smaller, higher
    foretold: Floats = places + _terms(places.astype(np.float64), order) @ coefficients
    return foretold


def _smooth(design: Floats, values: Floats) -> tuple[Floats, float]:
    """Least squares with a pull towards no stretch, shear or bend, so that few marks cannot send the next ring astray."""
    pull = np.full(design.shape[1], 0.02)
    pull[0] = 1e-9
    pull[1:3] = 0.5 if len(pull) == 3 else 0.02
    solved: Floats = np.linalg.solve(design.T @ design + np.diag(pull), design.T @ values).astype(np.float64)
    free = max(1, len(design) - design.shape[1])
    return solved, float(np.sqrt(np.sum((values - design @ solved) ** 2) / free)) + 1e-6


def _without_strays(index: NDArray[np.intp], marks: Floats) -> NDArray[np.intp]:
    """Take their place from marks that stand out from the smooth surface through all the others."""
    placed = np.flatnonzero(index[:, 0] > _NEVER)
    away = np.hypot(*(marks[placed] - _foretell(index, marks, index[placed])).T)
    limit = max(0.08, 6 * float(np.median(away)))
    kept = index.copy()
    kept[placed[away > limit]] = _NEVER
    return kept


def _shift(index: NDArray[np.intp], lattice: NDArray[np.intp]) -> NDArray[np.intp]:
    """Whole-number shift under which most marks fall on places that the lattice has; none where none is better."""
    have = np.zeros(_SPAN, dtype=np.bool_)
    have[tuple((lattice + _MIDDLE).T)] = True
    seen = index[index[:, 0] > _NEVER] + _MIDDLE
    candidates = np.array([(0, 0), (1, 0), (-1, 0), (0, 1), (0, -1), (1, 1), (1, -1), (-1, 1), (-1, -1)], dtype=np.intp)
    inside = [np.count_nonzero(have[tuple(np.clip(seen + c, 0, _SPAN[0] - 1).T)]) for c in candidates]
    best: NDArray[np.intp] = candidates[int(np.argmax(inside))]
    return best
