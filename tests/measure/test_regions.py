"""Which slice is read, and where in it."""

import math
from dataclasses import replace

import numpy as np
import pytest

from qa.locate import locate
from qa.measure import measure
from qa.phantoms import load_phantom


def test_the_slice_nearest_the_centre_of_a_sphere(scan, work):
    done = work(scan(slices=7, spacing_mm=12.0, centre_patient=(0.0, 0.0, 13.0), repeats=2))
    for name in ("snr", "uniformity_piu", "ghosting", "length_0"):
        assert done.found[name].slice == 5
    assert done.value("length_0") == pytest.approx(2 * math.sqrt(85**2 - 1), abs=0.05)
    assert done.value("scale_x") == pytest.approx(0, abs=0.03)


def test_a_slice_off_the_centre_is_held_against_its_own_cross_section(scan, work):
    done = work(scan(slices=5, spacing_mm=30.0, centre_patient=(0.0, 0.0, 14.0), repeats=2))
    assert done.found["length_0"].slice == 3
    assert done.value("length_0") == pytest.approx(2 * math.sqrt(85**2 - 14**2), abs=0.05)
    assert done.value("distortion_max") == pytest.approx(0, abs=0.05)


def test_the_middle_slice_of_a_cylinder(scan, work):
    done = work(scan("cylinder-200", slices=5, spacing_mm=10.0), "cylinder-200")
    assert {done.found[name].slice for name in ("snr", "snr_background", "uniformity_naad", "length_90")} == {3}


def test_m_is_75_percent_of_the_cross_section(scan, work):
    circle = work(scan()).found["snr"].regions[0]
    assert circle.name == "M"
    assert circle.radius_mm == pytest.approx(math.sqrt(0.75) * 85, abs=0.05)


def with_body(phantom, **changes):
    return phantom.model_copy(update={"body": phantom.body.model_copy(update=changes)})


def test_a_phantom_may_set_the_area_of_m(scan):
    phantom = with_body(load_phantom("sphere-170"), region_area_cm2=100.0)
    found, _ = measure(scan(), locate(scan(), phantom), phantom)
    circle = next(m for m in found if m.quantity == "snr").regions[0]
    assert math.pi * circle.radius_mm**2 == pytest.approx(100 * 100)


def test_an_m_larger_than_the_phantom_is_refused(scan):
    phantom = with_body(load_phantom("sphere-170"), region_area_cm2=300.0)
    _, missed = measure(scan(), locate(scan(), phantom), phantom)
    assert "does not fit" in next(m for m in missed if m.quantity == "snr").reason


def test_of_many_repeats_the_first_two_are_differenced(scan, work):
    five = scan(repeats=5, seed=8)
    assert work(five).value("snr") == work(replace(five, repeats=five.repeats[:2])).value("snr")


def test_regions_lie_where_they_say(scan, work):
    """Air clear of the ghost's band and the phantom; the four ghost regions in the margins."""
    done = work(scan(phase_encode="row", ghost_percent=3.0, ghost_shift=0.3, centre_patient=(6.0, -3.0, 0.0), channels=1))
    section = done.pose.sections[0]
    for region in done.found["snr_background"].regions[1:]:
        corners = np.subtract(region.points, section.centre_mm)
        assert np.abs(corners[:, 1]).min() > section.radius_mm
        assert np.abs(corners[:, 0]).min() > 0.85 * section.radius_mm
    area = sum(
        np.ptp([p[0] for p in r.points]) * np.ptp([p[1] for p in r.points]) for r in done.found["snr_background"].regions[1:]
    )
    assert area == pytest.approx(2000, rel=1e-6)
    assert done.value("snr_background") == pytest.approx(done.value("snr"), rel=0.08)
    for region in done.found["ghosting"].regions[1:]:
        wide, high = (np.ptp([p[k] for p in region.points]) for k in (0, 1))
        assert wide * high == pytest.approx(1000)
        assert max(wide, high) / min(wide, high) == pytest.approx(4)
