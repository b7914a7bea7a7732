"""Noise of magnitude images against published constants and scipy's distributions."""

import math

import numpy as np
import pytest
from scipy import stats

from qa.measure.noise import Chi, correlation


def test_one_channel_is_rayleigh():
    """0.6551 and 1.2533: Gudbjartsson and Patz 1995; 1.913 is their ratio."""
    assert Chi(1).sd == pytest.approx(0.6551, abs=5e-5)
    assert Chi(1).mean == pytest.approx(1.2533, abs=5e-5)
    assert Chi(1).ratio == pytest.approx(1.913, abs=5e-4)
    assert Chi(1).sd == pytest.approx(math.sqrt(2 - math.pi / 2))
    assert Chi(1).sd == pytest.approx(stats.rayleigh.std())


@pytest.mark.parametrize("channels", [1, 2, 3, 4, 8, 16, 32, 64])
def test_more_channels_are_chi(channels):
    reference = stats.chi(2 * channels)
    assert Chi(channels).mean == pytest.approx(reference.mean(), rel=1e-9)
    assert Chi(channels).sd == pytest.approx(reference.std(), rel=1e-7)
    assert Chi(channels).kurtosis == pytest.approx(3 + reference.stats(moments="k"), rel=1e-4)


def test_many_channels_come_near_0_707():
    assert Chi(64).sd == pytest.approx(math.sqrt(0.5), rel=2e-3)


@pytest.mark.parametrize("channels", [1, 1.5, 2, 4, 16, 32])
def test_channels_from_the_ratio(channels):
    assert Chi.with_ratio(Chi(channels).ratio).channels == pytest.approx(channels, rel=1e-6)
    assert Chi.with_ratio(1.0).channels == pytest.approx(1)


@pytest.mark.parametrize("channels", [1, 4])
def test_scatter_of_a_standard_deviation(channels):
    """var(sd) / sd^2 = (kurtosis - 1) / (4 n): the delta method, against sampling from scipy's distribution."""
    drawn = stats.chi(2 * channels).rvs((2000, 500), random_state=np.random.default_rng(5)).std(axis=1)
    assert drawn.std() / drawn.mean() == pytest.approx(math.sqrt((Chi(channels).kurtosis - 1) / 2000), rel=0.05)


def test_independent_pixels_of_zero_filled_noise():
    """Half of k-space along each axis leaves one independent value in four pixels."""
    rng = np.random.default_rng(2)
    means, variances, factors = [], [], []
    for _ in range(60):
        spectrum = np.fft.fft2(rng.standard_normal((128, 128)))
        keep = np.abs(np.fft.fftfreq(128)) < 0.25
        noise = np.fft.ifft2(spectrum * keep[:, None] * keep[None, :]).real[:100, :100]
        noise /= 0.5
        found = correlation(noise - noise.mean(), np.ones_like(noise))
        means.append(noise.mean())
        variances.append(noise.var())
        factors.append((found.mean_factor, found.variance_factor))
    mean_factor, variance_factor = np.mean(factors, axis=0)
    assert variance_factor == pytest.approx(4, rel=0.15)
    assert np.std(variances) == pytest.approx(math.sqrt(2 * variance_factor / 1e4), rel=0.25)
    assert np.std(means) == pytest.approx(math.sqrt(mean_factor / 1e4), rel=0.35)


def test_white_noise_is_independent():
    noise = np.random.default_rng(1).standard_normal((120, 120))
    found = correlation(noise, np.ones_like(noise))
    assert found.mean_factor == pytest.approx(1, abs=0.15)
    assert found.variance_factor == pytest.approx(1, abs=0.02)
