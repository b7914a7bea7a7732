"""Marks are matched to the lattice whatever its turn and bend; what is not clear stays unmatched."""

import numpy as np
import pytest

from qa.locate.match import match_lattice
from qa.phantoms import Lattice, Rods, load_phantom

LATTICES = 1200


def listed(name):
    section = next(s for s in load_phantom(name).sections if isinstance(s, Rods | Lattice))
    marks = section.rods_mm() if isinstance(section, Rods) else section.crossings_mm()
    return np.array([(i, j) for i, j, _, _ in marks]), np.array([(x, y) for _, _, x, y in marks]), section.pitch_mm


def bend(rng, places, kind):
    """Displacements with a largest length drawn up to 6 mm: any cubic field, radial ones, or each mark for itself."""
    x, y = places.T / 100
    if kind == "cubic":
        terms = np.array([x**a * y**b for a in range(4) for b in range(4 - a)]).T
        field = terms @ rng.normal(size=(terms.shape[1], 2))
    elif kind == "radial":
        square = x * x + y * y
        field = np.stack([x * (square * rng.uniform(-1, 1) + rng.uniform(-1, 1)), y * (square * rng.uniform(-1, 1))], axis=1)
    else:
        angle, radius = rng.uniform(0, 2 * np.pi, len(places)), np.sqrt(rng.uniform(size=len(places)))
        field = np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=1)
    return field / np.hypot(*field.T).max() * rng.uniform(0, 6)


def scene(rng, name, kind):
    """A turned, bent lattice with marks missing here and there or cut off on one side, and false marks among them."""
    index, true, pitch = listed(name)
    turn = rng.uniform(-44, 44)
    c, s = np.cos(np.radians(turn)), np.sin(np.radians(turn))
    places = true @ np.array([[c, s], [-s, c]])
    places = places + bend(rng, places, kind)
    kept = rng.uniform(size=len(places)) > rng.choice([0.0, 0.1])
    if rng.uniform() < 0.2:
        kept &= places[:, 1] > -rng.uniform(60, 110)
    source = np.append(np.flatnonzero(kept), np.full(rng.integers(0, 4), -1))
    false = rng.uniform(-110, 110, size=((source < 0).sum(), 2))
    seen = np.concatenate([places[kept] + rng.normal(scale=0.1, size=(kept.sum(), 2)), false])
    order = rng.permutation(len(seen))
    shift = rng.uniform(-3, 3, 2)
    guess = shift + rng.normal(size=2), turn + rng.uniform(-3, 3)
    return index, seen[order] + shift, source[order], kept, pitch, guess


@pytest.mark.parametrize("kind", ["cubic", "radial", "each for itself"])
@pytest.mark.parametrize("name", ["lattice-200", "sectioned-190"])
def test_no_mark_is_mistaken_in_random_lattices(name, kind):
    rng = np.random.default_rng([11, len(name), len(kind)])
    missed = believed = 0
    for _ in range(LATTICES // 6):
        index, seen, source, kept, pitch, (centre, turn) = scene(rng, name, kind)
        matched = match_lattice(seen, index, pitch, centre, turn)
        if isinstance(matched, str):
            assert kind == "each for itself", matched
            continue
        believed += 1
        taken = matched.mark >= 0
        truth = source[matched.mark[taken]]
        assert np.all((truth == np.flatnonzero(taken)) | (truth == -1))
        missed += np.count_nonzero(kept & ~taken)
    assert believed > (0.98 if kind != "each for itself" else 0.5) * LATTICES / 6
    if kind != "each for itself":
        assert missed < 0.002 * believed * len(index)


def test_foretells_marks_that_are_missing():
    index, true, pitch = listed("lattice-200")
    field = 1e-6 * true * np.sum(true**2, axis=1)[:, None] * 2
    gone = (np.abs(index - (2, -2)) <= 1).all(axis=1)
    matched = match_lattice((true + field)[~gone], index, pitch, np.zeros(2))
    assert np.array_equal(matched.mark < 0, gone)
    assert np.abs(matched.foretold_mm - true - field).max() < 0.3


@pytest.mark.parametrize("turn", [-40.0, -7.5, 0.0, 12.0, 44.0])
def test_tells_the_turn(turn):
    index, true, pitch = listed("sectioned-190")
    c, s = np.cos(np.radians(turn)), np.sin(np.radians(turn))
    matched = match_lattice(true @ np.array([[c, s], [-s, c]]), index, pitch, np.zeros(2), turn + 2)
    assert matched.turn_deg == pytest.approx(turn, abs=1e-6)
    assert np.array_equal(matched.mark, np.arange(len(true)))


@pytest.mark.parametrize("count", [0, 3, 60])
def test_says_when_there_is_no_lattice(count):
    index, _, pitch = listed("lattice-200")
    rng = np.random.default_rng(count)
    reason = match_lattice(rng.uniform(-100, 100, size=(count, 2)), index, pitch, np.zeros(2))
    assert isinstance(reason, str)
    assert "lattice" in reason


def test_another_pitch_is_not_this_lattice():
    index, true, pitch = listed("lattice-200")
    assert isinstance(match_lattice(true * 1.5, index, pitch, np.zeros(2)), str)
