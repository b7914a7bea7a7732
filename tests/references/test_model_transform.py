"""The scanner model's Fourier encoding against closed forms.

Sources: the disc's transform is R J1(2 pi R k) / k, and those of x-weighted discs follow by differentiation (Bracewell, The
Fourier Transform and Its Applications, chapter on two dimensions; Abramowitz and Stegun 9.1.30 for the derivative of J1);
the rectangle's is a product of sinc functions; Parseval's theorem. Bessel functions by `scipy.special`.
"""

import math

import numpy as np
import pytest
from scipy.special import j1, jv

from qa.phantoms import load_phantom
from qa.simulate import Scan, default_setup
from qa.simulate.coils import _coefficients
from qa.simulate.encode import object_kspace
from qa.simulate.fine import FineGrid
from qa.simulate.objects import density


def _frequencies(setup):
    (wide, high), (rows, columns) = setup.planes[0].size_mm, setup.matrix
    return np.fft.fftfreq(columns, 1 / columns)[None, :] / wide, np.fft.fftfreq(rows, 1 / rows)[:, None] / high


def _disc(radius, k):
    t = 2 * math.pi * radius * np.maximum(k, 1e-12)
    return math.pi * radius**2 * 2 * j1(t) / t


def _phase(setup, x, y):
    kx, ky = _frequencies(setup)
    return np.exp(-2j * math.pi * (kx * x + ky * y))


def _kspace(setup, slice_index=0):
    plane = setup.planes[slice_index]
    grid = FineGrid.of(plane)
    wide, high = plane.size_mm
    return object_kspace(density(setup, plane, grid), grid, setup.matrix) * wide * high


SCANS = [
    pytest.param({}, id="square"),
    pytest.param(
        {"pixel_mm": (1.5, 1.25), "matrix": (180, 210), "centre_patient": (7.3, -11.2, 0.0)}, id="off centre, unequal pixels"
    ),
    pytest.param({"pixel_mm": (0.7, 0.8), "matrix": (361, 343), "centre_patient": (3.1, 4.7, 0.0)}, id="odd matrix"),
]


@pytest.mark.parametrize("changes", SCANS)
def test_a_disc_has_the_transform_of_bessel_j1(changes):
    setup = default_setup(load_phantom("cylinder-200"), **changes)
    plane = setup.planes[0]
    x, y, _ = plane.from_patient(np.asarray(setup.centre_patient))
    exact = _disc(100.0, np.hypot(*_frequencies(setup))) * _phase(setup, x, y)
    found = _kspace(setup)
    assert np.abs(found - exact).max() < 1e-6 * exact.real.max()
    # and in the image: a few millionths of the fill
    wide, high = plane.size_mm
    error = np.fft.ifft2(found - exact) * found.size / (wide * high)
    assert np.abs(error).max() < 3e-5


def test_a_scaled_disc_has_the_transform_of_an_ellipse():
    setup = default_setup(load_phantom("cylinder-200"), scale_x_percent=2.0, scale_y_percent=-1.5)
    kx, ky = _frequencies(setup)
    a, b = 102.0, 98.5
    exact = a * b / 100**2 * _disc(100.0, np.hypot(kx * a / 100, ky * b / 100))
    exact = exact * _phase(setup, *setup.planes[0].middle_mm)
    assert np.abs(_kspace(setup) - exact).max() < 1e-5 * exact.real.max()


def test_a_slice_through_a_sphere_is_the_average_of_discs():
    setup = default_setup(load_phantom("sphere-170"), centre_patient=(2.0, -3.0, 55.0), thickness_mm=8.0)
    x, y, _ = setup.planes[0].from_patient(np.asarray(setup.centre_patient))
    heights, weights = np.polynomial.legendre.leggauss(400)
    k = np.hypot(*_frequencies(setup))
    exact = sum(w / 2 * _disc(math.sqrt(85**2 - (4 * u - 55) ** 2), k) for u, w in zip(heights, weights, strict=True))
    exact = exact * _phase(setup, x, y)
    assert np.abs(_kspace(setup) - exact).max() < 1e-5 * exact.real.max()


