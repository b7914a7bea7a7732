"""A few random scans of each structured phantom against the accuracy table; the whole campaign is in tests/bench."""

import numpy as np
import pytest

from qa.locate import locate
from qa.measure import lattice, position, thickness
from qa.phantoms import load_phantom
from qa.records import Measurement, NotLocated
from qa.simulate import random_setup, simulate, true_values

CASES = 8


def errors(phantom, routines, **changes):
    """(error, standard uncertainty) of every figure by quantity, and errors of marks in pixels."""
    found, marks = {}, []
    for number in range(CASES):
        rng = np.random.default_rng([31, len(phantom), number])
        drawn = {name: float(rng.uniform(-most, most)) for name, most in changes.items()}
        setup = random_setup(rng, load_phantom(phantom), repeats=1, **drawn)
        scan, truth = simulate(setup), true_values(setup)
        pose = locate(scan, setup.phantom)
        assert not isinstance(pose, NotLocated), pose.reason
        for m in (m for routine in routines for m in routine(scan, pose, setup.phantom)):
            if not isinstance(m, Measurement):
                continue
            told = truth[m.quantity]
            found.setdefault(m.quantity, []).append((m.value - told.value, m.standard_uncertainty))
            if m.quantity == "lattice_rms":
                true = {(r["i"], r["j"]): r["place_mm_in_image"] for r in told.details["rods"]}
                for rod, region in zip(m.details["rods"], m.regions, strict=True):
                    off = np.subtract(region.points[0], setup.planes[0].middle_mm) - true[rod["i"], rod["j"]]
                    marks.append(off / np.array(setup.pixel_mm)[::-1])
    table = {name: np.array(rows).T for name, rows in found.items()}
    for name, (error, u) in table.items():
        print(
            f"{name:20s} {len(error)} cases, bias {error.mean():+.4f}, worst {np.abs(error).max():.4f}, u {np.median(u):.4f}"
        )
    return table, np.array(marks)


@pytest.fixture(scope="module")
def sectioned():
    return errors("sectioned-190", (thickness.slice_thickness, position.slice_position, lattice.lattice))


@pytest.fixture(scope="module")
def rods():
    bend = {"nonlinearity_x_mm": 2.0, "nonlinearity_y_mm": 2.0, "scale_x_percent": 1.5, "scale_y_percent": 1.5}
    return errors("lattice-200", (lattice.lattice,), **bend)


def test_slice_position(sectioned):
    for name in ("slice_position", "slice_position_end"):
        error, u = sectioned[0][name]
        assert len(error) == CASES
        assert np.abs(error).max() < 0.20
        assert np.abs(error / u).max() < 4.5


def test_slice_thickness(sectioned):
    error, u = sectioned[0]["slice_thickness"]
    assert np.abs(error).max() < 0.15
    assert np.abs(error / u).max() < 4.5


@pytest.mark.parametrize("which", ["sectioned", "rods"])
def test_marks(which, request):
    _, marks = request.getfixturevalue(which)
    assert len(marks) > 0.9 * 81 * CASES
    assert np.abs(marks.mean(axis=0)).max() < 0.02
    assert np.percentile(np.abs(marks), 95) < 0.10
    assert np.abs(marks).max() < 0.3


def test_displacement_figures(rods):
    for name in ("lattice_rms", "lattice_max", "distortion_max", "scale_x", "scale_y"):
        error, u = rods[0][name]
        assert len(error) == CASES
        assert np.abs(error).max() < 0.1
        assert np.abs(error / u).max() < 4.5
