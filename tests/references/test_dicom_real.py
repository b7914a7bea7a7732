"""What the folders of real scans are known to hold, from the notes beside them and from one form of a scan against another."""

from pathlib import Path

import numpy as np
import pytest

from qa.dicom import read

REAL = Path(__file__).resolve().parents[2].parent / "shared" / "data" / "real"
pytestmark = pytest.mark.skipif(not REAL.is_dir(), reason="the real scans are not beside this checkout")


def acquisitions(*folders):
    reading = read([REAL / folder for folder in folders])
    assert reading.refused == ()
    return reading.acquisitions


def test_classic_series_and_enhanced_objects_hold_the_same_pixels():
    """Time points 2 and 3 of the scan were stored both ways."""
    (enhanced,) = acquisitions("sphere-epi-sagittal-enhanced")
    assert len(enhanced.repeats) == 5
    for point, folder in [(2, "sphere-epi-sagittal-classic-1"), (3, "sphere-epi-sagittal-classic-2")]:
        (classic,) = acquisitions(folder)
        frame = enhanced.repeats[point - 1]
        assert frame.temporal_position == point
        np.testing.assert_array_equal(classic.pixels, frame.pixels)
        assert classic.planes == frame.planes
        assert classic.settings == frame.settings
        assert classic.scanner == frame.scanner
        assert classic.first.kind == frame.kind == "magnitude"
        assert classic.first.acquired_at == frame.acquired_at


def test_read_together_the_two_forms_are_not_taken_for_repeats_of_each_other():
    both = acquisitions("sphere-epi-sagittal-classic-1", "sphere-epi-sagittal-classic-2", "sphere-epi-sagittal-enhanced")
    assert [len(each.repeats) for each in both] == [5, 2]
    assert "same pixels" in both[1].remarks[0]


def test_the_two_gradient_echo_scans_are_no_pair_because_the_receive_coil_differs():
    found = acquisitions("sphere-gre-two-echo-repeat-1", "sphere-gre-two-echo-repeat-2")
    assert [(len(each.repeats), each.settings.echo_ms, each.settings.receive_coil) for each in found] == [
        (1, 5.19, "BC"),
        (1, 7.65, "BC"),
        (1, 5.19, "HE3,4;NE1,2"),
        (1, 7.65, "HE3,4;NE1,2"),
    ]
    assert [each.pixels.shape for each in found] == [(36, 64, 64)] * 4
    assert [len(each.remarks) for each in found] == [0, 0, 1, 1]
    assert "all but the receive coil (HE3,4;NE1,2, there BC)" in found[2].remarks[0]


@pytest.mark.parametrize("folder", ["sphere-gre-phase-difference-1", "sphere-gre-phase-difference-2"])
def test_phase_differences_are_of_kind_phase(folder):
    (phase,) = acquisitions(folder)
    assert phase.first.kind == "phase"
    assert phase.pixels.shape == (36, 64, 64)
    # The scanner's scale: 4096 is pi, by slope 2 and intercept -4096.
    assert phase.pixels.min() >= -4096
    assert phase.pixels.max() <= 4094
    assert phase.pixels.min() < -4000


@pytest.mark.parametrize(("direction", "axis"), [("ap", "column"), ("pa", "column"), ("rl", "row"), ("lr", "row")])
def test_mosaics_tell_their_phase_encoding(direction, axis):
    (acquisition,) = acquisitions(f"sphere-epi-mosaic-{direction}")
    assert [each.temporal_position for each in acquisition.repeats] == [1, 2]
    assert acquisition.settings.phase_encode == axis
    assert acquisition.pixels.shape == (5, 72, 72)
    steps = np.diff([plane.position_along_normal for plane in acquisition.planes])
    np.testing.assert_allclose(steps, 12, atol=1e-9)
    # 72 columns of 3 mm about the isocentre, where the sphere lies.
    np.testing.assert_allclose(acquisition.planes[0].position_patient[:2], -108, atol=1e-9)


def test_the_four_mosaics_are_four_acquisitions():
    found = acquisitions(*(f"sphere-epi-mosaic-{direction}" for direction in ("ap", "pa", "rl", "lr")))
    assert [len(each.repeats) for each in found] == [2, 2, 2, 2]


def test_time_series_of_other_manufacturers():
    (bottle,) = acquisitions("bottle-epi")
    assert [each.temporal_position for each in bottle.repeats] == [1, 2, 3]
    assert bottle.pixels.shape == (9, 64, 64)
    np.testing.assert_allclose(np.diff([plane.position_along_normal for plane in bottle.planes]), 8, atol=1e-3)
    assert bottle.settings.frequency_MHz == pytest.approx(127.752559)
    (sectioned,) = acquisitions("sectioned-body-epi")
    assert len(sectioned.repeats) == 16
    assert sectioned.pixels.shape == (8, 64, 64)
    assert sectioned.first.kind == "magnitude"


def test_nothing_odd_is_said_of_whole_series():
    for folder in sorted(each for each in REAL.iterdir() if each.is_dir()):
        for acquisition in acquisitions(folder.name):
            assert acquisition.remarks == ()
            assert all(series.remarks == () for series in acquisition.repeats)
