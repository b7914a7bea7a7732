"""Truth against closed forms, against the model's own images where noise is averaged away, and against independent cases."""

import json
import math
from pathlib import Path

import numpy as np
import pytest

from qa.phantoms import load_phantom
from qa.simulate import Scan, default_setup, true_values
from qa.simulate.inserts import _rigid, _scales
from qa.simulate.signals import _deviation, _integral
from qa.simulate.truth import uniform_slices

DIGITAL = Path(__file__).parents[3] / "shared" / "data" / "digital"
needs_digital = pytest.mark.skipif(not DIGITAL.is_dir(), reason="the independent digital phantoms are not here")


def test_lengths_of_a_square_set_up_are_the_diameter(make):
    truth = true_values(make("cylinder-200"))
    for name in ("length_0", "length_45", "length_90", "length_135"):
        assert truth[name].value == pytest.approx(200, abs=1e-9)
    assert truth["distortion_max"].value == pytest.approx(0, abs=1e-9)


def test_lengths_follow_scale_and_tilt(make):
    truth = true_values(make("cylinder-200", scale_x_percent=1.2, scale_y_percent=-0.6))
    assert truth["length_0"].value == pytest.approx(202.4)
    assert truth["length_90"].value == pytest.approx(198.8)
    a, b = 101.2, 99.4
    diagonal = 2 * a * b / math.sqrt((a * a + b * b) / 2)
    assert truth["length_45"].value == pytest.approx(diagonal)
    assert truth["distortion_max"].value == pytest.approx(1.2)
    tilted = true_values(make("cylinder-200", tilt_x_deg=2.0))
    assert tilted["length_0"].value == pytest.approx(200, abs=1e-6)
    assert tilted["length_90"].value == pytest.approx(200 / math.cos(math.radians(2)))


def test_a_sphere_is_as_wide_as_the_slice_cuts_it(make):
    off = true_values(make(centre_patient=(0.0, 0.0, 30.0), thickness_mm=1.0))
    assert off["length_0"].value == pytest.approx(2 * math.sqrt(85**2 - 30**2), abs=1e-6)
    # at the equator half the profile lies within 1.25 mm of it
    assert true_values(make())["length_0"].value == pytest.approx(2 * math.sqrt(85**2 - 1.25**2), abs=1e-6)


@pytest.mark.parametrize(("lift", "inside"), [(0.0, True), (-1.5, True), (-3.0, False)])
def test_slice_thickness_and_position_of_a_square_set_up(make, lift, inside):
    truth = true_values(make("sectioned-190", centre_patient=(0.0, 0.0, -lift)))
    assert truth["slice_thickness"].value == pytest.approx(5.0, abs=1e-9)
    assert truth["slice_thickness"].details["bars_mm"] == pytest.approx([50.0, 50.0])
    assert truth["slice_thickness"].details["inside_block"] is inside
    assert truth["slice_position"].value == pytest.approx(lift)
    assert truth["slice_position_end"].value == pytest.approx(lift)
    assert truth["slice_position"].details["on_axis_mm"] == pytest.approx(lift)
    assert set(truth["slice_position"].by_slice) == {1}
    assert set(truth["slice_position_end"].by_slice) == {11}


def test_tilt_cancels_in_thickness_but_not_in_the_bars_or_the_position(make):
    truth = true_values(make("sectioned-190", tilt_y_deg=2.0, tilt_x_deg=-1.5))
    one, other = truth["slice_thickness"].details["bars_mm"]
    assert abs(one - other) > 20
    assert truth["slice_thickness"].value == pytest.approx(5.0, rel=3e-3)
    # the bars' ends lie 65 mm in front of the axis; the slice's plane is -50 = 50 n_z + (-65) n_y there, n in the phantom
    down, up = math.sin(math.radians(-1.5)), math.cos(math.radians(-1.5)) * math.cos(math.radians(2.0))
    height = (-50 + 65 * down) / up + 50
    assert height == pytest.approx(-1.751, abs=1e-3)
    assert truth["slice_position"].value == pytest.approx(height, abs=0.01)
    assert truth["slice_position"].details["on_axis_mm"] == pytest.approx(-50 / up + 50, abs=1e-6)


