"""Sums over made-up cases, whose answers are known by hand; intervals against scipy's own."""

import pytest
from scipy.stats import binomtest

from qa.commission.bars import row_of, rows
from qa.commission.cases import draw_setup
from qa.commission.tally import coverage_interval, tally_cases
from qa.phantoms import load_phantom, phantom_names
from qa.report.commission_content import Case, Figure, Missing
from qa.simulate import Truth, default_setup

# The accuracy table, written a second time: quantity, part, unit, bias, 95 % point, times the limit.
PROMISED = {
    ("snr", ""): ("%", 1.0, None, 4.0),
    ("snr_background", ""): ("%", 1.0, None, 4.0),
    ("uniformity_piu", "SNR 200 and above"): ("%", 0.3, 1.0, None),
    ("uniformity_piu", "SNR 100 to 200"): ("%", 0.5, 1.0, None),
    ("ghosting", ""): ("%", 0.1, 0.3, 2.0),
    ("length_0", ""): ("pixel", 0.05, 0.15, None),
    ("length_45", ""): ("pixel", 0.05, 0.15, None),
    ("length_90", ""): ("pixel", 0.05, 0.15, None),
    ("length_135", ""): ("pixel", 0.05, 0.15, None),
    ("rod_centres", ""): ("pixel", 0.02, 0.10, None),
    ("slice_thickness", "bars inside the block"): ("mm", 0.05, 0.15, pytest.approx(1.3 * 1.96, abs=1e-4)),
    ("slice_position", "\u22125 to +5 mm"): ("mm", 0.05, 0.20, None),
    ("slice_position_end", "\u22125 to +5 mm"): ("mm", 0.05, 0.20, None),
}


def figure(error, u=0.6, quantity="ghosting", row="ghosting", allowed=0.3):
    return Figure(quantity, 1.0, 1.0 + error, u, error, "%", allowed, None, row)


def case(seed, figures=(), missing=(), rods=()):
    return Case("sphere-170", seed, 100.0, 1.0, {}, tuple(figures), tuple(missing), rods)


def only(cases):
    (tally,) = tally_cases(cases)
    return tally


def test_the_bars_are_those_promised():
    held = {
        (r.quantity, r.part): (r.unit, r.bias, r.within, r.limits)
        for r in rows()
        if r.bias is not None or r.within is not None or r.limits is not None
    }
    assert held == PROMISED


@pytest.mark.parametrize(("snr", "part"), [(30.0, "SNR below 100"), (100.0, "SNR 100 to 200"), (200.0, "SNR 200 and above")])
def test_a_case_falls_in_the_part_of_its_signal_to_noise_ratio(snr, part):
    setup = default_setup(load_phantom("sphere-170"), snr=snr)
    assert row_of("uniformity_piu", setup, Truth(90.0)).part == part


def test_the_larger_of_bar_and_limit_is_allowed():
    row = next(r for r in rows() if r.quantity == "ghosting")
    assert row.allowed(0.05) == 0.3
    assert row.allowed(0.4) == 0.8
    assert row.allowed(None) == 0.3


@pytest.mark.parametrize("name", phantom_names())
def test_scans_are_drawn_from_the_promised_ranges(name):
    phantom = load_phantom(name)
    setups = [draw_setup(phantom, seed) for seed in range(150)]
    assert all(abs(s.rotation_deg) <= 10 for s in setups)
    assert all(s.tilt_x_deg**2 + s.tilt_y_deg**2 <= 4 + 1e-9 for s in setups)
    assert all(30 <= s.snr <= 500 for s in setups)
    assert all(0.69 <= p <= 1.5 for s in setups for p in s.pixel_mm)
    assert max(max(s.pixel_mm) / min(s.pixel_mm) for s in setups) <= 1.2 + 1e-3
    assert {s.channels for s in setups} == {1, 2, 4, 8, 16}
    assert all(5 <= s.shading_percent <= 40 for s in setups)
    assert 50 < sum(s.bent for s in setups) < 100
    assert len({s.seed for s in setups}) == 150


def test_bias_point_coverage_and_worst():
    cases = [case(k, [figure(0.01 * k - 0.1, u=0.0301)]) for k in range(20)]
    tally = only(cases)
    assert tally.bias == pytest.approx(-0.005)
    assert tally.point == pytest.approx(0.09)
    assert tally.share == 1.0
    assert tally.coverage == pytest.approx(13 / 20)
    assert tally.worst_seed == 0
    assert (tally.bias_met, tally.point_met, tally.coverage_met) == (True, True, False)


def test_what_was_not_measured_lies_outside():
    missing = Missing("ghosting", "too narrow", "ghosting")
    tally = only([*(case(k, [figure(0.0)]) for k in range(189)), *(case(k, missing=[missing]) for k in range(189, 200))])
    assert (tally.cases, tally.measured, tally.point) == (200, 189, None)
    assert tally.share == pytest.approx(189 / 200)
    assert tally.point_met is False
    assert tally.missing == (("too narrow", 11, 189),)
    enough = only([*(case(k, [figure(0.0)]) for k in range(190)), *(case(k, missing=[missing]) for k in range(190, 200))])
    assert (enough.point, enough.point_met) == (0.0, True)


@pytest.mark.parametrize(
    ("error", "cases", "met"), [(0.11, 200, False), (0.11, 20, True), (0.2, 20, False), (0.099, 200, True)]
)
def test_few_cases_miss_a_bias_only_beyond_chance(error, cases, met):
    spread = [0.2, -0.2]
    tally = only([case(k, [figure(error + 0.25 * spread[k % 2])]) for k in range(cases)])
    assert tally.bias == pytest.approx(error)
    assert tally.bias_met is met if cases == 200 else tally.bias_met is (error <= 0.1 + 2 * tally.u_bias)


@pytest.mark.parametrize(("held", "cases", "met"), [(464, 500, False), (465, 500, True), (490, 500, True), (491, 500, False)])
def test_coverage_over_enough_cases_is_taken_at_its_word(held, cases, met):
    tally = only([case(k, [figure(0.0 if k < held else 0.1, u=0.01)]) for k in range(cases)])
    assert tally.coverage_met is met


@pytest.mark.parametrize(("held", "cases", "met"), [(20, 20, True), (16, 20, True), (12, 20, False), (200, 200, False)])
def test_coverage_over_fewer_cases_misses_only_beyond_chance(held, cases, met):
    tally = only([case(k, [figure(0.0 if k < held else 0.1, u=0.01)]) for k in range(cases)])
    assert tally.coverage_met is met


@pytest.mark.parametrize(("held", "cases"), [(0, 10), (5, 10), (10, 10), (465, 500), (490, 500)])
def test_the_interval_of_a_share_is_the_exact_one(held, cases):
    peer = binomtest(held, cases).proportion_ci(0.95, method="exact")
    assert coverage_interval(held, cases) == pytest.approx((peer.low, peer.high), abs=1e-9)


def test_rods_are_pooled_and_their_bias_is_sought_place_by_place():
    row = next(r.key for r in rows() if r.quantity == "rod_centres")
    rods = ((0, 0, 0.0, 0.0), (1, 0, 0.03, 0.04))
    cases = [case(k, [figure(0.05, 0.0, "rod_centres", row, 0.1)], rods=rods) for k in range(10)]
    tally = only(cases)
    assert tally.bias == pytest.approx(0.05)
    assert tally.bias_met is False
    assert tally.point == pytest.approx(0.05)
    assert tally.share == 1.0
    assert tally.coverage is None
