import math

import numpy as np
import pytest

from qa.simulate import Scan, simulate
from qa.simulate.coils import channel_share, noise_mixing, shading
from qa.simulate.encode import acquired_window, object_kspace
from qa.simulate.fine import FineGrid
from qa.simulate.objects import density


def _magnitude(setup, slice_index=0, repeat=0):
    return Scan(setup).magnitude(slice_index, repeat, noise=False)


def _centre(image, half=30):
    r, c = image.shape[0] // 2, image.shape[1] // 2
    return float(image[r - half : r + half, c - half : c + half].mean())


@pytest.mark.parametrize("channels", [1, 5])
def test_sensitivities_on_the_coarser_grid_give_the_image_of_a_much_finer_one(make, channels):
    setup = make("cylinder-200", channels=channels, shading_percent=40.0, matrix=(200, 220), pixel_mm=(1.5, 1.3))
    plane = setup.planes[0]
    machine = Scan(setup)
    q = 6
    x = ((np.arange(220 * q) + 0.5) / q - 0.5)[None, :] * 1.3
    y = ((np.arange(200 * q) + 0.5) / q - 0.5)[:, None] * 1.5
    grid = FineGrid(x, y, 1.5 / q)
    filled = density(setup, plane, grid) * shading(setup, plane, x, y)
    shares = channel_share(setup, plane, x, y)
    direct = np.stack([np.fft.ifft2(object_kspace(filled * share, grid, setup.matrix)) for share in shares])
    direct *= 200 * 220
    clean = machine.clean(0)
    scale = np.vdot(direct, clean).real / np.vdot(direct, direct).real
    difference = np.abs(clean - scale * direct) / setup.level
    assert np.sqrt(np.mean(difference**2)) < 3e-5
    px, py = plane.grid_mm()
    from_edge = np.abs(np.hypot(px - plane.middle_mm[0], py - plane.middle_mm[1]) - 100)
    assert difference[:, from_edge > 4].max() < 2e-4


def test_the_level_and_snr_are_those_of_the_measurement_region(make):
    setup = make(snr=80.0, level=5000.0, shading_percent=30.0, channels=4)
    image = _magnitude(setup)
    x, y = setup.planes[0].grid_mm()
    middle = setup.planes[0].middle_mm
    region = np.hypot(x - middle[0], y - middle[1]) < math.sqrt(0.75) * 85
    assert image[region].mean() == pytest.approx(5000, rel=1e-3)
    noise = Scan(setup).noise(0, 0)
    assert noise.real.std() == pytest.approx(5000 / 80, rel=0.01)
    assert noise.imag.std() == pytest.approx(5000 / 80, rel=0.01)


@pytest.mark.parametrize(("percent", "curvature"), [(5.0, 0.0), (40.0, 0.0), (25.0, 0.7), (40.0, -1.0)])
def test_shading_varies_by_what_is_asked_over_the_cross_section(make, percent, curvature):
    setup = make(shading_percent=percent, shading_curvature=curvature)
    plane = setup.planes[0]
    r, t = np.meshgrid(np.linspace(0, 85, 200), np.linspace(0, 2 * np.pi, 720))
    seen = shading(setup, plane, plane.middle_mm[0] + r * np.cos(t), plane.middle_mm[1] + r * np.sin(t))
    assert 100 * (1 - seen.min() / seen.max()) == pytest.approx(percent, rel=0.02)


def test_channels_in_health_combine_to_the_shading_and_a_dead_one_takes_its_share(make):
    setup = make(channels=6)
    plane = setup.planes[0]
    x, y = plane.grid_mm()
    share = channel_share(setup, plane, x, y)
    np.testing.assert_allclose(np.sum(np.abs(share) ** 2, axis=0), 1, atol=1e-12)
    dead = channel_share(setup.but(channel_gains=(0.0, 1, 1, 1, 1, 1)), plane, x, y)
    np.testing.assert_allclose(np.sum(np.abs(dead) ** 2, axis=0), 1 - np.abs(share[0]) ** 2, atol=1e-12)


def test_alternating_lines_make_a_ghost_half_a_field_of_view_away(make):
    setup = make(ghost_percent=4.0, shading_percent=0.0, apodisation="hann", snr=math.inf)
    ghosted = _magnitude(setup)
    plain = _magnitude(setup.but(ghost_percent=0.0))
    x, y = setup.planes[0].grid_mm()
    margin = (y < 25) & (np.abs(x - setup.planes[0].middle_mm[0]) < 30)
    assert ghosted[margin].mean() / _centre(plain) == pytest.approx(0.04, rel=0.01)
    sideways = _magnitude(setup.but(phase_encode="row"))
    np.testing.assert_allclose(sideways, ghosted.T, atol=2)


def test_a_ghost_at_another_shift_lies_on_both_sides(make):
    setup = make(ghost_percent=4.0, ghost_shift=0.25, shading_percent=0.0, apodisation="hann", matrix=(256, 256))
    difference = np.abs(Scan(setup).clean(0)[0] - Scan(setup.but(ghost_percent=0.0)).clean(0)[0])
    along = difference[:, 128] / setup.level
    # 170 mm wide ghosts 64 pixels to either side: alone at 192 and 64, both at 128, neither far from all
    assert along[[64, 192]] == pytest.approx([0.04, 0.04], rel=0.02)
    assert along[128] == pytest.approx(0.08, rel=0.02)


