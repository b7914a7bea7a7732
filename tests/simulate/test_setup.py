import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.errors import SettingError
from qa.phantoms import load_phantom
from qa.simulate import PLANES, default_setup


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"repetition_ms": -500.0}, "repetition_ms is -500: it must be above 0."),
        ({"echo_ms": 600.0}, "echo_ms is 600: it must be below repetition_ms, 500."),
        ({"channels": 0}, "channels is 0: it must be a whole number, at least 1."),
        ({"slices": 2.5}, "slices is 2.5: it must be a whole number, at least 1."),
        ({"pixel_mm": (0.0, 1.0)}, "pixel_mm is (0.0, 1.0): both spacings must lie from 0.05 to 20 mm."),
        ({"matrix": (8, 256)}, "matrix is (8, 256): rows and columns must be whole numbers from 16 to 2048."),
        ({"snr": 0.0}, "snr is 0: it must be above 0."),
        ({"snr": math.nan}, "snr is nan: it must be above 0."),
        ({"thickness_mm": math.inf}, "thickness_mm is inf: it must be finite."),
        ({"centre_patient": (0.0, math.nan, 0.0)}, "centre_patient is (0.0, nan, 0.0): it must be finite."),
        ({"shading_percent": 80.0}, "shading_percent is 80: it must lie from 0 to 60."),
        ({"ghost_shift": 0.7}, "ghost_shift is 0.7: it must lie from 0 to 0.5."),
        ({"partial_fourier": 0.4}, "partial_fourier is 0.4: it must lie from 0.5 to 1."),
        ({"phase_encode": "left"}, "phase_encode is 'left': it must be one of row, column."),
        ({"spacing_mm": 0.0}, "spacing_mm is 0: it must be above 0."),
        ({"channel_gains": (1.0, 1.0)}, "channel_gains must hold 1 values, none negative and not all zero."),
        ({"noise_correlation": 1.0}, "noise_correlation is 1: it must lie from 0 to below 1."),
        ({"row_direction": (1.0, 1.0, 0.0)}, "row_direction and column_direction must be unit vectors at right angles"),
        ({"profile_edge_mm": 2.0}, "profile_edge_mm is 2: it must be at most a quarter of thickness_mm, 5"),
        ({"diameter_mm": 150.0}, "diameter_mm may not be set: sphere-170 is 170 mm wide."),
        ({"matrix": (150, 256)}, "matrix and pixel_mm give a field of view of 150 mm along rows"),
        ({"centre_patient": (60.0, 0.0, 0.0)}, "does not fit it where centre_patient puts it."),
        ({"gravity": 9.81}, "unexpected keyword argument 'gravity'"),
    ],
)
def test_an_impossible_setting_is_refused_in_a_sentence_that_names_it(make, changes, says):
    kind = TypeError if "gravity" in changes else SettingError
    with pytest.raises(kind) as caught:
        make(**changes)
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_sphere_of_open_diameter_needs_one():
    phantom = load_phantom("sphere-any")
    with pytest.raises(SettingError, match="diameter_mm is missing"):
        default_setup(phantom).but(diameter_mm=None)
    assert default_setup(phantom, diameter_mm=160.0).body_diameter_mm == 160.0


def test_changing_an_unknown_setting_names_it(make):
    with pytest.raises(SettingError, match="no setting 'gravity'"):
        make().but(gravity=9.81)


def test_a_noise_correlation_matrix_must_be_one(make):
    with pytest.raises(SettingError, match="symmetric"):
        make(channels=2, noise_correlation=((1.0, 0.5), (0.2, 1.0)))
    with pytest.raises(SettingError, match="positive definite"):
        make(channels=2, noise_correlation=((1.0, 1.5), (1.5, 1.0)))


@pytest.mark.parametrize("plane", list(PLANES))
def test_set_up_square_the_phantom_turns_with_the_slices(make, plane):
    row, column = PLANES[plane]
    setup = make("sectioned-190", row_direction=row, column_direction=column, stack_centre_patient=(0.0, 0.0, 0.0))
    np.testing.assert_allclose(setup.orientation, setup.axes, atol=1e-15)
    if plane == "axial":
        np.testing.assert_allclose(setup.orientation, np.eye(3), atol=1e-15)


def test_rotation_turns_x_towards_y_and_tilt_leaves_the_normal(make):
    turned = make(rotation_deg=30.0).orientation
    np.testing.assert_allclose(turned[:, 0], [math.cos(math.pi / 6), 0.5, 0.0], atol=1e-15)
    tilted = make("cylinder-200", tilt_x_deg=2.0, tilt_y_deg=-1.5)
    assert math.degrees(math.acos(tilted.axis[2])) == pytest.approx(math.hypot(2.0, 1.5), rel=1e-3)


@settings(max_examples=50, deadline=None)
@given(st.floats(-10, 10), st.floats(-5, 5), st.floats(-5, 5))
def test_the_orientation_is_a_proper_rotation(rotation, tilt_x, tilt_y):
    setup = default_setup(load_phantom("cylinder-200"), rotation_deg=rotation, tilt_x_deg=tilt_x, tilt_y_deg=tilt_y)
    np.testing.assert_allclose(setup.orientation.T @ setup.orientation, np.eye(3), atol=1e-12)
    assert np.linalg.det(setup.orientation) == pytest.approx(1.0)


def test_the_sectioned_phantom_gets_the_slices_its_definition_asks_for(make):
    setup = make("sectioned-190")
    heights = [plane.position_along_normal for plane in setup.planes]
    np.testing.assert_allclose(heights, np.arange(-50, 51, 10))
    assert setup.planes[0].to_patient(*setup.planes[0].middle_mm) == pytest.approx([0, 0, -50])
