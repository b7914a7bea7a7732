"""A cylinder's length from a localiser along its axis, against digital phantoms of known truth."""

import pytest

from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom
from qa.records import NotLocated
from qa.simulate import default_setup, simulate, true_values

VIEW = {"repeats": 1, "tilt_x_deg": 90.0, "stack_centre_patient": (0.0, 0.0, 0.0), "spacing_mm": 10.0, "slices": 1}


def localiser(name, **changes):
    phantom = load_phantom(name)
    setup = default_setup(phantom, **(VIEW | changes))
    scan = simulate(setup)
    pose = locate(scan, phantom)
    found, missed = measure(scan, pose, phantom)
    figures = {m.quantity: m for m in found}
    return pose, figures, {m.quantity: m.reason for m in missed}, true_values(setup)


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("sectioned-190", {}),
        ("sectioned-190", {"scale_y_percent": 1.5, "snr": 40.0, "channels": 8}),
        ("sectioned-190", {"centre_patient": (8.0, -6.0, 12.0), "pixel_mm": (1.25, 1.5), "matrix": (230, 190)}),
        ("sectioned-190", {"slices": 3, "rotation_deg": 25.0}),
        ("cylinder-200", {"matrix": (360, 300), "shading_percent": 30.0}),
        ("cylinder-200", {"matrix": (360, 300), "tilt_x_deg": 88.5}),
        ("lattice-200", {}),
    ],
)
def test_length_end_to_end(name, changes):
    pose, found, _, truth = localiser(name, **changes)
    assert not isinstance(pose, NotLocated)
    length = found["length_axial"]
    assert length.value == pytest.approx(truth["length_axial"].value, abs=0.15)
    assert length.value == pytest.approx(truth["length_axial"].value, abs=4 * length.standard_uncertainty)
    assert length.standard_uncertainty < 0.1
    (start, end) = length.regions[0].points
    assert ((end[0] - start[0]) ** 2 + (end[1] - start[1]) ** 2) ** 0.5 == pytest.approx(length.value, abs=1e-9)


def test_nothing_else_is_read_from_slices_along_the_axis():
    pose, found, missed, _ = localiser("sectioned-190")
    assert set(found) <= {"length_axial", "setup_offset", "centre_frequency"}
    for name in ("slice_thickness", "slice_position", "lattice_rms"):
        assert missed[name] == "the slices lie along the phantom's axis, not across it"
    assert any("only its length" in remark for remark in pose.remarks)


def test_slices_across_say_where_the_length_shows():
    phantom = load_phantom("cylinder-200")
    scan = simulate(default_setup(phantom, repeats=1))
    _, missed = measure(scan, locate(scan, phantom), phantom)
    assert "localiser" in next(m.reason for m in missed if m.quantity == "length_axial")


@pytest.mark.parametrize("other", ["cylinder-200", "sphere-170"])
def test_another_body_is_not_taken_for_it(other):
    scan = simulate(default_setup(load_phantom(other), **(VIEW | {"matrix": (360, 300)})))
    assert isinstance(locate(scan, load_phantom("sectioned-190")), NotLocated)


def test_an_end_outside_the_image_is_said():
    from dataclasses import replace

    phantom = load_phantom("sectioned-190")
    scan = simulate(default_setup(phantom, **VIEW))
    first = scan.first
    cut = replace(
        scan, repeats=(replace(first, pixels=first.pixels[:, 75:], planes=(replace(first.planes[0], shape=(181, 256)),)),)
    )
    assert isinstance(locate(cut, phantom), NotLocated)
