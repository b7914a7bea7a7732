"""A department's own phantom is one TOML file: other body, ramps, wedge, lattice and slices, and no code."""

import numpy as np
import pytest

from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom
from qa.records import NotLocated
from qa.simulate import default_setup, simulate, true_values

OWN = """
[about]
title = "An invented phantom"
source = "Invented for this test."
cautions = "Does not exist."

[body]
shape = "cylinder"
diameter_mm = 204.0
length_mm = 130.0

[slices]
count = 9
thickness_mm = 4.0
spacing_mm = 12.0
first_z_mm = -48.0

[[section]]
kind = "ramps"
z_mm = 36.0
z_from_mm = 26.0
z_to_mm = 46.0
block_centre_mm = [4.0, -12.0]
block_size_mm = [96.0, 16.0]
slots = [
    { centre_y_mm = -16.0, height_mm = 6.0, thickness_mm = 1.2, slope = -0.14, crossing_x_mm = 6.0 },
    { centre_y_mm = -8.0, height_mm = 6.0, thickness_mm = 1.2, slope = 0.14, crossing_x_mm = 2.0 },
]

[[section]]
kind = "wedge-bars"
z_mm = -48.0
start_y_mm = -102.0
length_mm = 26.0
reach_mm = 12.0
bars = [
    { x_from_mm = -14.0, x_to_mm = -4.0, slope = -1.5 },
    { x_from_mm = 4.0, x_to_mm = 14.0, slope = 1.5 },
]

[[section]]
kind = "lattice"
z_from_mm = -18.0
z_to_mm = -6.0
pitch_mm = 17.0
bar_width_mm = 3.0
bars = 6
span_mm = 88.0

[[section]]
kind = "uniform"
z_from_mm = -4.0
z_to_mm = 18.0
"""


@pytest.fixture(scope="module")
def own(tmp_path_factory):
    path = tmp_path_factory.mktemp("phantoms") / "own-204.toml"
    path.write_text(OWN, encoding="utf-8")
    return load_phantom(path)


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_measured_right_by_its_file_alone(own, seed):
    rng = np.random.default_rng([5, seed])
    setup = default_setup(
        own,
        repeats=1,
        matrix=(230, 220),
        pixel_mm=(1.1, 1.15),
        rotation_deg=float(rng.uniform(-9, 9)),
        tilt_x_deg=float(rng.uniform(-1, 1)),
        tilt_y_deg=float(rng.uniform(-0.6, 0.6)),
        centre_patient=(float(rng.uniform(-8, 8)), float(rng.uniform(-8, 8)), float(rng.uniform(-0.8, 0.8))),
        snr=120.0,
        channels=2,
    )
    scan, truth = simulate(setup), true_values(setup)
    pose = locate(scan, own)
    assert not isinstance(pose, NotLocated)
    found, missed = measure(scan, pose, own)
    figures = {m.quantity: m for m in found}
    for name, most in (
        ("slice_thickness", 0.15),
        ("slice_position", 0.2),
        ("lattice_rms", 0.1),
        ("length_0", 0.2),
        ("length_90", 0.2),
        ("uniformity_piu", 1.0),
    ):
        assert figures[name].value == pytest.approx(truth[name].value, abs=most), name
    assert figures["slice_thickness"].slice == 8
    assert figures["slice_position"].slice == 1
    assert figures["lattice_rms"].slice == 4
    assert len(figures["lattice_rms"].details["rods"]) == 36
    reasons = {m.quantity: m.reason for m in missed}
    assert reasons["slice_position_end"] == "this phantom has wedge bars in one section only"


def test_the_same_file_upside_down_is_told(own):
    pose = locate(simulate(default_setup(own, repeats=1, rotation_deg=180.0)), own)
    assert isinstance(pose, NotLocated)
    assert "turned by 180 degrees" in pose.reason