def test_the_bar_of_a_noise_free_image_has_the_width_that_truth_says(make):
    """Scans the ramps with tilt and reads the bars from the image itself."""
    setup = make("sectioned-190", tilt_y_deg=1.0, pixel_mm=(0.5, 0.5), matrix=(440, 440), shading_percent=0.0, slices=11)
    bars = true_values(setup)["slice_thickness"].details["bars_mm"]
    image = Scan(setup).magnitude(0, noise=False)
    middle = setup.planes[0].middle_mm
    for centre_y, wanted in zip((2.0, 8.0), bars, strict=True):
        row = (middle[1] + centre_y) / 0.5
        line = image[round(row) - 2 : round(row) + 3].mean(axis=0)
        columns = np.arange(440) * 0.5 - middle[0]
        block = np.abs(columns) < 50
        line, columns = line[block], columns[block]
        half = np.percentile(line, 95) / 2
        edges = np.flatnonzero(np.diff(np.signbit(line - half)))
        at = edges[[0, -1]]
        places = columns[at] + 0.5 * (half - line[at]) / (line[at + 1] - line[at])
        assert places[1] - places[0] == pytest.approx(wanted, abs=0.6)


def test_rods_of_a_scaled_and_turned_lattice(make):
    setup = make("lattice-200", scale_x_percent=1.0, rotation_deg=4.0, centre_patient=(5.0, -3.0, 0.0))
    truth = true_values(setup)
    assert truth["scale_x"].value == pytest.approx(1.0, abs=1e-9)
    assert truth["scale_y"].value == pytest.approx(0.0, abs=1e-9)
    assert truth["distortion_max"].value == pytest.approx(1.0, abs=0.05)
    rods = truth["lattice_rms"].details["rods"]
    assert len(rods) == 81
    away = [math.dist(rod["true_mm"], rod["measured_mm"]) for rod in rods]
    assert truth["lattice_max"].value == pytest.approx(max(away))
    assert truth["lattice_rms"].value == pytest.approx(math.sqrt(np.mean(np.square(away))))
    # the rod at index (1, 0) lies 20 mm along the turned x axis
    rod = next(r for r in rods if (r["i"], r["j"]) == (1, 0))
    turn = math.radians(4.0)
    assert rod["place_mm_in_image"] == pytest.approx([1.01 * (5 + 20 * math.cos(turn)), -3 + 20 * math.sin(turn)], abs=1e-9)


def test_rod_centres_of_the_image_lie_where_truth_says(make):
    setup = make(
        "lattice-200", rotation_deg=3.0, tilt_x_deg=1.5, nonlinearity_x_mm=2.0, scale_y_percent=-0.7, shading_percent=0.0
    )
    image = Scan(setup).magnitude(0, noise=False)
    middle = np.asarray(setup.planes[0].middle_mm)
    errors = []
    for rod in true_values(setup)["lattice_rms"].details["rods"]:
        x, y = np.asarray(rod["place_mm_in_image"]) + middle
        rows, columns = np.arange(round(y) - 7, round(y) + 8), np.arange(round(x) - 7, round(x) + 8)
        hole = setup.level - image[np.ix_(rows, columns)]
        hole = hole - np.median(hole)
        weight = hole * (np.hypot(rows[:, None] - y, columns[None, :] - x) < 6.5)
        errors.append([(weight * columns).sum() / weight.sum() - x, (weight * rows[:, None]).sum() / weight.sum() - y])
    assert np.abs(np.mean(errors, axis=0)).max() < 0.01
    assert np.sqrt(np.mean(np.square(errors))) < 0.04


@pytest.mark.parametrize("channels", [1, 4])
@pytest.mark.parametrize("correlation", [0.0, 0.3])
def test_snr_by_its_definition_on_many_images(make, channels, correlation):
    setup = make(snr=40.0, channels=channels, noise_correlation=correlation, matrix=(128, 128), pixel_mm=(2.0, 2.0), repeats=2)
    machine = Scan(setup)
    truth = true_values(setup, machine)
    x, y = setup.planes[0].grid_mm()
    middle = setup.planes[0].middle_mm
    away = np.hypot(x - middle[0], y - middle[1])
    region, air = away < math.sqrt(0.75) * 85, away > 125
    images = np.stack([machine.magnitude(0, repeat) for repeat in range(24)])
    signal = images[:, region].mean()
    noise = math.sqrt((images[::2, region] - images[1::2, region]).var(axis=1).mean() / 2)
    assert truth["snr"].value == pytest.approx(signal / noise, rel=0.01)
    clean = machine.clean(0)
    ringing = np.sqrt(np.sum(np.abs(clean) ** 2, axis=0))[air].max()
    assert ringing < 0.3 * machine.sigma
    from scipy.stats import chi

    background = signal / (images[:, air].std() / chi.std(2 * channels))
    assert truth["snr_background"].value == pytest.approx(background, rel=0.015)


