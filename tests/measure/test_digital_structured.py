"""The structured digital phantoms of known truth beside the project, made independently: they settle signs and directions."""

import json
from pathlib import Path

import numpy as np
import pytest

from qa.dicom import read
from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom

FOLDER = Path(__file__).parents[2] / ".." / "shared" / "data" / "digital"
pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason="the digital phantoms of known truth are not here")
LATTICES = ("lattice-square", "lattice-bent")
SECTIONED = ("sectioned-square", "sectioned-channels", "sectioned-low-turned", "sectioned-thin-high")


@pytest.fixture(scope="module")
def figures():
    made = {}

    def make(case):
        if case not in made:
            truth = json.loads((FOLDER / case / "truth.json").read_text())
            phantom = load_phantom(truth["phantom"])
            (acquisition,) = read(FOLDER / case).acquisitions
            pose = locate(acquisition, phantom)
            measured, missed = measure(acquisition, pose, phantom)
            made[case] = truth, acquisition, pose, {m.quantity: m for m in measured}, {m.quantity: m.reason for m in missed}
        return made[case]

    return make


@pytest.mark.parametrize("case", LATTICES + SECTIONED)
def test_what_must_and_must_not_be_measured(figures, case):
    truth, _, _, found, missed = figures(case)
    assert set(truth["must_be_measured"]) <= set(found)
    assert not set(truth["must_not_be_measured"]) & set(found)
    assert set(truth["must_not_be_measured"]) <= set(missed)


@pytest.mark.parametrize("case", SECTIONED)
def test_pose(figures, case):
    truth, _, pose, _, _ = figures(case)
    assert pose.rotation_deg == pytest.approx(truth["pose"]["rotation"], abs=0.02)
    assert pose.centre_patient[:2] == pytest.approx(truth["pose"]["centre"][:2], abs=0.02)
    assert pose.centre_patient[2] == pytest.approx(truth["pose"]["centre"][2], abs=0.2)


@pytest.mark.parametrize("case", SECTIONED)
def test_thickness_and_positions(figures, case):
    truth, _, _, found, _ = figures(case)
    if "slice_thickness" in found:
        thickness = found["slice_thickness"]
        assert thickness.value == pytest.approx(truth["true"]["slice_thickness"]["value"], abs=0.05)
        assert thickness.value == pytest.approx(
            truth["true"]["slice_thickness"]["value"], abs=3 * thickness.standard_uncertainty
        )
    for name, number in (("slice_position", 1), ("slice_position_end", 11)):
        assert found[name].slice == number
        true = truth["true"]["slice_position"]["by_slice"][str(number)]
        assert found[name].value == pytest.approx(true, abs=0.05)
        assert found[name].details["on_axis_mm"] == pytest.approx(true, abs=0.05)


def test_bars_that_run_into_the_blocks_end(figures):
    _, _, _, found, missed = figures("sectioned-low-turned")
    assert "slice_thickness" not in found
    assert "runs into the block's end" in missed["slice_thickness"]


@pytest.mark.parametrize("case", LATTICES)
def test_every_rod_and_what_follows(figures, case):
    truth, acquisition, _, found, _ = figures(case)
    told = truth["true"]["rods"]
    true = {tuple(index): place for index, place in zip(told["index"], told["place_mm_in_image"], strict=True)}
    middle = np.array(acquisition.planes[0].middle_mm)
    rms = found["lattice_rms"]
    seen = {(r["i"], r["j"]): region.points[0] for r, region in zip(rms.details["rods"], rms.regions, strict=True)}
    assert set(seen) == set(true)
    errors = np.array([np.subtract(seen[k], middle) - true[k] for k in true])
    assert np.abs(errors.mean(axis=0)).max() < 0.005
    assert np.percentile(np.abs(errors), 95) < 0.03
    for name in ("lattice_rms", "lattice_max", "distortion_max", "scale_x", "scale_y"):
        assert found[name].value == pytest.approx(truth["true"][name]["value"], abs=0.03)


@pytest.mark.parametrize("case", ["sectioned-square", "sectioned-channels"])
def test_lattice_of_the_sectioned_phantom(figures, case):
    _, _, _, found, _ = figures(case)
    assert found["lattice_rms"].slice == 5
    assert len(found["lattice_rms"].details["rods"]) == 81
    for name in ("lattice_rms", "lattice_max"):
        assert found[name].value < 0.03
        assert found[name].details["as_read_mm"] < 0.05
