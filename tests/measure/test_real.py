"""Real scans of real phantoms: no ground truth, only physics to agree with."""

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from qa.dicom import read
from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom
from qa.records import NotLocated

FOLDER = Path(__file__).parents[2] / ".." / "shared" / "data" / "real"
pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason="the real scans are not here")
MOSAICS = ("sphere-epi-mosaic-ap", "sphere-epi-mosaic-pa", "sphere-epi-mosaic-lr", "sphere-epi-mosaic-rl")


@cache
def outcomes(name):
    """(acquisition, pose, figures, reasons) of each acquisition in a folder."""
    phantom, done = load_phantom("sphere-any"), []
    for acquisition in read(FOLDER / name).acquisitions:
        pose = locate(acquisition, phantom)
        found, missed = measure(acquisition, pose, phantom)
        done.append((acquisition, pose, {m.quantity: m for m in found}, {m.quantity: m.reason for m in missed}))
    return done


@pytest.mark.parametrize("name", MOSAICS)
def test_both_ways_to_snr_agree_or_say_why_not(name):
    _, _, found, reasons = outcomes(name)[0]
    assert found["snr"].value == pytest.approx(199, rel=0.05)
    if "snr_background" in found:
        assert found["snr_background"].value == pytest.approx(found["snr"].value, rel=0.15)
    else:
        assert "the same in both repeats" in reasons["snr_background"]


def test_along_rows_both_ways_apply():
    assert all("snr_background" in outcomes(f"sphere-epi-mosaic-{way}")[0][2] for way in ("lr", "rl"))


@pytest.mark.parametrize("name", MOSAICS)
def test_the_ghost_follows_the_phase_encode_direction(name):
    acquisition, _, found, _ = outcomes(name)[0]
    assert found["ghosting"].details["ghost_direction"] == acquisition.settings.phase_encode
    assert found["ghosting"].details["along_phase_encode"] is True


def test_parallel_imaging_and_a_narrow_margin_are_said():
    _, _, found, reasons = outcomes("sphere-epi-sagittal-enhanced")[0]
    assert "parallel imaging" in reasons["snr_background"]
    assert "below 10 mm" in reasons["ghosting"]
    assert "snr" in found


def test_the_diameter_agrees_between_slices_through_the_centre():
    """63 sagittal slices: r^2 + z^2 is the same throughout; within 15 mm of the centre to a tenth of a pixel."""
    acquisition, pose, _, _ = outcomes("sphere-epi-sagittal-enhanced")[0]
    height = [-acquisition.planes[s.slice_index].from_patient(pose.centre_patient)[2] for s in pose.sections]
    diameter = [2 * np.hypot(s.radius_mm, z) for s, z in zip(pose.sections, height, strict=True)]
    assert len(diameter) == 63
    assert np.ptp(diameter) < 1.0
    near = [d for d, z in zip(diameter, height, strict=True) if abs(z) < 15]
    assert np.ptp(near) < 0.1 * acquisition.settings.pixel_mm[0]
    assert pose.u_centre_mm[2] < 0.05


def test_classic_and_enhanced_show_the_same_sphere():
    _, enhanced, first, _ = outcomes("sphere-epi-sagittal-enhanced")[0]
    _, classic, second, _ = outcomes("sphere-epi-sagittal-classic-1")[0]
    assert classic.centre_patient == pytest.approx(enhanced.centre_patient, abs=0.02)
    assert second["length_45"].value == pytest.approx(first["length_45"].value, abs=0.05)
    assert second["uniformity_piu"].value == pytest.approx(first["uniformity_piu"].value, abs=0.5)


@pytest.mark.parametrize("name", ["sphere-gre-two-echo-repeat-1", "sphere-gre-two-echo-repeat-2"])
def test_a_body_whose_sections_do_not_shrink_is_remarked_on(name):
    """Called a sphere where it comes from; 36 slices over 126 mm have radii within a millimetre of each other."""
    for _, pose, found, reasons in outcomes(name):
        assert "cylinder" in pose.remarks[0]
        assert pose.u_centre_mm[2] is None
        assert reasons["snr"].startswith("needs two repeats")
        radii = [s.radius_mm for s in pose.sections]
        assert np.ptp(radii) < 1.2
        assert found["length_0"].value == pytest.approx(2 * np.median(radii), abs=1.5)


@pytest.mark.parametrize("name", ["sphere-gre-phase-difference-1", "sphere-gre-phase-difference-2"])
def test_phase_images_are_told_apart(name):
    for _, pose, found, _ in outcomes(name):
        assert isinstance(pose, NotLocated)
        assert "phase images" in pose.reason
        assert set(found) == {"centre_frequency"}


@pytest.mark.parametrize(("name", "word"), [("bottle-epi", "more than one object"), ("sectioned-body-epi", "out of round")])
def test_what_no_definition_describes_is_refused(name, word):
    for _, pose, found, _ in outcomes(name):
        assert isinstance(pose, NotLocated)
        assert word in pose.reason
        assert set(found) == {"centre_frequency"}
