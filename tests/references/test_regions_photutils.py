"""Regions, their means and edges against general-purpose libraries on the same arrays.

photutils 3 computes the exact overlap of apertures with pixels; scikit-image finds level contours between pixels.
"""

import warnings

import numpy as np
import pytest
from photutils.aperture import CircularAperture, RectangularAperture
from scipy import ndimage
from skimage.measure import CircleModel, find_contours

from qa.geometry import Plane, disc_overlap
from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom
from qa.simulate import default_setup, simulate

PHANTOM = load_phantom("sphere-170")


@pytest.fixture(scope="module")
def scan():
    setup = default_setup(
        PHANTOM, snr=120.0, shading_percent=25.0, ghost_percent=2.0, channels=1, centre_patient=(4.0, -6.0, 0.0), seed=11
    )
    return simulate(setup)


@pytest.fixture(scope="module")
def figures(scan):
    measured, _ = measure(scan, locate(scan, PHANTOM), PHANTOM)
    return {m.quantity: m for m in measured}


def region(measurement, name):
    return next(r for r in measurement.regions if r.name == name)


def overlap(aperture, shape):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return aperture.to_mask(method="exact").to_image(shape)


@pytest.mark.parametrize(
    ("x", "y", "radius"), [(30.3, 29.1, 17.77), (3.3, 29.1, 17.77), (31.0, 30.0, 0.4), (30.5, 30.5, 25.0)]
)
def test_share_of_pixels_under_a_disc(x, y, radius):
    plane = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, 1.0), (60, 64))
    expected = overlap(CircularAperture((x, y), radius), (60, 64))
    assert disc_overlap(plane, (x, y), radius) == pytest.approx(expected, abs=1e-9)


def test_the_mean_over_m(scan, figures):
    circle = region(figures["snr"], "M")
    weights = overlap(CircularAperture(circle.points[0], circle.radius_mm), scan.pixels.shape[1:])
    expected = (scan.pixels[0] * weights).sum() / weights.sum()
    assert figures["snr"].details["signal"] == pytest.approx(expected, rel=1e-9)


def test_the_means_beside_the_phantom(scan, figures):
    ghost = figures["ghosting"]
    for name in ("top", "bottom", "left", "right"):
        corners = np.array(region(ghost, name).points)
        (x0, y0), (x1, y1) = corners.min(axis=0), corners.max(axis=0)
        weights = overlap(RectangularAperture(((x0 + x1) / 2, (y0 + y1) / 2), x1 - x0, y1 - y0), scan.pixels.shape[1:])
        expected = (scan.pixels[0] * weights).sum() / weights.sum()
        assert ghost.details[name] == pytest.approx(expected, rel=1e-4)  # photutils samples rectangles 32 x 32 a pixel
        assert (x1 - x0) * (y1 - y0) == pytest.approx(1000, rel=1e-9)


def test_the_highest_and_lowest_discs(scan, figures):
    piu = figures["uniformity_piu"]
    for name in ("highest", "lowest"):
        disc = region(piu, name)
        weights = overlap(CircularAperture(disc.points[0], disc.radius_mm), scan.pixels.shape[1:])
        mean = (scan.pixels[0] * weights).sum() / weights.sum()
        assert np.pi * disc.radius_mm**2 == pytest.approx(100)
        assert piu.details[name] == pytest.approx(mean, rel=1e-3)
        centre = region(piu, "M")
        assert np.hypot(*np.subtract(disc.points[0], centre.points[0])) + disc.radius_mm <= centre.radius_mm + 1e-9
    high, low = piu.details["highest"], piu.details["lowest"]
    assert piu.details["uncorrected"] == pytest.approx(100 * (1 - (high - low) / (high + low)))


def test_the_low_pass_filter_and_the_average_deviation(scan, figures):
    naad = figures["uniformity_naad"]
    kernel = np.array([[1, 2, 1], [2, 4, 2], [1, 2, 1]]) / 16
    smooth = ndimage.convolve(scan.pixels[0].astype(float), kernel)
    circle = region(naad, "M")
    inside = overlap(CircularAperture(circle.points[0], circle.radius_mm), smooth.shape) > 0.5
    mean = smooth[inside].mean()
    expected = 100 * (1 - np.abs(smooth[inside] - mean).mean() / mean)
    assert naad.details["uncorrected"] == pytest.approx(expected, abs=2e-3)


def test_the_outline_against_a_contour_at_half_height():
    """A contour at one level all round is what half height comes to where shading is taken out and noise is low."""
    still = simulate(default_setup(PHANTOM, snr=2000.0, shading_percent=5.0, shading_curvature=0.0, channels=1, seed=3))
    section = locate(still, PHANTOM).sections[0]
    image = still.pixels[0].astype(float)
    inside = disc_overlap(still.planes[0], section.centre_mm, 80.0) > 0.5
    rows, columns = np.nonzero(inside)
    design = np.stack([np.ones(rows.size), columns, rows], axis=1)
    slope = np.linalg.lstsq(design, image[rows, columns], rcond=None)[0]
    grid_rows, grid_columns = np.mgrid[: image.shape[0], : image.shape[1]]
    level = image / (slope[0] + slope[1] * grid_columns + slope[2] * grid_rows)
    contour = max(find_contours(level, 0.5), key=len)
    circle = CircleModel.from_estimate(contour)
    assert section.centre_mm == pytest.approx(circle.center[::-1], abs=0.02)
    assert section.radius_mm == pytest.approx(circle.radius, abs=0.03)
