"""Limits that noise sets, against scipy's distributions and a sum over single pixels."""

import math

import numpy as np
import pytest
from scipy.stats import ncx2, rice

from qa.commission.limits import _width_variance, fisher_information, least_deviation
from qa.phantoms import load_phantom
from qa.simulate import default_setup, true_values
from qa.simulate.encode import Scan


def information_by_difference(log_density, amplitude, values):
    """Mean squared derivative of the log density, by central differences."""
    step = 1e-4
    slope = (log_density(values, amplitude + step) - log_density(values, amplitude - step)) / (2 * step)
    density = np.exp(log_density(values, amplitude))
    return np.trapezoid(slope**2 * density, values)


@pytest.mark.parametrize("amplitude", [0.5, 1.0, 3.0, 10.0])
def test_one_channel_agrees_with_the_rice_distribution(amplitude):
    values = np.linspace(max(1e-3, amplitude - 8), amplitude + 8, 4001)
    expected = information_by_difference(rice.logpdf, amplitude, values)
    assert fisher_information(np.array([amplitude]), 1)[0] == pytest.approx(expected, rel=5e-3)


@pytest.mark.parametrize(("amplitude", "channels"), [(1.0, 4), (3.0, 4), (5.0, 16), (12.0, 16)])
def test_several_channels_agree_with_the_noncentral_chi_square(amplitude, channels):
    middle = math.sqrt(amplitude**2 + 2 * channels)
    values = np.linspace(max(1e-2, middle - 7), middle + 7, 4001)

    def log_density(m, a):
        return ncx2.logpdf(m**2, 2 * channels, a**2) + np.log(2 * m)

    expected = information_by_difference(log_density, amplitude, values)
    assert fisher_information(np.array([amplitude]), channels)[0] == pytest.approx(expected, rel=5e-3)


def test_information_goes_from_none_to_all():
    found = fisher_information(np.array([0.0, 200.0]), 8)
    assert found[0] == 0
    assert found[1] == pytest.approx(1, abs=1e-3)


def test_the_bound_of_a_width_is_that_of_single_pixels():
    plateau, width, ramp, step = 80.0, 50.0, 10.0, 0.01
    x = np.arange(-60, 60, step)

    def bar(left, right, height):
        return height * np.clip(np.minimum(0.5 + (x - left) / ramp, 0.5 + (right - x) / ramp), 0, 1)

    at, tiny = np.array([-width / 2, width / 2, plateau]), 1e-3
    columns = [(bar(*(at + tiny * e)) - bar(*(at - tiny * e))) / (2 * tiny) for e in np.eye(3)]
    weight = fisher_information(bar(*at), 1) * step
    matrix = np.array([[np.sum(weight * a * b) for b in columns] for a in columns])
    covariance = np.linalg.inv(matrix)
    expected = covariance[0, 0] + covariance[1, 1] - 2 * covariance[0, 1]
    assert _width_variance(plateau, width, ramp, 1) == pytest.approx(expected, rel=0.01)


def test_thickness_at_the_hard_end_is_bounded_near_the_figure_that_the_bar_states():
    """The bar's table names 0.17 mm at SNR 30, 16 channels, 6 mm; pixels of 1.25 mm are the middle of the coarse half."""
    setup = default_setup(
        load_phantom("sectioned-190"), snr=30.0, channels=16, thickness_mm=6.0, pixel_mm=(1.25, 1.25), matrix=(220, 220),
    )  # fmt: skip
    machine = Scan(setup)
    limit = least_deviation("slice_thickness", machine, true_values(setup, machine)["slice_thickness"])
    assert 1.3 * 1.96 * limit == pytest.approx(0.17, abs=0.03)


def test_limits_fall_with_the_noise_and_are_absent_without_it():
    phantom = load_phantom("sphere-170")
    limits = []
    for snr in (50.0, 100.0, math.inf):
        setup = default_setup(phantom, snr=snr)
        machine = Scan(setup)
        truths = true_values(setup, machine)
        limits.append(least_deviation("ghosting", machine, truths["ghosting"]))
    assert limits[0] == pytest.approx(2 * limits[1], rel=0.02)
    assert limits[2] is None
