import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.geometry import Plane, disc_overlap, find_rim, harmonics, robust_fit, sample

TURNS = np.linspace(0, 2 * np.pi, 192, endpoint=False)


@given(st.floats(-5, 5), st.floats(-5, 5), st.floats(-5, 5), st.floats(0, 18.9), st.floats(0, 28.9))
def test_sampling_a_plane_surface_is_exact(a, b, c, row, column):
    rows, columns = np.mgrid[:20, :30]
    images = np.stack([a + b * rows + c * columns, np.zeros((20, 30))])
    read = sample(images, np.array([[row], [row]]), np.array([[column], [column]]))
    assert read[:, 0] == pytest.approx([a + b * row + c * column, 0], abs=1e-9)


def test_sampling_reaches_the_last_pixel_and_not_beyond():
    images = np.arange(12.0).reshape(1, 3, 4)
    read = sample(images, np.array([[2.0, 2.0, -0.1, 2.1]]), np.array([[3.0, 3.1, 0.0, 0.0]]))
    assert read[0, 0] == 11
    assert np.isnan(read[0, 1:]).all()


def test_harmonics_of_an_ellipse_are_its_second():
    radius = 1 / np.sqrt((np.cos(TURNS) / 51) ** 2 + (np.sin(TURNS) / 49) ** 2)
    fitted, _ = robust_fit(harmonics(TURNS, 4), radius[None], 0.01)
    assert fitted[0, [0, 3]] == pytest.approx([50, 1], abs=0.03)
    assert fitted[0, [1, 2, 4, 5, 6, 8]] == pytest.approx(np.zeros(6), abs=1e-6)


@settings(max_examples=30)
@given(st.integers(0, 150), st.floats(2, 20), st.integers(0, 10_000))
def test_a_fifth_of_the_circle_pushed_in_does_not_draw_the_fit(start, depth, seed):
    rng = np.random.default_rng(seed)
    radius = 80 + 0.4 * np.cos(TURNS) - 0.2 * np.sin(TURNS) + rng.normal(0, 0.03, 192)
    radius[(np.arange(192) + start) % 192 < 38] -= depth
    fitted, weights = robust_fit(harmonics(TURNS, 1), radius[None], 0.05)
    assert fitted[0] == pytest.approx([80, 0.4, -0.2], abs=0.02)
    assert (weights > 0).sum() == pytest.approx(154, abs=3)


def test_values_that_are_missing_are_left_out_and_too_few_give_nothing():
    radius = np.full((2, 192), 40.0)
    radius[0, ::3] = np.nan
    radius[1, 2:] = np.nan
    fitted, _ = robust_fit(harmonics(TURNS, 1), radius, 0.05)
    assert fitted[0] == pytest.approx([40, 0, 0], abs=1e-9)
    assert np.isnan(fitted[1]).all()


@settings(max_examples=25, deadline=None)
@given(st.floats(44, 56), st.floats(44, 56), st.floats(25, 33), st.floats(0.8, 1.2), st.floats(0, 0.1))
def test_the_edge_of_a_disc_of_known_place(x, y, radius, dx, floor):
    plane = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, dx), (100, 125))
    image = np.hypot(disc_overlap(plane, (x, y), radius), floor)
    rim = find_rim(image[None], plane, np.array([[x, y]]), np.full((1, 192), radius + 0.7), TURNS, reach_px=8)
    assert np.nanmean(rim.radius_mm) == pytest.approx(radius, abs=0.05)
    assert np.nanmax(np.abs(rim.radius_mm - radius)) < 0.2
    assert np.sqrt(rim.plateau) == pytest.approx(np.hypot(1, floor), rel=0.02)
    assert np.sqrt(rim.floor) == pytest.approx(floor, abs=0.02)


def test_no_edge_no_radius():
    plane = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, 1.0), (100, 100))
    rim = find_rim(np.ones((1, 100, 100)), plane, np.array([[50.0, 50.0]]), np.full((1, 192), 30.0), TURNS, reach_px=8)
    assert np.isnan(rim.radius_mm).all()
