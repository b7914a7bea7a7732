"""The digital phantoms with known truth beside the project: made independently, they settle what a definition means."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from qa.dicom import read
from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom

FOLDER = Path(__file__).parents[2] / ".." / "shared" / "data" / "digital"
pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason="the digital phantoms of known truth are not here")
PLAIN = ("sphere-snr", "sphere-shaded", "sphere-ghost", "sphere-one-image", "cylinder-square", "cylinder-scaled")
SECTIONED = ("sectioned-square", "sectioned-channels", "sectioned-low-turned", "sectioned-thin-high")
OURS = {
    "snr",
    "snr_background",
    "uniformity_piu",
    "uniformity_naad",
    "ghosting",
    "length_0",
    "length_45",
    "length_90",
    "length_135",
    "scale_x",
    "scale_y",
    "distortion_max",
    "centre_frequency",
}


def figures(case):
    truth = json.loads((FOLDER / case / "truth.json").read_text())
    phantom = load_phantom(truth["phantom"])
    (acquisition,) = read(FOLDER / case).acquisitions
    pose = locate(acquisition, phantom)
    measured, missed = measure(acquisition, pose, phantom)
    return truth, acquisition, {m.quantity: m for m in measured}, {m.quantity: m for m in missed}


def true_value(truth, measurement):
    told = truth["true"][measurement.quantity]
    return told.get("by_slice", {}).get(str(measurement.slice), told["value"])


def expected_ghosting(truth, amplitude_percent):
    """The formula on the expected magnitudes of one channel: Rician where the ghost lies, Rayleigh beside (scipy.stats)."""
    sigma = 1 / truth["snr_setting"]
    ghost = stats.rice.mean(amplitude_percent / 100 / sigma, scale=sigma)
    return 100 * (ghost - stats.rayleigh.mean(scale=sigma))


@pytest.mark.parametrize("case", PLAIN + SECTIONED)
def test_what_must_and_must_not_be_measured(case):
    truth, _, found, missed = figures(case)
    assert not (set(truth["must_be_measured"]) & OURS) - set(found)
    assert not set(truth["must_not_be_measured"]) & set(found)
    assert set(truth["must_not_be_measured"]) <= set(missed)


@pytest.mark.parametrize("case", PLAIN + SECTIONED)
def test_each_figure_within_the_95_percent_column(case):
    truth, acquisition, found, _ = figures(case)
    pixel = float(np.mean(acquisition.settings.pixel_mm))
    for name, m in found.items():
        if name not in OURS:
            continue
        value = true_value(truth, m)
        match name:
            case "snr" | "snr_background":
                bound = 4 * value / math.sqrt(2 * m.details["independent_pixels"])
            case "uniformity_piu" | "uniformity_naad":
                bound = 1.0
            case "ghosting":
                value, bound = expected_ghosting(truth, value), 0.3
            case "scale_x" | "scale_y" | "distortion_max":
                bound = 100 * 0.15 * pixel / m.details["true_diameter_mm"]
            case "centre_frequency":
                bound = 1e-9
            case _:
                bound = 0.15 * pixel
        assert abs(m.value - value) <= bound, f"{name}: {m.value} where {value} is true"


def test_the_ghost_itself():
    truth, _, found, _ = figures("sphere-ghost")
    details = found["ghosting"].details
    true = truth["true"]["ghosting"]["value"]
    assert details["noise_corrected_percent"] == pytest.approx(true, abs=0.1)
    assert abs(details["noise_corrected_percent"] - true) < 3 * details["noise_corrected_standard_uncertainty"] + 0.02
    assert details["ghost_direction"] == details["phase_encode"] == "column"
