"""The outline is found to a few hundredths of a pixel through everything a phantom shows at its rim."""

import numpy as np
import pytest

from qa.locate import locate
from qa.phantoms import load_phantom
from qa.records import NotLocated

SIDE = (220, 220)


def found(pose, made):
    """Error of centre and radius in mm against the scene's middle."""
    section = pose.sections[0]
    x, y = (c - m for c, m in zip(section.centre_mm, made.middle, strict=True))
    return x, y, section.radius_mm


@pytest.mark.parametrize("snr", [500, 30])
@pytest.mark.parametrize("channels", [1, 16])
def test_shaded_and_off_centre(scene, scan, snr, channels):
    made = scene(SIDE).disc(10.3, -10.7, 85).shaded(40)
    pose = locate(scan([made.image(snr, channels=channels)]), load_phantom("sphere-170"))
    assert found(pose, made) == pytest.approx((10.3, -10.7, 85), abs=0.06)
    assert pose.sections[0].edge_fraction > 0.97


@pytest.mark.parametrize("snr", [500, 30])
@pytest.mark.parametrize("depth", [3, 6, 10])
def test_air_bubble_at_the_top(scene, scan, snr, depth):
    made = scene(SIDE).disc(5, 3, 85).shaded(30).empty((-200, 200), (-200, 3 - 85 + depth))
    pose = locate(scan([made.image(snr, seed=depth)]), load_phantom("sphere-170"))
    assert found(pose, made) == pytest.approx((5, 3, 85), abs=0.04)
    assert pose.sections[0].edge_fraction < 0.95


@pytest.mark.parametrize("snr", [500, 30])
def test_filling_port_and_bubble_together(scene, scan, snr):
    made = scene(SIDE).disc(5, 3, 85).shaded(40, 250).disc(5 - 85, 3, 12, 0).empty((-200, 200), (-200, 3 - 85 + 6))
    pose = locate(scan([made.image(snr)]), load_phantom("sphere-170"))
    assert found(pose, made) == pytest.approx((5, 3, 85), abs=0.05)


def test_wedge_bars_that_notch_the_rim(scene, scan):
    made = scene(SIDE).disc(5, 3, 95).shaded(40).empty((-3, 5), (-200, 3 - 95 + 30)).empty((5, 13), (-200, 3 - 95 + 35))
    pose = locate(scan([made.image(100)]), load_phantom("cylinder-200"))
    assert isinstance(pose, NotLocated)
    made = scene((240, 240)).disc(5, 3, 100).shaded(40).empty((-3, 5), (-200, 3 - 100 + 30)).empty((5, 13), (-200, -60))
    pose = locate(scan([made.image(100)]), load_phantom("cylinder-200"))
    assert found(pose, made) == pytest.approx((5, 3, 100), abs=0.04)


def test_pixels_that_are_not_square(scene, scan):
    made = scene((180, 240), (1.2, 0.9)).disc(-4.4, 6.1, 85)
    pose = locate(scan([made.image(60)], pixel_mm=(1.2, 0.9)), load_phantom("sphere-170"))
    assert found(pose, made) == pytest.approx((-4.4, 6.1, 85), abs=0.04)


def test_a_scale_error_of_a_few_percent_is_not_another_phantom(scene, scan):
    made = scene(SIDE).ellipse(0, 0, 85 * 1.02, 85 * 0.98)
    pose = locate(scan([made.image(100)]), load_phantom("sphere-170"))
    assert found(pose, made) == pytest.approx((0, 0, 85), abs=0.04)
    assert pose.sections[0].rms_mm == pytest.approx(85 * 0.02 / np.sqrt(2), rel=0.05)


def test_stated_uncertainty_of_the_centre_covers_the_error(scene, scan):
    phantom, inside = load_phantom("sphere-170"), []
    for seed in range(24):
        rng = np.random.default_rng(seed)
        x, y = rng.uniform(-10, 10, 2)
        made = scene((150, 150), (1.5, 1.5)).disc(x, y, 85).shaded(rng.uniform(0, 40))
        pose = locate(scan([made.image(rng.uniform(30, 300), seed)], pixel_mm=(1.5, 1.5)), phantom)
        error = np.subtract(found(pose, made)[:2], (x, y))
        inside += list(np.abs(error) <= 2 * pose.u_centre_mm[0])
    assert np.mean(inside) > 0.85
