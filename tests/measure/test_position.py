"""Slice position from wedge bars, against digital phantoms of known truth."""

import numpy as np
import pytest

from qa.locate import locate
from qa.measure.position import slice_position
from qa.phantoms import load_phantom
from qa.records import NotMeasured
from qa.simulate import default_setup, simulate, true_values

SECTIONED = load_phantom("sectioned-190")
QUICK = {"repeats": 1, "matrix": (200, 200), "pixel_mm": (1.2, 1.2)}


def positions(**changes):
    setup = default_setup(SECTIONED, **(QUICK | changes))
    scan = simulate(setup)
    return tuple(slice_position(scan, locate(scan, SECTIONED), SECTIONED)), true_values(setup)


@pytest.mark.parametrize("height", [-5.0, -2.0, 0.0, 3.0, 5.0])
def test_sign_and_size(height):
    """A slice above the section's z reads positive: the phantom then lies too low."""
    found, truth = positions(centre_patient=(0.0, 0.0, -height), snr=1e4)
    assert [m.quantity for m in found] == ["slice_position", "slice_position_end"]
    for measurement in found:
        assert truth[measurement.quantity].value == pytest.approx(height, abs=1e-6)
        assert measurement.value == pytest.approx(height, abs=0.03)
    assert [m.slice for m in found] == [1, 11]


@pytest.mark.parametrize(
    "changes",
    [
        {"tilt_x_deg": 1.8, "tilt_y_deg": -0.7, "rotation_deg": 9.0, "centre_patient": (12.0, -9.0, 1.0)},
        {"snr": 35.0, "channels": 16},
        {"pixel_mm": (1.5, 1.25), "matrix": (160, 190), "thickness_mm": 3.0},
        {"apodisation": "hann", "shading_percent": 40.0},
        {"profile_edge_mm": 1.0, "acquired_fraction": 0.7},
    ],
)
def test_whatever_the_scanner_does(changes):
    found, truth = positions(**changes)
    for m in found:
        true = truth[m.quantity]
        assert m.value == pytest.approx(true.value, abs=0.1)
        assert m.value == pytest.approx(true.value, abs=4.5 * m.standard_uncertainty)
        assert m.standard_uncertainty < 0.06
        assert m.details["on_axis_mm"] == pytest.approx(true.details["on_axis_mm"], abs=0.1)


def test_lengths_and_lines():
    found, _ = positions(centre_patient=(0.0, 0.0, -2.0))
    first, second = found[0].details["lengths_mm"]
    assert found[0].value == pytest.approx((first - second) / 2, abs=1e-3)
    assert first == pytest.approx(32.0, abs=0.1)
    for line, length in zip(found[0].regions, (first, second), strict=True):
        (x0, y0), (x1, y1) = line.points
        assert np.hypot(x1 - x0, y1 - y0) == pytest.approx(length, abs=1e-6)


def test_bars_filled_up_are_not_read():
    setup = default_setup(SECTIONED, **QUICK)
    scan = simulate(setup)
    pose = locate(scan, SECTIONED)
    from dataclasses import replace

    pixels = scan.pixels.copy()
    pixels[0] = pixels[6]
    emptied = replace(scan, repeats=(replace(scan.first, pixels=pixels),))
    first, last = slice_position(emptied, pose, SECTIONED)
    assert isinstance(first, NotMeasured)
    assert "do not stand out" in first.reason
    assert last.value == pytest.approx(0.0, abs=0.05)


def test_a_phantom_without_wedges():
    rods = load_phantom("lattice-200")
    scan = simulate(default_setup(rods, repeats=1))
    assert [m.reason for m in slice_position(scan, locate(scan, rods), rods)] == ["this phantom has no wedge bars"] * 2