def test_gain_drifts_between_repeats_smoothly(make):
    setup = make(gain_drift_percent=2.0, gain_drift_slope_percent=1.0, repeats=2, apodisation="hann")
    ratio = _magnitude(setup, repeat=1) / _magnitude(setup, repeat=0)
    middle = setup.planes[0].middle_mm
    assert ratio[128, 128] == pytest.approx(1.02, abs=1e-4)
    column = 128 + 50
    expected = 1.02 * (1 + 0.01 * (column - middle[0]) / 100)
    assert ratio[128, column] == pytest.approx(expected, abs=1e-4)


def test_off_resonance_moves_the_image_along_the_readout(make):
    setup = make(off_resonance_hz=450.0, bandwidth_hz_per_pixel=150.0, shading_percent=0.0)
    np.testing.assert_allclose(_magnitude(setup)[:, 3:], _magnitude(setup.but(off_resonance_hz=0.0))[:, :-3], atol=2)


def test_a_scaled_gradient_scales_the_image_and_thins_its_signal(make):
    setup = make("cylinder-200", scale_x_percent=2.0, shading_percent=0.0, apodisation="hann")
    row = _magnitude(setup)[150]
    half = row[150] / 2
    at = np.flatnonzero(np.diff(np.signbit(row - half)))[[0, -1]]
    left, right = at + (half - row[at]) / (row[at + 1] - row[at])
    chord = 2 * math.sqrt(100**2 - 0.5**2) * 1.02
    assert right - left == pytest.approx(chord, abs=0.01)


@pytest.mark.parametrize("matrix", [(281, 343), (282, 346), (256, 300)])
def test_all_of_kspace_is_acquired_unless_asked_otherwise(make, matrix):
    down, across = acquired_window(make(matrix=matrix))
    assert down.min() == across.min() == 1


def test_partial_fourier_blurs_along_the_phase_encode_axis_alone(make):
    setup = make(partial_fourier=0.6, shading_percent=0.0)
    image = Scan(setup).clean(0)[0]
    kspace = np.fft.fft2(image)
    k = np.fft.fftfreq(256, 1 / 256)
    missing = k < 128 * (1 - 2 * 0.6)
    assert np.abs(kspace[missing]).max() < 1e-9 * np.abs(kspace).max()
    assert np.abs(kspace[~missing][:, missing]).max() > 1e-5 * np.abs(kspace).max()


def test_zero_filling_correlates_noise_and_keeps_its_level(make):
    setup = make(acquired_fraction=0.5, snr=50.0)
    noise = Scan(setup).noise(0, 0)[0].real
    assert noise.std() == pytest.approx(setup.level / 50, rel=0.02)
    # half of k-space along each axis: neighbours correlate as sinc(1 / 2) = 2 / pi
    assert np.mean(noise[:, 1:] * noise[:, :-1]) / noise.var() == pytest.approx(2 / math.pi, abs=0.02)


@pytest.mark.parametrize("correlation", [0.4, ((1.0, 0.3, -0.2), (0.3, 1.0, 0.5), (-0.2, 0.5, 1.0))])
def test_noise_is_correlated_between_channels_as_asked(make, correlation):
    setup = make(channels=3, noise_correlation=correlation)
    mixing = noise_mixing(setup)
    wanted = mixing @ mixing.T
    noise = Scan(setup).noise(0, 0).reshape(3, -1)
    found = (noise @ noise.conj().T).real / noise.shape[1] / (2 * (setup.level / setup.snr) ** 2)
    np.testing.assert_allclose(found, wanted, atol=0.02)
    np.testing.assert_allclose(np.diag(wanted), 1)


@pytest.mark.parametrize("channels", range(1, 33))
def test_the_geometric_correlation_is_a_correlation(make, channels):
    mixing = noise_mixing(make(channels=channels, noise_correlation=0.95))
    assert np.isfinite(mixing).all()
    assert (np.diag(mixing) > 0).all()


def test_pixels_are_whole_numbers_and_the_same_seed_gives_the_same(make):
    setup = make("sectioned-190", slices=2, seed=5, matrix=(200, 200), pixel_mm=(1.2, 1.2))
    one, two = simulate(setup), simulate(setup)
    for a, b in zip(one.repeats, two.repeats, strict=True):
        assert np.array_equal(a.pixels, b.pixels)
        assert a.series_instance_uid == b.series_instance_uid
    assert np.array_equal(one.pixels, np.rint(one.pixels))
    assert one.pixels.min() >= 0
    assert not one.pixels.flags.writeable
    assert not np.array_equal(one.repeats[0].pixels, one.repeats[1].pixels)
    other = simulate(setup.but(seed=6))
    assert not np.array_equal(one.pixels, other.pixels)
    assert one.first.series_instance_uid != other.first.series_instance_uid


def test_noise_does_not_depend_on_how_many_slices_there_are(make):
    few, many = make("cylinder-200", slices=1, seed=9), make("cylinder-200", slices=3, seed=9)
    assert np.array_equal(Scan(few).noise(0, 1), Scan(many).noise(0, 1))


def test_settings_travel_into_the_record(make):
    setup = make("cylinder-200", pixel_mm=(0.9, 1.1), matrix=(280, 240), phase_encode="row", field_strength_T=1.5)
    acquisition = simulate(setup)
    assert acquisition.settings.pixel_mm == (0.9, 1.1)
    assert acquisition.settings.matrix == (280, 240)
    assert acquisition.settings.phase_encode == "row"
    assert acquisition.settings.frequency_MHz == pytest.approx(63.866, abs=5e-4)
    assert acquisition.planes == setup.planes
    assert acquisition.pixels.shape == (1, 280, 240)
    assert len(acquisition.repeats) == 2
    assert acquisition.repeats[1].acquired_at > acquisition.repeats[0].acquired_at
