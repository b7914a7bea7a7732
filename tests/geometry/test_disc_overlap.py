import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.geometry import Plane, disc_overlap


def grid(shape=(40, 50), pixel_mm=(1.0, 1.0)):
    return Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), pixel_mm, shape)


@given(st.floats(15, 30), st.floats(12, 18), st.floats(0.1, 11), st.floats(0.5, 1.0), st.floats(0.5, 1.0))
def test_shares_add_up_to_the_area_of_the_disc(x, y, radius, dy, dx):
    plane = grid((60, 90), (dy, dx))
    share = disc_overlap(plane, (x, y), radius)
    assert share.sum() * dx * dy == pytest.approx(math.pi * radius**2, rel=1e-9)
    assert share.min() >= 0
    assert share.max() <= 1


def test_a_pixel_in_the_middle_is_whole_and_one_beyond_is_empty():
    share = disc_overlap(grid(), (20.0, 20.0), 5.0)
    assert share[20, 20] == 1
    assert share[20, 26] == 0
    assert share[0, 0] == 0


def test_half_a_disc_beyond_the_image_counts_half():
    plane = grid()
    assert disc_overlap(plane, (-0.5, 20.0), 6.0).sum() == pytest.approx(math.pi * 36 / 2)
    assert not disc_overlap(plane, (-30.0, 20.0), 6.0).any()


@given(st.floats(10, 30), st.floats(10, 30), st.floats(1, 9))
def test_mirror_image_and_transpose_are_covered_alike(x, y, radius):
    plane = grid((41, 41))
    share = disc_overlap(plane, (x, y), radius)
    assert disc_overlap(plane, (40 - x, y), radius)[:, ::-1] == pytest.approx(share, abs=1e-9)
    assert pytest.approx(share, abs=1e-9) == disc_overlap(plane, (y, x), radius).T


def test_a_disc_smaller_than_a_pixel():
    share = disc_overlap(grid(), (20.2, 19.9), 0.25)
    assert share[20, 20] == pytest.approx(math.pi * 0.0625)
    assert np.count_nonzero(share) == 1
