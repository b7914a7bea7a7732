"""What ramps and wedges show in the model's images, against the arithmetic of published accreditation guidance (from memory).

A slot inclined by 1 in 10 shows a slice of 5 mm as a bar 50 mm long at half height, its feet spread by the slot's own
thickness over the slope; the wedge bars' difference is twice the slice's offset.
"""

import math

import numpy as np
import pytest

from qa.phantoms import load_phantom
from qa.simulate import Scan, default_setup

FINE = {"pixel_mm": (0.5, 0.5), "matrix": (420, 420), "shading_percent": 0.0, "snr": math.inf}


def _crossings(line, at, level):
    edges = np.flatnonzero(np.diff(np.signbit(line - level)))[[0, -1]]
    return at[edges] + (at[1] - at[0]) * (level - line[edges]) / (line[edges + 1] - line[edges])


@pytest.mark.parametrize("thickness_mm", [3.0, 5.0, 6.0])
@pytest.mark.parametrize("edge_mm", [0.0, 0.5])
def test_the_full_width_of_a_ramp_s_image_is_the_thickness_over_the_slope(thickness_mm, edge_mm):
    setup = default_setup(load_phantom("sectioned-190"), thickness_mm=thickness_mm, profile_edge_mm=edge_mm, **FINE)
    image = Scan(setup).magnitude(0, noise=False) / setup.level
    middle = setup.planes[0].middle_mm
    x = np.arange(420) * 0.5 - middle[0]
    inner = np.abs(x) < 52
    for centre_mm in (2.0, 8.0):
        row = round((middle[1] + centre_mm) / 0.5)
        line = image[row - 2 : row + 3].mean(axis=0)[inner]
        plateau = np.median(line[np.abs(x[inner]) < 5])
        assert plateau == pytest.approx(1.0 / thickness_mm, rel=0.05)
        left, right = _crossings(line, x[inner], plateau / 2)
        assert right - left == pytest.approx(10 * thickness_mm, abs=0.3)


@pytest.mark.parametrize("height_mm", [-2.0, 0.0, 3.0])
def test_the_wedge_bars_differ_by_twice_the_slice_s_height(height_mm):
    setup = default_setup(load_phantom("sectioned-190"), thickness_mm=0.5, centre_patient=(0.0, 0.0, -height_mm), **FINE)
    image = Scan(setup).magnitude(0, noise=False) / setup.level
    middle = setup.planes[0].middle_mm
    y = np.arange(420) * 0.5 - middle[1]
    inner = (y > -85) & (y < -50)
    ends = []
    for centre_mm in (-4.0, 4.0):
        column = round((middle[0] + centre_mm) / 0.5)
        line = image[:, column - 3 : column + 4].mean(axis=1)[inner]
        ends.append(_crossings(line, y[inner], 0.5)[0])
    assert ends[0] - ends[1] == pytest.approx(2 * height_mm, abs=0.1)
    assert np.mean(ends) == pytest.approx(-65, abs=0.1)
