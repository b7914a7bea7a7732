"""From cross-sections to the body in space."""

import numpy as np
import pytest

from qa.locate import locate
from qa.phantoms import load_phantom
from qa.records import NotLocated
from qa.simulate import default_setup, simulate


def sphere_stack(scene, scan, middle, spacing=10.0):
    images = []
    for k in range(11):
        square = 85**2 - (k * spacing - middle) ** 2
        images.append(scene((200, 200)).disc(3.1, -2.2, np.sqrt(max(square, 1))).image(80, seed=k))
    return scan(images, spacing=spacing)


@pytest.mark.parametrize("middle", [50.0, 43.7, 61.3])
def test_a_sphere_in_three_dimensions(scene, scan, middle):
    pose = locate(sphere_stack(scene, scan, middle), load_phantom("sphere-170"))
    assert pose.centre_patient == pytest.approx([3.1, -2.2, middle], abs=0.05)
    assert 0 < pose.u_centre_mm[2] < 0.05
    assert pose.remarks == ()


def test_one_slice_of_a_sphere_does_not_show_where_its_centre_lies_along_the_normal(scene, scan):
    pose = locate(scan([scene((200, 200)).disc(0, 0, 85).image(80)]), load_phantom("sphere-170"))
    assert pose.u_centre_mm[2] is None
    assert pose.centre_patient[2] == pytest.approx(0)
    assert "along the normal" in pose.remarks[0]


def test_slices_that_do_not_shrink_are_no_sphere(scene, scan):
    stack = scan([scene((200, 200)).disc(0, 0, 85).image(80, seed=k) for k in range(11)], spacing=10.0)
    answer = locate(stack, load_phantom("sphere-170"))
    assert isinstance(answer, NotLocated)
    assert "do not shrink" in answer.reason
    pose = locate(stack, load_phantom("sphere-any"))
    assert pose.u_centre_mm[2] is None
    assert pose.centre_patient[2] == pytest.approx(50)
    assert "cylinder" in pose.remarks[0]


@pytest.mark.parametrize("plane", [((1.0, 0, 0), (0, 1.0, 0)), ((0, 1.0, 0), (0, 0, -1.0)), ((1.0, 0, 0), (0, 0, -1.0))])
def test_a_sphere_in_any_orientation(plane):
    setup = default_setup(
        load_phantom("sphere-170"),
        slices=7,
        spacing_mm=15.0,
        row_direction=plane[0],
        column_direction=plane[1],
        centre_patient=(4.0, -7.0, 6.0),
    )
    pose = locate(simulate(setup), setup.phantom)
    assert pose.centre_patient == pytest.approx([4, -7, 6], abs=0.05)


def test_the_axis_of_a_cylinder():
    setup = default_setup(
        load_phantom("cylinder-200"),
        slices=5,
        spacing_mm=20.0,
        tilt_x_deg=1.5,
        tilt_y_deg=-0.8,
        centre_patient=(5.0, -3.0, 0.0),
    )
    pose = locate(simulate(setup), setup.phantom)
    assert pose.tilt_deg == pytest.approx(np.hypot(1.5, 0.8), abs=0.02)
    assert abs(pose.tilt_deg - np.hypot(1.5, 0.8)) < 3 * pose.u_tilt_deg + 0.003
    assert pose.orientation[:, 2] @ setup.orientation[:, 2] == pytest.approx(1, abs=1e-6)
    assert pose.centre_patient == pytest.approx([5, -3, 0], abs=0.03)
    assert pose.u_centre_mm[2] is None


def test_the_ends_of_a_short_cylinder_show_its_middle():
    setup = default_setup(load_phantom("lattice-200"), slices=11, spacing_mm=10.0, matrix=(160, 160), pixel_mm=(1.6, 1.6))
    pose = locate(simulate(setup.but(centre_patient=(0.0, 0.0, 12.0))), setup.phantom)
    assert pose.centre_patient[2] == pytest.approx(12, abs=2 * 10 / np.sqrt(6))
    assert np.linalg.det(pose.orientation) == pytest.approx(1)
