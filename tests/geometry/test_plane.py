import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.geometry import Plane

angle = st.floats(-math.pi, math.pi)
place = st.floats(-300, 300)


def turned(a, b, c):
    about_x = np.array([[1, 0, 0], [0, math.cos(a), -math.sin(a)], [0, math.sin(a), math.cos(a)]])
    about_y = np.array([[math.cos(b), 0, math.sin(b)], [0, 1, 0], [-math.sin(b), 0, math.cos(b)]])
    about_z = np.array([[math.cos(c), -math.sin(c), 0], [math.sin(c), math.cos(c), 0], [0, 0, 1]])
    axes = about_z @ about_y @ about_x
    return Plane((-30.0, 40.0, 5.0), tuple(axes[:, 0]), tuple(axes[:, 1]), (0.8, 1.1), (120, 100))


@given(angle, angle, angle, st.tuples(place, place, place))
def test_there_and_back(a, b, c, local):
    plane = turned(a, b, c)
    assert plane.from_patient(plane.to_patient(*local)) == pytest.approx(local, abs=1e-9)


@given(angle, angle, angle)
def test_the_normal_is_row_cross_column_and_of_unit_length(a, b, c):
    plane = turned(a, b, c)
    assert plane.normal @ plane.normal == pytest.approx(1)
    assert plane.normal @ plane.axes[:, :2] == pytest.approx([0, 0], abs=1e-12)
    assert np.linalg.det(plane.axes) == pytest.approx(1)


def test_first_spacing_is_the_step_between_rows():
    plane = Plane((10.0, 20.0, 30.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (2.0, 3.0), (4, 5))
    x, y = plane.grid_mm()
    assert x.shape == (1, 5)
    assert y.shape == (4, 1)
    assert plane.to_patient(x[0, 1], y[1, 0]) == pytest.approx([13, 22, 30])
    assert plane.size_mm == (15, 8)
    assert plane.middle_mm == (6, 3)
    assert plane.position_along_normal == 30