def test_linear_shading_gives_the_derivative_of_the_disc_s_transform():
    setup = default_setup(
        load_phantom("cylinder-200"),
        shading_percent=30.0,
        shading_curvature=0.0,
        shading_direction_deg=40.0,
        centre_patient=(6.2, -3.3, 0.0),
        snr=math.inf,
    )
    plane = setup.planes[0]
    x, y, _ = plane.from_patient(np.asarray(setup.centre_patient))
    turn = math.radians(40.0)
    slope = _coefficients(0.30, 0.0)[0] / 100
    assert slope * 100 == pytest.approx(0.15 / 0.85)
    kx, ky = _frequencies(setup)
    k = np.maximum(np.hypot(kx, ky), 1e-12)
    t = 2 * math.pi * 100 * k
    # d/dk of R J1(2 pi R k) / k = -2 pi R^2 J2 / k, by d/dt (J1 / t) = -J2 / t
    moment = 1j / (2 * math.pi) * (-2 * math.pi * 100**2 * jv(2, t) / k) * (kx * math.cos(turn) + ky * math.sin(turn)) / k
    away = (x - plane.middle_mm[0]) * math.cos(turn) + (y - plane.middle_mm[1]) * math.sin(turn)
    exact = (_disc(100.0, k) * (1 + slope * away) + slope * moment) * _phase(setup, x, y)
    wide, high = plane.size_mm
    exact = np.fft.ifft2(exact) * exact.size / (wide * high)
    found = Scan(setup).clean(0)[0]
    scale = setup.level / (1 + slope * away)  # the region's mean is the sensitivity at its centre
    assert np.sqrt(np.mean(np.abs(found - scale * exact) ** 2)) < 2e-5 * setup.level
    assert np.abs(found - scale * exact).max() < 5e-4 * setup.level


def test_bars_have_the_transform_of_sinc_functions():
    """The wedge bars at their own height are one rectangle, 16 by 30 mm, cut from a disc of fill."""
    phantom = load_phantom("sectioned-190")
    one = phantom.model_copy(update={"sections": tuple(s for s in phantom.sections if s.kind == "wedge-bars" and s.z_mm < 0)})
    none = phantom.model_copy(update={"sections": ()})
    thin = {"thickness_mm": 0.01, "slices": 11, "spacing_mm": 10.0, "matrix": (256, 256)}
    with_bars, without = default_setup(one, **thin), default_setup(none, **thin)
    missing = _kspace(without) - _kspace(with_bars)
    kx, ky = _frequencies(with_bars)
    x, y = with_bars.planes[0].middle_mm
    exact = 16 * np.sinc(16 * kx) * 30 * np.sinc(30 * ky) * _phase(with_bars, x, y - 80)
    # what the bars take beyond the round body's edge is missing from the missing: 16^3 / (24 R) = 1.8 mm2
    assert missing[0, 0].real == pytest.approx(16 * 30 - 16**3 / (24 * 95), abs=0.1)
    assert np.abs(missing - exact).max() < 2.2


@pytest.mark.parametrize("changes", SCANS)
def test_energy_is_kept_between_image_and_kspace(changes):
    """Parseval: the image's energy is that of the acquired part of the transform's closed form."""
    setup = default_setup(load_phantom("cylinder-200"), shading_percent=0.0, snr=math.inf, **changes)
    wide, high = setup.planes[0].size_mm
    exact = _disc(100.0, np.hypot(*_frequencies(setup))) / (wide * high)
    image = np.abs(Scan(setup).clean(0)[0]) / setup.level
    assert np.mean(image**2) == pytest.approx(np.sum(exact**2), rel=1e-5)
    area = math.pi * 100**2 / (wide * high)
    assert 0.98 * area < np.mean(image**2) < area


def test_edges_ring_as_a_truncated_transform_does():
    """Gibbs: the overshoot beside a straight edge is 8.95 % of the step (integral of the sine, Si(pi) / pi - 1 / 2)."""
    setup = default_setup(
        load_phantom("cylinder-200"), shading_percent=0.0, snr=math.inf, matrix=(600, 600), pixel_mm=(0.5, 0.5)
    )
    kspace = np.fft.fft2(Scan(setup).clean(0)[0])
    # look between the pixels along the middle row: evaluate the image's Fourier sum at a tenth of a pixel
    columns = np.fft.fftfreq(600, 1 / 600)
    line = kspace @ np.exp(2j * math.pi * np.outer(columns, np.arange(90, 130, 0.1)) / 600) / 600
    middle = np.fft.ifft(line, axis=0)[300].real / setup.level
    assert middle.max() == pytest.approx(1.0895, abs=0.006)
