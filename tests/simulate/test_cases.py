import math

import numpy as np
import pytest

from qa.phantoms import load_phantom, phantom_names
from qa.simulate import Scan, random_setup, simulate, true_values
from qa.simulate.signals import ghost_regions


@pytest.mark.parametrize("name", phantom_names())
def test_random_scans_keep_to_the_ranges(name):
    rng = np.random.default_rng(7)
    phantom = load_phantom(name)
    drawn = [random_setup(rng, phantom) for _ in range(120)]
    spread = {
        "rotation_deg": (-10, 10),
        "shading_percent": (5, 40),
        "snr": (30, 500),
    }
    for field, (low, high) in spread.items():
        values = [getattr(setup, field) for setup in drawn]
        assert low <= min(values) < low + 0.2 * (high - low)
        assert high - 0.2 * (high - low) < max(values) <= high
    tilts = [math.degrees(math.acos(min(1.0, abs(setup.axis[2])))) for setup in drawn]
    assert 1.5 < max(tilts) <= 2.0 + 1e-6
    pixels = np.array([setup.pixel_mm for setup in drawn])
    assert pixels.min() >= 0.7
    assert pixels.max() <= 1.5
    apart = pixels.max(axis=1) / pixels.min(axis=1)
    assert 1.1 < apart.max() <= 1.2 + 1e-3
    assert {setup.channels for setup in drawn} == {1, 2, 4, 8, 16}
    for setup in drawn:
        offset = setup.axes.T @ np.asarray(setup.centre_patient)
        assert np.abs(offset[:2]).max() <= 15.001
        plane = setup.planes[0]
        centre = plane.from_patient(np.asarray(setup.centre_patient))
        assert ghost_regions(plane, (float(centre[0]), float(centre[1])), setup.body_diameter_mm / 2)
    normals = np.array([setup.axes[:, 2] for setup in drawn])
    assert sum(np.abs(normals).max(axis=1) < 0.999) > 10


def test_the_same_chance_draws_the_same_scan():
    one, two = (random_setup(np.random.default_rng(3), load_phantom("sphere-170"), channels=2) for _ in range(2))
    assert one == two
    assert one.channels == 2
    assert np.array_equal(simulate(one).pixels, simulate(two).pixels)
    assert true_values(one) == true_values(two)


@pytest.mark.parametrize("seed", range(10))
def test_imperfections_in_any_mixture_give_finite_images_and_truths(seed):
    rng = np.random.default_rng([seed, 20])
    phantom = load_phantom(phantom_names()[seed % len(phantom_names())])
    setup = random_setup(
        rng,
        phantom,
        ghost_shift=float(rng.choice([0.5, 0.3, 0.1])),
        ghost_phase_deg=float(rng.uniform(0, 360)),
        partial_fourier=float(rng.choice([1.0, 0.75, 0.5])),
        acquired_fraction=float(rng.choice([1.0, 0.7])),
        apodisation=str(rng.choice(["none", "hann"])),
        noise_correlation=float(rng.choice([0.0, 0.4])),
        nonlinearity_x_mm=float(rng.uniform(-3, 3)),
        nonlinearity_y_mm=float(rng.uniform(-3, 3)),
        off_resonance_hz=float(rng.uniform(-300, 300)),
        profile_edge_mm=float(rng.choice([0.0, 0.5])),
        air_bubble_mm=float(rng.choice([0.0, 8.0])),
        filling_port_mm=(12.0, float(rng.choice([0.0, 8.0]))),
        coil=str(rng.choice(["loops", "polynomial"])),
        snr=float(rng.choice([3.0, 100.0, math.inf])),
    )
    machine = Scan(setup)
    acquisition = simulate(setup, machine)
    truths = true_values(setup, machine)
    assert all(np.isfinite(series.pixels).all() for series in acquisition.repeats)
    assert all(math.isfinite(truth.value) for truth in truths.values())
    assert acquisition.pixels.max() > setup.level / 2
    assert {"centre_frequency", "setup_offset", "length_0"} <= set(truths)
