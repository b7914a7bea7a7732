"""What is not this phantom is said in words that a technologist can act on, and nothing is guessed."""

import numpy as np
import pytest

from qa.locate import locate
from qa.phantoms import load_phantom
from qa.records import NotLocated

SIDE = (220, 220)


def reason(acquisition, phantom="sphere-170"):
    answer = locate(acquisition, load_phantom(phantom))
    assert isinstance(answer, NotLocated)
    return answer.reason


def test_another_size(scene, scan):
    said = reason(scan([scene(SIDE).disc(0, 0, 70).image(100)]))
    assert "diameter is 140 mm, where sphere-170 has 170 mm" in said
    assert "190 mm, where cylinder-200 has 200 mm" in reason(scan([scene(SIDE).disc(0, 0, 95).image(100)]), "cylinder-200")


@pytest.mark.parametrize("phantom", ["sphere-170", "sphere-any"])
def test_an_ellipse_20_percent_out_of_round(scene, scan, phantom):
    assert "20 % out of round" in reason(scan([scene(SIDE).ellipse(0, 0, 93, 77.5).image(100)]), phantom)


def test_cut_by_the_edge_of_the_image(scene, scan):
    for x in (80, 30):
        assert "cut by the edge of the image" in reason(scan([scene(SIDE).disc(x, 0, 85).image(100)]))


def test_a_phantom_that_just_fits_is_found(scene, scan):
    answer = locate(scan([scene(SIDE).disc(24, 0, 85).image(100)]), load_phantom("sphere-170"))
    assert answer.sections[0].radius_mm == pytest.approx(85, abs=0.05)


@pytest.mark.parametrize("image", [np.zeros(SIDE), -np.ones(SIDE), np.full(SIDE, 7.0)])
def test_no_signal(scan, image):
    assert "check that the phantom was in the coil" in reason(scan([image]))


@pytest.mark.parametrize("channels", [1, 16])
def test_noise_only(scene, scan, channels):
    assert "nothing stands out" in reason(scan([scene(SIDE).image(30, channels=channels)]))


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_values_that_are_not_numbers(scene, scan, value):
    image = scene(SIDE).disc(0, 0, 85).image(100)
    image[3, 4] = value
    assert "not numbers" in reason(scan([image]))
    assert "not numbers" in reason(scan([np.full(SIDE, value)]))


def test_more_than_one_object(scene, scan):
    assert "more than one object" in reason(scan([scene(SIDE).disc(-50, 0, 45).disc(60, 30, 40).image(100)]), "sphere-any")
    assert "more than one object" in reason(scan([scene(SIDE).disc(-10, 0, 85).disc(95, -95, 10).image(100)]))


def test_what_is_not_round(scene, scan):
    square = scene(SIDE)
    square.density[:] = (np.abs(square.x) < 75) & (np.abs(square.y) < 75)
    assert "no round outline" in reason(scan([square.image(100)]), "sphere-any")
    half = scene(SIDE).disc(0, 0, 85).empty((-200, 200), (-200, 0))
    assert "out of round" in reason(scan([half.image(100)]))
    inverted = 1000 - scene(SIDE).disc(0, 0, 85).image(100)
    assert "no round outline" in reason(scan([inverted]))


def test_images_that_are_not_magnitudes(scene, scan):
    assert "phase images" in reason(scan([scene(SIDE).disc(0, 0, 85).image(100)], kind="phase"))


def test_images_too_small_to_show_anything(scan):
    assert "too small" in reason(scan([np.ones((8, 8))]))
    assert "too small" in reason(scan(np.ones((0, 64, 64))))
