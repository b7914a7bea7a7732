"""Figures belong to the phantom and the scanner, not to how the image is stored."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.geometry import Plane

SIGNAL = ("snr", "snr_background", "uniformity_piu", "uniformity_naad", "ghosting")
AXIS = {"row": "column", "column": "row", None: None}


def base(scan):
    return scan(
        snr=90.0,
        shading_percent=20.0,
        ghost_percent=1.5,
        channels=2,
        centre_patient=(3.3, -5.2, 0.0),
        matrix=(216, 252),
        pixel_mm=(1.15, 0.98),
        scale_x_percent=0.6,
        seed=21,
    )


def mirrored(series, *, across):
    """Reverse the order of columns (across) or rows."""
    axis = 2 if across else 1
    plane = series.planes[0]
    step = (plane.shape[1] - 1) * plane.pixel_mm[1] if across else (plane.shape[0] - 1) * plane.pixel_mm[0]
    direction = np.array(plane.row_direction if across else plane.column_direction)
    turned = Plane(
        tuple(np.array(plane.position_patient) + step * direction),
        tuple(-direction) if across else plane.row_direction,
        plane.column_direction if across else tuple(-direction),
        plane.pixel_mm,
        plane.shape,
    )
    return replace(series, pixels=np.flip(series.pixels, axis).copy(), planes=(turned,))


def transposed(series):
    """Exchange rows and columns."""
    plane = series.planes[0]
    turned = Plane(
        plane.position_patient, plane.column_direction, plane.row_direction, plane.pixel_mm[::-1], plane.shape[::-1]
    )
    header = replace(
        series.settings,
        phase_encode=AXIS[series.settings.phase_encode],
        pixel_mm=turned.pixel_mm,
        matrix=series.settings.matrix[::-1],
    )
    return replace(series, pixels=series.pixels.transpose(0, 2, 1).copy(), planes=(turned,), settings=header)


def every(acquisition, change):
    return replace(acquisition, repeats=tuple(change(s) for s in acquisition.repeats))


def alike(first, second, names, relative):
    for name in names:
        one, other = first.found[name], second.found[name]
        assert other.value == pytest.approx(one.value, rel=relative, abs=1e-3), name
        assert other.standard_uncertainty == pytest.approx(one.standard_uncertainty, rel=0.03), name


@pytest.mark.parametrize("across", [True, False])
def test_mirror_images(scan, work, across):
    before, after = work(base(scan)), work(every(base(scan), lambda s: mirrored(s, across=across)))
    alike(before, after, SIGNAL, 2e-4)
    for name, other in {
        "length_0": "length_0",
        "length_90": "length_90",
        "length_45": "length_135",
        "length_135": "length_45",
    }.items():
        assert after.value(other) == pytest.approx(before.value(name), abs=3e-3)
    assert after.value("scale_x") == pytest.approx(before.value("scale_x"), abs=2e-3)
    assert after.pose.centre_patient == pytest.approx(before.pose.centre_patient, abs=3e-3)


def test_rows_and_columns_exchanged(scan, work):
    before, after = work(base(scan)), work(every(base(scan), transposed))
    alike(before, after, SIGNAL, 2e-4)
    for name, other in {
        "length_0": "length_90",
        "length_90": "length_0",
        "length_45": "length_45",
        "length_135": "length_135",
    }.items():
        assert after.value(other) == pytest.approx(before.value(name), abs=3e-3)
    assert after.value("scale_y") == pytest.approx(before.value("scale_x"), abs=2e-3)
    assert before.found["ghosting"].details["ghost_direction"] == "column"
    assert after.found["ghosting"].details["ghost_direction"] == "row"
    assert after.found["ghosting"].details["along_phase_encode"] is True
    assert after.pose.centre_patient == pytest.approx(before.pose.centre_patient, abs=3e-3)


@settings(max_examples=10, deadline=None)
@given(st.floats(0.01, 1000))
def test_brightness(scan, work, factor):
    before, after = (
        work(base(scan)),
        work(every(base(scan), lambda s: replace(s, pixels=(s.pixels * factor).astype(np.float32)))),
    )
    alike(
        before,
        after,
        (*SIGNAL, "length_0", "length_45", "length_90", "length_135", "scale_x", "scale_y", "setup_offset"),
        1e-4,
    )


@settings(max_examples=10, deadline=None)
@given(st.integers(-9, 9), st.integers(-9, 9))
def test_the_image_moved_by_whole_pixels_with_its_plane(scan, work, down, across):
    def moved(series):
        plane = series.planes[0]
        corner = np.array(plane.position_patient) - down * plane.pixel_mm[0] * plane.axes[:, 1]
        corner = corner - across * plane.pixel_mm[1] * plane.axes[:, 0]
        pixels = np.roll(series.pixels, (down, across), axis=(1, 2))
        return replace(series, pixels=pixels, planes=(replace(plane, position_patient=tuple(corner)),))

    before, after = work(base(scan)), work(every(base(scan), moved))
    alike(before, after, ("snr", "uniformity_piu", "uniformity_naad"), 2e-4)
    for name in ("length_0", "length_45", "length_90", "length_135"):
        assert after.value(name) == pytest.approx(before.value(name), abs=5e-3)
    assert after.pose.centre_patient == pytest.approx(before.pose.centre_patient, abs=4e-3)


def test_more_noise_less_snr_and_more_shading_less_uniformity(scan, work):
    ratios = [work(scan(snr=v)).value("snr") for v in (40.0, 80.0, 160.0, 320.0)]
    assert ratios == sorted(ratios)
    even = [work(scan(shading_percent=v)).value("uniformity_piu") for v in (5.0, 15.0, 30.0, 45.0)]
    assert even == sorted(even, reverse=True)
    ghosts = [work(scan(ghost_percent=v)).value("ghosting") for v in (0.0, 1.0, 2.0, 4.0)]
    assert ghosts == sorted(ghosts)
    scales = [work(scan(scale_x_percent=v)).value("scale_x") for v in (-1.5, -0.5, 0.5, 1.5)]
    assert scales == pytest.approx([-1.5, -0.5, 0.5, 1.5], abs=0.02)


def test_drift_between_repeats_is_no_noise(scan, work):
    still, drifting = work(scan(seed=5)), work(scan(seed=5, gain_drift_percent=2.0, gain_drift_slope_percent=1.0))
    assert drifting.value("snr") == pytest.approx(still.value("snr"), rel=0.02)
