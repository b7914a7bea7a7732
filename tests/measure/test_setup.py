import math

import pytest


@pytest.mark.parametrize(("x", "y"), [(0.0, 0.0), (3.0, -4.0), (-12.0, 5.0)])
def test_offset_from_the_middle_of_the_image(scan, work, x, y):
    offset = work(scan(centre_patient=(x, y, 0.0))).found["setup_offset"]
    assert offset.value == pytest.approx(math.hypot(x, y), abs=0.02)
    assert offset.details["x_mm"] == pytest.approx(x, abs=0.02)
    assert offset.details["y_mm"] == pytest.approx(y, abs=0.02)
    assert offset.details["centre_patient_mm"] == pytest.approx([x, y, 0], abs=0.02)
    assert abs(offset.value - math.hypot(x, y)) < 3 * offset.standard_uncertainty


def test_tilt_of_a_cylinder(scan, work):
    tilted = scan("cylinder-200", slices=5, spacing_mm=20.0, tilt_x_deg=1.2, tilt_y_deg=-0.5, repeats=1)
    tilt = work(tilted, "cylinder-200").found["setup_tilt"]
    assert tilt.value == pytest.approx(math.hypot(1.2, 0.5), abs=0.02)
    assert 0 < tilt.standard_uncertainty < 0.02
