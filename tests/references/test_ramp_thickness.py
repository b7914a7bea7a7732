"""Slice thickness from crossed ramps and the image of a step, against published figures and closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, special, stats

from qa.locate.response import Response
from qa.measure.profiles import rise
from qa.measure.thickness import thickness_from_bars


def test_worked_example_of_accreditation_guidance():
    """Bars of 59.5 and 47.2 mm at slope 0.1: 5.26 mm (a worked example in published accreditation guidance, from memory)."""
    assert round(thickness_from_bars(59.5, 47.2, 0.1), 2) == 5.26


@given(thickness=st.floats(2, 8), slope=st.floats(0.05, 0.3), tilt_deg=st.floats(-2, 2))
def test_tilt_cancels_in_the_harmonic_mean(thickness, slope, tilt_deg):
    """Plane geometry: ramps seen at slope + tilt and slope - tilt give T cos^2 of the tilt, and no more."""
    c, s = math.cos(math.radians(tilt_deg)), math.sin(math.radians(tilt_deg))
    a = thickness * (c - slope * s) / (slope * c + s) if slope * c + s > 0.01 else None
    b = thickness * (c + slope * s) / (slope * c - s) if slope * c - s > 0.01 else None
    if a and b:
        assert thickness_from_bars(a, b, slope) == pytest.approx(thickness * (c * c - slope**2 * s * s), rel=1e-12)
        assert thickness_from_bars(a, b, slope) == pytest.approx(thickness, rel=1.4e-3)


@pytest.mark.parametrize(("spacing", "box"), [(1.0, 0.1), (1.3, 0.7), (0.8, 1.6)])
def test_step_response_is_the_averaged_sine_integral(spacing, box):
    """1/2 + Si(pi x) / pi for a band-limited step (scipy.special.sici), averaged over a box by quadrature."""
    response = Response(spacing, box)
    for x in (-4.1, -0.9, -0.2, 0.0, 0.4, 1.7, 6.3):
        low, high = x - box / 2, x + box / 2
        wanted, _ = integrate.quad(lambda t: 0.5 + special.sici(np.pi * t / spacing)[0] / np.pi, low, high)
        assert response.step(np.array([x]))[0] == pytest.approx(wanted / box, abs=1e-4)


def test_step_response_is_what_a_cut_off_k_space_gives():
    """The same step through numpy's FFT: half a line, its spectrum cut at the Nyquist frequency of the pixel."""
    fine, coarse = 2**16, 2**9
    line = np.zeros(fine)
    line[fine // 4 : 3 * fine // 4] = 1.0
    line[fine // 4] = line[3 * fine // 4] = 0.5
    spectrum = np.fft.fft(line)
    cut = np.zeros(coarse, dtype=complex)
    half = coarse // 2
    cut[:half], cut[-half + 1 :] = spectrum[:half], spectrum[-half + 1 :]
    image = np.real(np.fft.ifft(cut)) * coarse / fine
    near = np.arange(-12, 13)
    expected = Response(1.0, 0.1).step(near.astype(float))
    assert image[coarse // 4 + near] == pytest.approx(expected, abs=4e-3)


def test_rise_is_a_box_through_a_normal_distribution():
    """Scipy: the distribution function of a uniform plus a normal variable, by quadrature."""
    place = np.linspace(-3, 3, 25)
    for box, soft in ((1.0, 0.2), (0.6, 0.9), (4.0, 0.3)):
        normal = stats.norm(scale=soft)
        wanted = [integrate.quad(lambda t, x=x, n=normal: n.cdf(x - t), -box / 2, box / 2)[0] / box for x in place]
        assert rise(place, box, soft).value == pytest.approx(wanted, abs=1e-8)


@given(place=st.floats(-3, 3), box=st.floats(0.3, 5), soft=st.floats(0.1, 1.5))
def test_slopes_of_rise(place, box, soft):
    step = 1e-5
    at = np.array([place])
    edge = rise(at, box, soft)
    by_place = (rise(at + step, box, soft).value - rise(at - step, box, soft).value) / (2 * step)
    by_soft = (rise(at, box, soft + step).value - rise(at, box, soft - step).value) / (2 * step)
    assert edge.by_place == pytest.approx(by_place, abs=1e-5)
    by_box = (rise(at, box + step, soft).value - rise(at, box - step, soft).value) / (2 * step)
    assert edge.by_soft == pytest.approx(by_soft, abs=1e-5)
    assert edge.by_box == pytest.approx(by_box, abs=1e-5)
    assert edge.value + rise(-at, box, soft).value == pytest.approx(1.0, abs=1e-12)
