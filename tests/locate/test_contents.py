"""How a sectioned phantom lies, told from what is in it."""

from dataclasses import replace

import numpy as np
import pytest

from qa.locate import locate
from qa.measure.position import slice_position
from qa.phantoms import load_phantom
from qa.records import Acquisition, NotLocated
from qa.simulate import PLANES, default_setup, random_setup, simulate

SECTIONED = load_phantom("sectioned-190")
QUICK = {"repeats": 1, "matrix": (200, 200), "pixel_mm": (1.2, 1.2)}
BACK_TO_FRONT = {"row_direction": (-1.0, 0.0, 0.0), "column_direction": (0.0, 1.0, 0.0)}


def scan(**changes):
    return simulate(default_setup(SECTIONED, **(QUICK | changes)))


def cut(acquisition, which):
    """Keep some of the slices."""
    first = acquisition.first
    return Acquisition((replace(first, planes=tuple(first.planes[k] for k in which), pixels=first.pixels[which]),))


def mirrored(acquisition):
    """The same scan with columns counted from the other side: the normal turns round, and so does the order of slices."""
    first = acquisition.first
    planes = []
    for plane in reversed(first.planes):
        x = (plane.shape[1] - 1) * plane.pixel_mm[1]
        row = tuple(-v for v in plane.row_direction)
        planes.append(replace(plane, position_patient=tuple(plane.to_patient(x, 0.0).tolist()), row_direction=row))
    return Acquisition((replace(first, planes=tuple(planes), pixels=first.pixels[::-1, :, ::-1]),))


@pytest.fixture(scope="module")
def plain():
    return scan(rotation_deg=4.0, centre_patient=(6.0, -4.0, 1.2), tilt_x_deg=0.6, tilt_y_deg=-0.3, channels=2)


def off(pose, setup):
    """Error of turn and tilt (degrees) and of the centre (mm) in the phantom's frame."""
    apart = pose.orientation.T @ setup.orientation
    turn = np.degrees(np.arctan2(apart[1, 0] - apart[0, 1], apart[0, 0] + apart[1, 1]))
    tilt = np.degrees(np.arccos(min(1.0, apart[2, 2])))
    return turn, tilt, (np.asarray(setup.centre_patient) - pose.centre_patient) @ setup.orientation


@pytest.mark.parametrize("seed", range(6))
def test_pose_of_random_scans(seed):
    rng = np.random.default_rng([3, seed])
    setup = random_setup(rng, SECTIONED, repeats=1)
    pose = locate(simulate(setup), SECTIONED)
    turn, tilt, centre = off(pose, setup)
    assert abs(turn) < max(0.02, 3 * pose.u_rotation_deg)
    assert pose.u_rotation_deg < 0.05
    assert tilt < max(0.02, 4 * pose.u_tilt_deg)
    assert np.abs(centre[:2]).max() < 4 * max(pose.u_centre_mm[:2])
    assert abs(centre[2]) < 3 * pose.u_centre_mm[2]
    assert pose.u_centre_mm[2] < 0.3
    assert pose.rotation_deg == pytest.approx(setup.rotation_deg, abs=0.1)
    assert not any("stands in" in remark for remark in pose.remarks)


@pytest.mark.parametrize("plane", ["coronal", "sagittal"])
def test_other_planes_tell_the_pose_too(plane):
    row, column = PLANES[plane]
    setup = default_setup(SECTIONED, **QUICK, row_direction=row, column_direction=column, rotation_deg=-5.0)
    pose = locate(simulate(setup), SECTIONED)
    turn, _, centre = off(pose, setup)
    assert abs(turn) < 0.05
    assert abs(centre[2]) < 0.3


def test_order_of_slices_and_sense_of_axes_do_not_matter(plain):
    one, other = locate(plain, SECTIONED), locate(mirrored(plain), SECTIONED)
    assert other.centre_patient == pytest.approx(one.centre_patient, abs=2 * one.u_centre_mm[2])
    assert other.orientation == pytest.approx(one.orientation, abs=3 * np.radians(one.u_rotation_deg))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"rotation_deg": 180.0}, "turned by 180 degrees about the bore axis: set it up again"),
        ({"rotation_deg": -88.0}, "turned by 88 degrees about the bore axis: set it up again"),
        (BACK_TO_FRONT, "back to front: set it up again"),
        (BACK_TO_FRONT | {"rotation_deg": 180.0}, "back to front, and turned by 180 degrees about the bore axis"),
        ({"centre_patient": (0.0, 0.0, -12.0)}, "12 mm off the sections, too far towards the head"),
        ({"centre_patient": (0.0, 0.0, 25.0)}, "25 mm off the sections, too far towards the feet"),
        ({"snr": 4.0}, "noise hides them"),
    ],
)
def test_a_wrong_set_up_is_said_in_words_to_act_on(changes, words):
    pose = locate(scan(**changes), SECTIONED)
    assert isinstance(pose, NotLocated)
    assert words in pose.reason


