"""Propagation of uncertainty against the `uncertainties` package on the same formulas, inputs taken from the details."""

import math

import pytest
from uncertainties import ufloat

from qa.locate import locate
from qa.measure import measure
from qa.measure.noise import difference_noise
from qa.measure.regions import uniform_field
from qa.phantoms import load_phantom
from qa.simulate import default_setup, simulate

PHANTOM = load_phantom("sphere-170")


@pytest.fixture(scope="module")
def scan():
    return simulate(default_setup(PHANTOM, snr=60.0, ghost_percent=3.0, channels=1, seed=4, gain_drift_percent=1.0))


@pytest.fixture(scope="module")
def pose(scan):
    return locate(scan, PHANTOM)


@pytest.fixture(scope="module")
def figures(scan, pose):
    return {m.quantity: m for m in measure(scan, pose, PHANTOM)[0]}


def test_snr(scan, pose, figures):
    field = uniform_field(scan, pose, PHANTOM)
    noise = difference_noise(scan, field)
    pixels = field.inside.sum()
    spread = math.sqrt(2) * noise.sigma
    difference = ufloat(spread, spread / math.sqrt(2 * noise.freedom))
    signal = ufloat(field.mean(field.cut(scan.pixels)), noise.sigma * math.sqrt(noise.correlation.mean_factor / pixels))
    expected = signal / (difference / math.sqrt(2))
    assert figures["snr"].value == pytest.approx(expected.nominal_value, rel=1e-12)
    assert figures["snr"].standard_uncertainty == pytest.approx(expected.std_dev, rel=1e-9)


def test_ghosting(figures):
    ghost = figures["ghosting"]
    means = {
        name: ufloat(ghost.details[name], ghost.details["standard_uncertainties"][name])
        for name in ("top", "bottom", "left", "right")
    }
    signal = ghost.details["signal"]
    expected = 100 * ((means["top"] + means["bottom"]) - (means["left"] + means["right"])) / (2 * signal)
    assert ghost.value == pytest.approx(abs(expected.nominal_value), rel=1e-12)
    assert ghost.standard_uncertainty == pytest.approx(expected.std_dev, rel=1e-9)


def test_scale_follows_its_length(figures):
    for name, length in (("scale_x", "length_0"), ("scale_y", "length_90")):
        true = figures[name].details["true_diameter_mm"]
        measured = ufloat(figures[length].value, figures[length].standard_uncertainty)
        expected = 100 * (measured / true - 1)
        assert figures[name].value == pytest.approx(expected.nominal_value, abs=1e-12)
        assert figures[name].standard_uncertainty == pytest.approx(expected.std_dev, rel=1e-9)