@pytest.mark.parametrize("channels", [1, 8])
def test_uniformity_and_ghosting_by_their_formulas_on_the_mean_of_many_images(make, channels):
    setup = make(snr=30.0, channels=channels, shading_percent=30.0, ghost_percent=2.0, matrix=(128, 128), pixel_mm=(2.0, 2.0))
    machine = Scan(setup)
    truth = true_values(setup, machine)
    plane = setup.planes[0]
    many = np.mean([machine.magnitude(0, repeat) for repeat in range(150)], axis=0)
    reach = math.sqrt(0.75) * truth["length_0"].value / 2 - math.sqrt(100 / math.pi)
    assert _integral(many, plane, plane.middle_mm, reach) == pytest.approx(truth["uniformity_piu"].value, abs=0.1)
    x, y = plane.grid_mm()
    region = np.hypot(x - plane.middle_mm[0], y - plane.middle_mm[1]) <= math.sqrt(0.75) * truth["length_0"].value / 2
    means = {
        name: many[(x >= x0) & (x <= x1) & (y >= y0) & (y <= y1)].mean()
        for name, (x0, x1, y0, y1) in truth["ghosting"].details["regions"].items()
    }
    value = 100 * abs(means["top"] + means["bottom"] - means["left"] - means["right"]) / (2 * many[region].mean())
    assert truth["ghosting"].value == pytest.approx(value, abs=0.05)
    assert truth["ghosting"].details["ghost_percent"] == pytest.approx(2.0, rel=0.1)
    # each image's own deviation, noise and all
    each = np.mean([_deviation(machine.magnitude(0, k), np.zeros_like(many), region) for k in range(20)])
    assert truth["uniformity_naad"].details["with_noise"] == pytest.approx(each, abs=0.05)


def test_uniformity_of_a_linear_ramp_has_a_closed_form(make):
    setup = make("cylinder-200", shading_percent=20.0, shading_curvature=0.0, snr=math.inf)
    # (max - min) / max = 0.2 at +-100 mm: slope 1 / 9; the disc's centre stays 86.603 - 5.642 mm within
    reach = math.sqrt(0.75) * 100 - math.sqrt(100 / math.pi)
    assert true_values(setup)["uniformity_piu"].value == pytest.approx(100 * (1 - reach / 100 / 9), abs=0.05)


def test_uniform_slices_are_those_without_inserts(make):
    assert uniform_slices(make("sectioned-190")) == (3, 4, 6, 7, 8, 9)
    assert uniform_slices(make("sectioned-190", centre_patient=(4.0, -6.0, 3.0), rotation_deg=3.0)) == (4, 7, 8, 9)
    assert uniform_slices(make("lattice-200")) == ()
    assert uniform_slices(make("cylinder-200", slices=3)) == (1, 2, 3)


def test_offset_tilt_and_frequency(make):
    tilted = make("cylinder-200", centre_patient=(6.0, -8.0, 5.0), tilt_x_deg=1.5, frequency_offset_ppm=3.0)
    truth = true_values(tilted)
    # one slice shows the axis 5 mm below the centre, where the tilt has moved it: that stands in for the centre
    assert truth["setup_offset"].value == pytest.approx(math.hypot(6, 8 - 5 * math.tan(math.radians(1.5))), abs=1e-4)
    truth = true_values(tilted.but(slices=3, spacing_mm=10.0))
    assert truth["setup_offset"].value == pytest.approx(10)
    assert truth["setup_offset"].details["patient_mm"] == pytest.approx([6, -8, 5])
    assert truth["setup_tilt"].value == pytest.approx(1.5)
    assert truth["centre_frequency"].value == pytest.approx(127.732435 * (1 + 3e-6), rel=1e-8)


def test_lengthwise_the_cylinder_shows_its_length(make):
    setup = make("sectioned-190", slices=1, tilt_x_deg=90.0, scale_y_percent=1.0, stack_centre_patient=(0.0, 0.0, 0.0))
    truth = true_values(setup)
    assert truth["length_axial"].value == pytest.approx(148 * 1.01)
    assert "snr" not in truth
    column = Scan(setup).magnitude(0, noise=False)[:, 60]
    assert np.flatnonzero(column > setup.level / 2).size == pytest.approx(148 * 1.01, abs=1)


def test_truth_shares_the_scanner_with_the_images(make):
    setup = make()
    machine = Scan(setup)
    assert true_values(setup, machine) == true_values(setup)