def test_a_turn_that_does_no_harm_is_taken():
    pose = locate(scan(rotation_deg=15.0), SECTIONED)
    assert pose.rotation_deg == pytest.approx(15.0, abs=0.05)


@pytest.mark.parametrize(("gone", "said"), [(0, "missing: slice 1"), (10, "missing: slice 11"), (5, "missing: slice 6")])
def test_a_missing_slice_is_named_and_the_rest_located(plain, gone, said):
    pose = locate(cut(plain, [k for k in range(11) if k != gone]), SECTIONED)
    assert any(said in remark for remark in pose.remarks)
    whole = locate(plain, SECTIONED)
    assert pose.centre_patient == pytest.approx(whole.centre_patient, abs=0.2)


@pytest.mark.parametrize("which", [[0], [10], [0, 10], [9, 10], [4], [6, 7, 8, 9, 10]])
def test_a_few_slices_that_show_something_are_enough(plain, which):
    whole, few = locate(plain, SECTIONED), locate(cut(plain, which), SECTIONED)
    assert few.rotation_deg == pytest.approx(whole.rotation_deg, abs=0.2)
    if which == [4]:
        assert few.u_centre_mm[2] is None
        return
    assert (few.u_centre_mm[2] > 1) == (len(which) == 1)
    lowest = few.to_phantom(np.asarray(plain.planes[which[0]].to_patient(*few.section(0).centre_mm)))
    assert lowest[2] == pytest.approx(-50.0 + 10 * which[0] - 1.2, abs=2 * few.u_centre_mm[2])
    assert any("where 11 are expected" in remark for remark in few.remarks)


def test_slices_of_uniform_fill_alone_do_not_tell_the_pose(plain):
    pose = locate(cut(plain, [5, 6, 7]), SECTIONED)
    assert isinstance(pose, NotLocated)
    assert "none of the inserts" in pose.reason


def test_a_slice_that_does_not_show_its_section_is_named(plain):
    first = plain.first
    pixels = first.pixels.copy()
    pixels[4] = pixels[6]
    pose = locate(Acquisition((replace(first, pixels=pixels),)), SECTIONED)
    assert any("slice 5 does not show the lattice" in remark for remark in pose.remarks)


@pytest.mark.parametrize(("name", "diameter"), [("sphere-170", None), ("sphere-any", 195.0), ("cylinder-200", None)])
def test_a_uniform_phantom_is_not_taken_for_the_sectioned_one(name, diameter):
    setup = default_setup(
        load_phantom(name),
        diameter_mm=diameter,
        slices=11,
        thickness_mm=5.0,
        spacing_mm=10.0,
        **(QUICK | {"matrix": (210, 210)}),
    )
    pose = locate(simulate(setup), SECTIONED)
    assert isinstance(pose, NotLocated)
    assert "another phantom" in pose.reason or "none of the inserts" in pose.reason or "sphere" in pose.reason


def test_figures_that_suffer_from_the_set_up_are_named():
    tilted = scan(tilt_x_deg=1.5)
    pose = locate(tilted, SECTIONED)
    assert any("tilted by 1.5 degrees, which puts +1.7 mm into slice positions" in remark for remark in pose.remarks)
    for figure in slice_position(tilted, pose, SECTIONED):
        assert figure.value - figure.details["on_axis_mm"] == pytest.approx(1.7, abs=0.05)
    moved = locate(scan(centre_patient=(0.0, 0.0, -3.0)), SECTIONED)
    assert any("all slices lie 3.0 mm from the sections, towards the head" in remark for remark in moved.remarks)
    assert locate(scan(), SECTIONED).remarks == ()


@pytest.mark.parametrize("turn", [-30.0, 0.0, 8.0])
def test_a_lattice_of_rods_tells_its_turn(turn):
    rods = load_phantom("lattice-200")
    setup = default_setup(rods, repeats=1, rotation_deg=turn, centre_patient=(5.0, -3.0, 0.0))
    pose = locate(simulate(setup), rods)
    assert abs(pose.rotation_deg - turn) < 3 * pose.u_rotation_deg
    assert pose.u_rotation_deg < 0.02
