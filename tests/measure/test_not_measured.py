"""What cannot be measured is reported with its reason: never a guess, never a silent zero."""

import numpy as np
import pytest

SIGNAL = ("snr", "snr_background", "uniformity_piu", "uniformity_naad", "ghosting")
LENGTHS = ("length_0", "length_45", "length_90", "length_135", "distortion_max", "scale_x", "scale_y")


def test_one_repeat_has_no_difference(scan, work, altered):
    alone = work(altered(scan(), repeats=1))
    assert alone.reason("snr") == "needs two repeats; this acquisition has one"
    assert set(alone.found) >= {"snr_background", "uniformity_piu", "uniformity_naad", "ghosting", *LENGTHS}


def test_identical_repeats_have_no_noise(scan, work, altered):
    twice = altered(scan(), repeats=1)
    twice = type(twice)(twice.repeats * 2)
    assert "identical" in work(twice).reason("snr")


def test_repeats_that_differ_by_more_than_noise_and_drift(scan, work, altered):
    first, second = scan(snr=300.0).repeats
    waves = 1 + 0.02 * np.sin(np.arange(second.pixels.shape[2]) / 6)
    other = altered(scan(snr=300.0), pixels=lambda p: p * waves).repeats[1]
    assert "more than noise and a slow drift" in work(type(scan())((first, other))).reason("snr")


def test_phase_images_carry_no_signal(scan, work, altered):
    phase = work(altered(scan(), kind="phase"))
    for name in (*SIGNAL, *LENGTHS):
        assert "phase images" in phase.reason(name)
    assert "centre_frequency" in phase.found


def test_signal_is_not_measured_on_phase_even_where_a_pose_is_given(scan, work, altered):
    from qa.measure import measure

    magnitude = work(scan())
    found, missed = measure(altered(scan(), kind="phase"), magnitude.pose, magnitude.phantom)
    assert not {m.quantity for m in found} & {*SIGNAL, *LENGTHS}
    assert all("magnitude images only" in m.reason for m in missed if m.quantity in SIGNAL)


@pytest.mark.parametrize(("setting", "word"), [("parallel_imaging", "parallel imaging"), ("filtered", "filtered")])
def test_air_that_does_not_stand_for_the_noise_of_m(scan, work, altered, setting, word):
    assert word in work(altered(scan(), settings={setting: True})).reason("snr_background")


def masked(stack):
    """Set all below a tenth of the signal to zero, as some scanners do."""
    return np.where(stack > 0.1 * stack.max(), stack, 0)


def test_air_masked_to_zero(scan, work, altered):
    done = work(altered(scan(), pixels=masked))
    assert done.reason("snr_background") == "air is masked to zero"
    assert done.reason("ghosting") == "air is masked to zero"
    assert set(done.found) >= {"snr", "uniformity_piu", *LENGTHS}


def test_air_stored_in_coarse_steps(scan, work, altered):
    done = work(altered(scan(snr=200.0), pixels=lambda p: np.rint(p / 80)))
    assert "coarse" in done.reason("snr_background")


def test_air_filtered_after_the_magnitude_was_taken(scan, work, altered):
    """A light filter leaves a ratio that no number of channels has; a strong one looks like more channels."""
    from scipy.ndimage import convolve1d

    done = work(altered(scan(snr=60.0, channels=1), repeats=1, pixels=lambda p: convolve1d(p, [0.1, 0.8, 0.1], axis=2)))
    assert "not noise" in done.reason("snr_background")


def test_air_with_a_gradient_of_brightness_is_no_noise(scan, work, altered):
    """One channel, offset lowered: a ratio below that of noise."""
    done = work(altered(scan(channels=1), pixels=lambda p: np.maximum(p - 30, 0)))
    assert "1.91" in done.reason("snr_background") or "masked" in done.reason("snr_background")


def test_what_repeats_in_air_is_no_noise(scan, work, altered):
    rows = np.arange(256)
    stripes = 150 * (1 + np.sin(rows / 3))[:, None] * np.ones(256)
    done = work(altered(scan(channels=4, snr=150.0), pixels=lambda p: np.hypot(p, stripes)))
    assert "the same in both repeats" in done.reason("snr_background")


def test_a_margin_below_10_mm(scan, work):
    done = work(scan(matrix=(192, 256), pixel_mm=(1.0, 1.0), centre_patient=(0.0, 3.0, 0.0)))
    assert "margin bottom of the phantom is 8.0 mm, below 10 mm" in done.reason("ghosting")


def test_phantoms_without_a_uniform_slice(scan, work):
    done = work(scan("lattice-200", repeats=1), "lattice-200")
    for name in SIGNAL:
        assert "no slice shows nothing but fill" in done.reason(name)
    assert set(done.found) >= {"length_0", "length_45", "length_90", "length_135"}


def test_a_sphere_has_no_axis_and_one_slice_shows_none(scan, work):
    assert work(scan()).reason("setup_tilt") == "a sphere has no axis"
    assert "one slice" in work(scan("cylinder-200"), "cylinder-200").reason("setup_tilt")


def test_a_diameter_that_a_bubble_shortens_is_not_measured(scan, work, altered):
    def bubble(stack):
        stack[:, :62, :] = 30
        return stack

    done = work(altered(scan(centre_patient=(0.0, 20.0, 0.0)), pixels=bubble))
    assert done.value("length_0") == pytest.approx(170, abs=0.1)
    assert done.value("length_45") == pytest.approx(170, abs=0.1)
    done = work(altered(scan(centre_patient=(0.0, 10.0, 0.0)), pixels=bubble))
    assert "not clear" in done.reason("length_90")
    assert "90 degrees" in done.reason("scale_y")
    assert "not all four" in done.reason("distortion_max")
    assert done.value("length_0") == pytest.approx(170, abs=0.1)
