"""Noise of magnitude images: the model's images and its moments against Rayleigh, Rician and chi.

Sources: Gudbjartsson and Patz 1995 (Rician; Rayleigh standard deviation 0.6551 sigma, mean 1.2533 sigma, their ratio 1.913);
Constantinides, Atalar and McVeigh 1997 (root sum of squares: noncentral chi with 2 n degrees of freedom); `scipy.stats`.
"""

import math

import numpy as np
import pytest
from scipy import stats

from qa.phantoms import load_phantom
from qa.simulate import Scan, default_setup
from qa.simulate.moments import magnitude_mean, magnitude_variance, root_mean, unsigned_mean


def _air(channels, **changes):
    """Magnitudes of signal-free air, in units of sigma: the scanner's own noise, combined as it combines channels."""
    setup = default_setup(load_phantom("sphere-170"), channels=channels, snr=50.0, seed=11, **changes)
    machine = Scan(setup)
    noise = machine.noise(0, 0)
    return np.sqrt(np.sum(np.abs(noise) ** 2, axis=0)).ravel() / machine.sigma


def test_air_of_one_channel_is_rayleigh():
    air = _air(1)
    assert air.mean() == pytest.approx(1.2533, abs=0.005)
    assert air.std() == pytest.approx(0.6551, abs=0.004)
    assert air.mean() / air.std() == pytest.approx(1.913, abs=0.012)
    assert stats.kstest(air, stats.rayleigh.cdf).pvalue > 0.01


@pytest.mark.parametrize("channels", [2, 4, 16])
def test_air_of_many_channels_is_chi_with_two_degrees_of_freedom_each(channels):
    air = _air(channels)
    law = stats.chi(2 * channels)
    assert air.mean() == pytest.approx(law.mean(), rel=0.004)
    assert air.std() == pytest.approx(law.std(), rel=0.01)
    assert stats.kstest(air, law.cdf).pvalue > 0.01


@pytest.mark.parametrize("snr", [1.0, 3.0, 10.0])
def test_a_weak_signal_in_one_channel_is_rician(snr):
    setup = default_setup(load_phantom("cylinder-200"), snr=snr, shading_percent=0.0, seed=4, level=2000.0)
    machine = Scan(setup)
    seen = np.abs(machine.clean(0)[0] + machine.noise(0, 0)[0])
    x, y = setup.planes[0].grid_mm()
    inside = np.hypot(x - setup.planes[0].middle_mm[0], y - setup.planes[0].middle_mm[1]) < 75
    law = stats.rice(snr)
    assert seen[inside].mean() / machine.sigma == pytest.approx(law.mean(), rel=0.01)
    assert seen[inside].std() / machine.sigma == pytest.approx(law.std(), rel=0.025)


@pytest.mark.parametrize("amplitude", [0.0, 0.5, 2.0, 8.0, 20.0])
def test_moments_of_one_channel_are_those_of_scipy_s_rice(amplitude):
    law = stats.rice(amplitude)
    assert magnitude_mean(amplitude, 1.0, 1) == pytest.approx(law.mean(), rel=1e-9)
    assert magnitude_variance(amplitude, 1.0, 1) == pytest.approx(law.var(), rel=1e-7)


@pytest.mark.parametrize("channels", [2, 4, 16])
@pytest.mark.parametrize("amplitude", [0.0, 1.5, 6.0, 24.0])
def test_moments_of_many_channels_are_those_of_the_noncentral_chi(channels, amplitude):
    from scipy.integrate import quad

    square = stats.ncx2(2 * channels, amplitude**2) if amplitude else stats.chi2(2 * channels)
    low, high = (math.sqrt(square.ppf(q)) for q in (1e-13, 1 - 1e-13))
    mean = quad(lambda m: m * square.pdf(m * m) * 2 * m, low, high, epsabs=1e-12, limit=200)[0]
    assert magnitude_mean(amplitude, 1.0, channels) == pytest.approx(mean, rel=1e-8)
    assert magnitude_variance(amplitude, 1.0, channels) == pytest.approx(square.mean() - mean**2, rel=1e-5)


@pytest.mark.parametrize("channels", [1, 4, 16])
def test_the_series_for_strong_signals_joins_the_closed_form(channels):
    from scipy.special import hyp1f1

    front = math.sqrt(2) * math.exp(math.lgamma(channels + 0.5) - math.lgamma(channels))
    join = 12 + 4 * math.sqrt(channels)
    for amplitude in (join + 0.01, join + 5, join + 15):
        exact = front * hyp1f1(-0.5, channels, -(amplitude**2) / 2)
        assert magnitude_mean(amplitude, 1.0, channels) == pytest.approx(exact, rel=1e-10)
        variance = amplitude**2 + 2 * channels - exact**2
        assert magnitude_variance(amplitude, 1.0, channels) == pytest.approx(variance, rel=1e-6)


@pytest.mark.parametrize("channels", [1, 4, 16])
def test_strong_signals_have_the_noise_of_one_part_and_a_mean_raised_by_half_the_others(channels):
    assert magnitude_mean(500.0, 1.0, channels) - 500 == pytest.approx((2 * channels - 1) / 1000, rel=1e-4)
    assert magnitude_variance(500.0, 1.0, channels) == pytest.approx(1 - (channels - 0.5) / 500**2, abs=1e-8)


def test_air_of_correlated_channels():
    """Equal eigenvalues give the chi distribution back; others agree with the scanner's own noise."""
    assert root_mean(np.ones(4)) == pytest.approx(stats.chi(8).mean(), rel=1e-7)
    assert root_mean([1.0]) == pytest.approx(math.sqrt(math.pi / 2), rel=1e-7)
    correlation = 0.6 ** np.abs(np.subtract.outer(np.arange(4), np.arange(4)))
    air = _air(4, noise_correlation=tuple(map(tuple, correlation.tolist())))
    assert air.mean() == pytest.approx(root_mean(np.linalg.eigvalsh(correlation)), rel=0.005)


@pytest.mark.parametrize(("mean", "sd"), [(0.0, 1.0), (0.7, 1.0), (-3.0, 0.5)])
def test_the_mean_of_an_unsigned_normal_is_scipy_s_folded_normal(mean, sd):
    assert unsigned_mean(mean, sd) == pytest.approx(stats.foldnorm(abs(mean) / sd, scale=sd).mean(), rel=1e-9)