@needs_digital
@pytest.mark.parametrize("name", sorted(p.name for p in DIGITAL.glob("*") if p.is_dir()))
def test_definitions_agree_with_independently_made_cases(name):
    """Everything that does not hang on the shading, which those cases do not tell."""
    from pydicom import dcmread

    told = json.loads((DIGITAL / name / "truth.json").read_text())
    files = sorted((DIGITAL / name / "s0").glob("*.dcm"))
    header = dcmread(files[0], stop_before_pixels=True)
    changes = {
        "matrix": (int(header.Rows), int(header.Columns)),
        "pixel_mm": tuple(float(v) for v in header.PixelSpacing),
        "thickness_mm": float(header.SliceThickness),
        "centre_patient": tuple(told["pose"]["centre"]),
        "rotation_deg": float(told["pose"]["rotation"]),
        "snr": float(told["snr_setting"]),
        "channels": told["channels"],
    }
    if len(files) == 1:
        changes["slices"] = 1
    if name == "cylinder-scaled":
        changes |= {"scale_x_percent": 1.2, "scale_y_percent": -0.6}
    found = true_values(default_setup(load_phantom(told["phantom"]), **changes))
    within = {"snr": 0.02, "snr_background": 0.02, "ghosting": 0.01, "centre_frequency": 1e-6, "distortion_max": 0.015}
    skipped = {"uniformity_piu", "uniformity_naad", "rods"}
    if name == "sphere-ghost":
        skipped |= {"ghosting"}
    if name == "lattice-bent":
        skipped |= {"lattice_rms", "lattice_max", "scale_x", "scale_y", "distortion_max"}
    for quantity, truth in told["true"].items():
        if quantity in skipped:
            continue
        # scales and distortion of a sphere: those cases take the nominal diameter for that of the slice, 0.014 % apart
        default = 0.015 if quantity.startswith(("length", "scale")) else 1e-6
        assert found[quantity].value == pytest.approx(truth["value"], abs=within.get(quantity, default)), quantity


@needs_digital
def test_lattice_definitions_agree_on_the_bent_case():
    told = json.loads((DIGITAL / "lattice-bent" / "truth.json").read_text())["true"]
    true = 20.0 * np.array(told["rods"]["index"])
    seen = np.array(told["rods"]["place_mm_in_image"])
    fitted = _rigid(seen, true)
    away = np.hypot(*(fitted - true).T)
    assert np.sqrt(np.mean(away**2)) == pytest.approx(told["lattice_rms"]["value"], rel=1e-9)
    assert away.max() == pytest.approx(told["lattice_max"]["value"], rel=1e-9)
    across, down = _scales(default_setup(load_phantom("lattice-200")), seen, true)
    assert across == pytest.approx(told["scale_x"]["value"], rel=1e-9)
    assert down == pytest.approx(told["scale_y"]["value"], rel=1e-9)


@needs_digital
@pytest.mark.parametrize(
    ("name", "radius"),
    [("sphere-shaded", 84.99), ("sphere-snr", 84.99), ("cylinder-square", 100.0), ("sectioned-channels", 95.0)],
)
def test_uniformity_agrees_on_the_smooth_surface_under_independent_images(name, radius):
    from pydicom import dcmread

    told = json.loads((DIGITAL / name / "truth.json").read_text())["true"]
    numbers = [8] if name.startswith("sectioned") else [1]
    images = [
        dcmread(folder / f"im{k:04d}.dcm").pixel_array.astype(float)
        for folder in sorted((DIGITAL / name).glob("s?"))
        for k in numbers
    ]
    image = np.mean(images, axis=0)
    plane = default_setup(load_phantom("sphere-170"), matrix=image.shape).planes[0]
    x, y = plane.grid_mm()
    u, v = np.broadcast_arrays((x - plane.middle_mm[0]) / radius, (y - plane.middle_mm[1]) / radius)
    known = np.hypot(u, v) < 0.93
    terms = [(i, j) for i in range(5) for j in range(5 - i)]
    factors = np.linalg.lstsq(np.stack([u[known] ** i * v[known] ** j for i, j in terms], axis=1), image[known], rcond=None)[0]
    smooth = sum(f * u**i * v**j for f, (i, j) in zip(factors, terms, strict=True))
    region = np.hypot(u, v) <= math.sqrt(0.75)
    piu = _integral(smooth, plane, plane.middle_mm, math.sqrt(0.75) * radius - math.sqrt(100 / math.pi))
    assert piu == pytest.approx(told["uniformity_piu"]["value"], abs=0.05)
    naad = _deviation(smooth, np.zeros_like(smooth), region)
    assert naad == pytest.approx(told["uniformity_naad"]["value"], abs=0.02)
