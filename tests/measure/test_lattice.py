"""The displacement field of a lattice against digital phantoms of known truth."""

from dataclasses import replace

import numpy as np
import pytest

from qa.locate import locate
from qa.measure.lattice import lattice
from qa.phantoms import load_phantom
from qa.records import Acquisition, NotMeasured
from qa.simulate import default_setup, simulate, true_values

RODS, SECTIONED = load_phantom("lattice-200"), load_phantom("sectioned-190")
QUICK = {"repeats": 1, "rotation_deg": 6.0, "centre_patient": (8.0, -5.0, 0.0)}
SLICES = {"matrix": (200, 200), "pixel_mm": (1.2, 1.2)}


def field(phantom, **changes):
    setup = default_setup(phantom, **(QUICK | changes))
    scan = simulate(setup)
    return {m.quantity: m for m in lattice(scan, locate(scan, phantom), phantom)}, true_values(setup), setup


def mark_errors(found, truth, setup):
    """Errors of all marks (N, 2), pixels along x and y: each is compared with the mark of its own indices."""
    true = {(r["i"], r["j"]): r["place_mm_in_image"] for r in truth["lattice_rms"].details["rods"]}
    middle = np.array(setup.planes[0].middle_mm)
    rms = found["lattice_rms"]
    seen = {(r["i"], r["j"]): region.points[0] for r, region in zip(rms.details["rods"], rms.regions, strict=True)}
    return np.array([np.subtract(seen[k], middle) - true[k] for k in seen]) / np.array(setup.pixel_mm)[::-1]


BENT = {"nonlinearity_x_mm": 2.0, "nonlinearity_y_mm": -1.5, "scale_x_percent": 0.8}


@pytest.mark.parametrize(
    "changes",
    [
        {},
        BENT,
        BENT | {"snr": 30.0, "channels": 16},
        BENT | {"pixel_mm": (1.5, 1.25), "matrix": (200, 240)},
        {"pixel_mm": (0.8, 0.9), "matrix": (360, 320), "rotation_deg": -38.0},
        {"apodisation": "hann", "shading_percent": 40.0, "ghost_percent": 3.0},
        {"acquired_fraction": 0.7},
    ],
)
def test_every_rod_to_hundredths_of_a_pixel(changes):
    found, truth, setup = field(RODS, **changes)
    errors = mark_errors(found, truth, setup)
    assert len(errors) == 81
    assert found["lattice_rms"].details["missing"] == []
    assert np.abs(errors.mean(axis=0)).max() < 0.02
    assert np.percentile(np.abs(errors), 95) < 0.10


def test_figures_of_a_bent_lattice():
    found, truth, _ = field(RODS, **BENT)
    assert set(found) == {"lattice_rms", "lattice_max", "distortion_max", "scale_x", "scale_y"}
    for name, m in found.items():
        assert m.value == pytest.approx(truth[name].value, abs=4 * m.standard_uncertainty)
    rods = found["lattice_rms"].details["rods"]
    away = np.array([np.subtract(r["measured_mm"], r["true_mm"]) for r in rods])
    assert found["lattice_rms"].details["as_read_mm"] == pytest.approx(np.sqrt(np.mean(np.sum(away**2, axis=1))), rel=1e-9)
    inside = found["lattice_max"].details["largest_inside_mm"]
    assert inside["100"] < inside["150"] < inside["200"] == found["lattice_max"].details["as_read_mm"]
    assert away.mean(axis=0) == pytest.approx([0, 0], abs=1e-9)


def test_a_perfect_lattice_is_not_called_bent():
    found, _, _ = field(RODS, snr=40.0)
    for name in ("lattice_rms", "lattice_max", "distortion_max"):
        assert found[name].value < 2.5 * found[name].standard_uncertainty
    for name in ("scale_x", "scale_y"):
        assert abs(found[name].value) < 3 * found[name].standard_uncertainty


@pytest.mark.parametrize(("height", "least"), [(0.0, 81), (-4.0, 75)])
def test_crossings_of_the_sectioned_phantom(height, least):
    found, truth, setup = field(SECTIONED, **SLICES, centre_patient=(3.0, -2.0, height), nonlinearity_x_mm=2.0)
    errors = mark_errors(found, truth, setup)
    assert len(errors) >= least
    assert np.percentile(np.abs(errors), 95) < 0.10
    assert set(found) == {"lattice_rms", "lattice_max"}
    assert found["lattice_rms"].slice == 5
    assert found["lattice_rms"].value == pytest.approx(truth["lattice_rms"].value, abs=0.05)


def painted(scan, cover):
    """Set pixels to zero where `cover(x, y)` from the image's middle holds."""
    plane = scan.planes[0]
    x, y = plane.grid_mm()
    hidden = cover(x - plane.middle_mm[0], y - plane.middle_mm[1])
    return Acquisition((replace(scan.first, pixels=np.where(hidden, 20.0, scan.pixels).astype(np.float32)),))


def test_rods_in_a_bubble_are_missing_and_no_other_is_mistaken():
    setup = default_setup(RODS, repeats=1)
    scan = painted(simulate(setup), lambda x, y: np.hypot(x, y + 75) < 24)
    found = {m.quantity: m for m in lattice(scan, locate(scan, RODS), RODS)}
    errors = mark_errors(found, true_values(setup), setup)
    gone = {(m["i"], m["j"]) for m in found["lattice_rms"].details["missing"]}
    assert {(0, -4), (0, -3), (-1, -4), (1, -4)} <= gone
    assert len(errors) + len(gone) == 81
    assert np.abs(errors).max() < 0.3


def test_rods_outside_the_image_are_counted_as_such():
    setup = default_setup(RODS, repeats=1)
    scan = simulate(setup)
    pose = locate(scan, RODS)
    cut = Acquisition(
        (replace(scan.first, pixels=scan.pixels[:, :, :225], planes=(replace(scan.planes[0], shape=(300, 225)),)),)
    )
    found = {m.quantity: m for m in lattice(cut, pose, RODS)}
    missing = found["lattice_rms"].details["missing"]
    assert {m["i"] for m in missing if m["reason"] == "outside the image"} == {4, 5}
    errors = mark_errors(found, true_values(setup), setup)
    assert np.abs(errors).max() < 0.3


def test_a_field_of_view_that_cuts_the_lattice_is_said():
    scan = simulate(default_setup(RODS, repeats=1))
    part = Acquisition(
        (replace(scan.first, pixels=scan.pixels[:, 70:230, :], planes=(replace(scan.planes[0], shape=(160, 300)),)),)
    )
    pose = locate(part, RODS)
    assert "cut by the edge of the image" in pose.reason


def test_a_phantom_without_lattice():
    cylinder = load_phantom("cylinder-200")
    scan = simulate(default_setup(cylinder, repeats=1))
    found = list(lattice(scan, locate(scan, cylinder), cylinder))
    assert found == [NotMeasured(name, "this phantom has no lattice") for name in ("lattice_rms", "lattice_max")]


def test_a_section_with_no_lattice_in_it_is_said():
    scan = simulate(default_setup(SECTIONED, repeats=1, **SLICES))
    pose = locate(scan, SECTIONED)
    pixels = scan.pixels.copy()
    pixels[4] = pixels[6]
    found = list(lattice(Acquisition((replace(scan.first, pixels=pixels),)), pose, SECTIONED))
    assert all(isinstance(m, NotMeasured) for m in found)
    assert all("lattice" in m.reason or "marks" in m.reason for m in found)
