"""Slice thickness against digital phantoms of known truth, and where it must not be given."""

import numpy as np
import pytest

from qa.locate import locate
from qa.measure.thickness import slice_thickness
from qa.phantoms import load_phantom
from qa.records import Measurement, NotMeasured
from qa.simulate import default_setup, simulate, true_values

SECTIONED = load_phantom("sectioned-190")
QUICK = {"repeats": 1, "matrix": (200, 200), "pixel_mm": (1.2, 1.2), "rotation_deg": 4.0, "centre_patient": (3.0, -2.0, 0.4)}


def thickness(**changes):
    """Measured and true thickness of one scan."""
    setup = default_setup(SECTIONED, **(QUICK | changes))
    scan = simulate(setup)
    (found,) = slice_thickness(scan, locate(scan, SECTIONED), SECTIONED)
    return found, true_values(setup)["slice_thickness"].value


@pytest.mark.parametrize("wanted", [3.0, 4.0, 5.0, 6.0])
def test_without_noise(wanted):
    found, true = thickness(thickness_mm=wanted, snr=1e5, centre_patient=(3.0, -2.0, 0.2))
    assert found.value == pytest.approx(true, abs=0.03)
    assert true == pytest.approx(wanted, abs=1e-3)


@pytest.mark.parametrize(
    "changes",
    [
        {"tilt_x_deg": 1.5, "tilt_y_deg": 0.8, "thickness_mm": 4.0},
        {"pixel_mm": (0.8, 0.8), "matrix": (300, 300)},
        {"pixel_mm": (1.5, 1.25), "matrix": (160, 190)},
        {"shading_percent": 40.0, "channels": 4},
        {"snr": 40.0, "channels": 16},
        {"apodisation": "hann"},
        {"acquired_fraction": 0.75},
        {"partial_fourier": 0.75},
        {"profile_edge_mm": 0.8},
        {"ghost_percent": 4.0},
        {"scale_x_percent": 2.0, "scale_y_percent": -1.5},
        {"nonlinearity_x_mm": 1.5, "nonlinearity_y_mm": -1.5},
    ],
)
def test_whatever_the_scanner_does(changes):
    found, true = thickness(**changes)
    assert found.value == pytest.approx(true, abs=0.15)
    assert found.value == pytest.approx(true, abs=4 * found.standard_uncertainty)
    assert found.standard_uncertainty < 0.1


def test_a_header_that_states_another_thickness_does_not_matter():
    setup = default_setup(SECTIONED, **QUICK, thickness_mm=3.0)
    scan = simulate(setup)
    from dataclasses import replace

    first = scan.first
    misled = replace(scan, repeats=(replace(first, settings=replace(first.settings, slice_thickness_mm=6.0)),))
    (found,) = slice_thickness(misled, locate(misled, SECTIONED), SECTIONED)
    assert found.value == pytest.approx(3.0, abs=0.06)


def test_details_for_the_report():
    found, _ = thickness()
    a, b = found.details["bars_mm"]
    assert found.value == pytest.approx(2 * a * b / (a + b) * found.details["slope"], rel=1e-12)
    assert found.details["full_width_tenth_maximum_mm"] == pytest.approx(5.8, abs=0.08)
    height, profile = (np.array(found.details[name]) for name in ("profile_mm", "profile"))
    assert np.mean(profile[np.abs(height) < 1.5]) == pytest.approx(1.0, abs=0.05)
    assert np.mean(profile[np.abs(height) > 4.0]) == pytest.approx(0.0, abs=0.15)
    assert [r.name for r in found.regions] == ["ramps", "bar A", "bar B"]
    assert {r.slice for r in found.regions} == {found.slice} == {1}
    for name, length in (("bar A", a), ("bar B", b)):
        (start, end) = next(r.points for r in found.regions if r.name == name)
        assert np.hypot(end[0] - start[0], end[1] - start[1]) == pytest.approx(length, abs=1e-6)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"thickness_mm": 10.0}, "runs into the block's end"),
        ({"centre_patient": (0.0, 0.0, 4.5)}, "runs into the block's end"),
        ({"snr": 6.0, "channels": 8}, "lost in the noise"),
    ],
)
def test_not_guessed(changes, words):
    setup = default_setup(SECTIONED, **(QUICK | changes))
    pose = locate(simulate(setup.but(snr=200.0)), SECTIONED)
    (found,) = slice_thickness(simulate(setup), pose, SECTIONED)
    assert isinstance(found, NotMeasured)
    assert words in found.reason


def test_more_noise_is_more_uncertain():
    few, many = (thickness(snr=snr)[0] for snr in (200.0, 40.0))
    assert isinstance(few, Measurement)
    assert many.standard_uncertainty > 1.5 * few.standard_uncertainty


def test_a_phantom_without_ramps():
    scan = simulate(default_setup(load_phantom("sphere-170"), repeats=1))
    sphere = load_phantom("sphere-170")
    assert list(slice_thickness(scan, locate(scan, sphere), sphere)) == [
        NotMeasured("slice_thickness", "this phantom has no ramps")
    ]
