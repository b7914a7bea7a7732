import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.phantoms import load_phantom
from qa.simulate import default_setup
from qa.simulate.warp import image_place, jacobian, object_place

BENT = {
    "scale_x_percent": 1.5,
    "scale_y_percent": -0.8,
    "nonlinearity_x_mm": 2.0,
    "nonlinearity_y_mm": -1.2,
    "off_resonance_hz": 60.0,
}


@settings(max_examples=40, deadline=None)
@given(st.floats(10, 240), st.floats(10, 240))
def test_image_place_undoes_object_place(x, y):
    setup = default_setup(load_phantom("sphere-170"), **BENT)
    plane = setup.planes[0]
    assert image_place(setup, plane, *object_place(setup, plane, x, y)) == pytest.approx((x, y), abs=1e-8)


def test_the_jacobian_is_the_derivative(make):
    setup = make(**BENT)
    plane = setup.planes[0]
    x, y, h = np.array([40.0, 130.0, 211.0]), np.array([70.0, 20.0, 180.0]), 1e-4
    found = jacobian(setup, plane, x, y)
    for axis, (dx, dy) in enumerate(((h, 0), (0, h))):
        ahead, behind = object_place(setup, plane, x + dx, y + dy), object_place(setup, plane, x - dx, y - dy)
        np.testing.assert_allclose(found[:, axis], (np.stack(ahead) - np.stack(behind)) / (2 * h), atol=1e-6)


def test_scale_and_bend_act_about_the_isocentre(make):
    setup = make(scale_x_percent=2.0, nonlinearity_y_mm=1.0)
    plane = setup.planes[0]
    middle = np.asarray(plane.middle_mm)
    assert image_place(setup, plane, *middle) == pytest.approx(middle)
    x, y = image_place(setup, plane, middle[0] + 50, middle[1])
    assert x == pytest.approx(middle[0] + 51)
    _, y = object_place(setup, plane, middle[0], middle[1] + 100)
    assert y == pytest.approx(middle[1] + 99)


def test_off_resonance_shifts_along_the_readout(make):
    along_row = make(off_resonance_hz=300.0, pixel_mm=(1.2, 1.1))
    assert along_row.off_resonance_shift_mm == pytest.approx((2.2, 0.0))
    assert along_row.but(phase_encode="row").off_resonance_shift_mm == pytest.approx((0.0, 2.4))
