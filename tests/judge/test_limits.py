from dataclasses import replace
from datetime import date

import pytest

from qa.judge import Context, Unresolved, baseline_for, bounds, choose, judge, problems, why_not_judged
from qa.records import Baseline, Limit, Measurement

DAY = date(2026, 11, 23)
WHERE = Context(
    "north-3t", "sphere-170", DAY, coil="head 8", protocol="QA sphere", field_strength_T=2.893, slice_thickness_mm=5.0
)


def measured(value=5.0, u=0.1, quantity="slice_thickness", unit="mm", **details):
    return Measurement(quantity, value, unit, u, "method", 1, details=details)


def test_each_selector_is_more_specific_than_the_next_and_order_in_the_file_does_not_matter():
    ladder = [
        Limit("snr", lower=8.0, shipped=True, scanner="north-3t"),
        Limit("*", lower=7.0),
        Limit("snr", lower=6.0),
        Limit("snr", lower=5.5, slice_thickness_mm=5.0),
        Limit("snr", lower=5.2, field_strength_below_T=7.0),
        Limit("snr", lower=5.0, field_strength_T=3.0),
        Limit("snr", lower=4.0, protocol="QA*"),
        Limit("snr", lower=3.0, phantom="sphere-170"),
        Limit("snr", lower=2.0, coil="head*"),
        Limit("snr", lower=1.5, scanner="north*"),
        Limit("snr", lower=1.0, scanner="north-3t"),
    ]
    for n in range(1, len(ladder) + 1):
        for order in (ladder[:n], ladder[:n][::-1]):
            assert choose(order, "snr", WHERE).limit is ladder[n - 1]
    assert [c.lower for c in choose(ladder, "snr", WHERE).others] == [1.5, 2.0, 3.0, 4.0, 5.0, 5.2, 5.5, 6.0, 7.0, 8.0]


def test_the_choice_says_why():
    both = [Limit("snr", lower=1.0, scanner="north-3t"), Limit("snr", lower=2.0)]
    assert choose(both, "snr", WHERE).why == "it names scanner north-3t; the next best only names every scanner"
    default = [Limit("snr", lower=1.0, field_strength_T=3.0, shipped=True), Limit("snr", lower=2.0)]
    assert (
        choose(default, "snr", WHERE).why == "it names every scanner; a limit of the department comes before a shipped default"
    )
    tie = [Limit("snr", lower=1.0, scanner="north*"), Limit("snr", lower=2.0, scanner="*3t")]
    assert choose(tie, "snr", WHERE).limit.lower == 2.0
    assert "just as specific" in choose(tie, "snr", WHERE).why
    assert choose([Limit("snr", lower=1.0, scanner="south*")], "snr", WHERE).limit is None


@pytest.mark.parametrize(
    ("field_T", "chosen"),
    [(1.494, 87.5), (2.893, 82.0), (3.0, 82.0), (0.55, 87.5), (7.0, None), (None, None)],
)
def test_field_strength_is_taken_as_headers_write_it(field_T, chosen):
    below, at = (
        Limit("uniformity_piu", lower=87.5, field_strength_below_T=3.0),
        Limit("uniformity_piu", lower=82.0, field_strength_T=3.0),
    )
    limit = choose([below, at], "uniformity_piu", replace(WHERE, field_strength_T=field_T)).limit
    assert (limit.lower if limit else None) == chosen


def test_slice_thickness_selects_and_a_pattern_of_quantities_covers_all_lengths():
    limits = [Limit("slice_thickness", nominal=5.0, plus_minus=0.7, slice_thickness_mm=5.0), Limit("length_*", plus_minus=2.0)]
    assert choose(limits, "slice_thickness", WHERE).limit is limits[0]
    assert choose(limits, "slice_thickness", replace(WHERE, slice_thickness_mm=3.0)).limit is None
    assert choose(limits, "slice_thickness", replace(WHERE, slice_thickness_mm=None)).limit is None
    assert choose(limits, "length_45", WHERE).limit is limits[1]


def test_two_sided_limits_about_a_nominal_value_a_stated_truth_or_the_phantoms():
    fixed = bounds(Limit("slice_thickness", nominal=5.0, plus_minus=0.7, warn_plus_minus=0.5), measured(), WHERE)
    assert (fixed.lower, fixed.upper, fixed.warn_lower, fixed.warn_upper) == pytest.approx((4.3, 5.7, 4.5, 5.5))
    assert fixed.text == "5 ± 0.7 mm"
    length = Limit("length_*", plus_minus=2.0)
    assert bounds(length, measured(169, quantity="length_0", true_mm=168.5), WHERE).lower == pytest.approx(166.5)
    truth = replace(WHERE, true_values={"length_0": 170.0})
    assert bounds(length, measured(169, quantity="length_0"), truth).upper == pytest.approx(172.0)
    unknown = bounds(length, measured(169, quantity="length_0"), WHERE)
    assert isinstance(unknown, Unresolved)
    assert "true value of length_0" in unknown.reason


def test_all_bounds_of_one_limit_hold_and_the_stricter_wins():
    where = replace(WHERE, baselines=(Baseline("north-3t", "snr", 200.0, 2.0, None, 10, DAY),))
    snr = measured(190, 1.0, "snr", "1")
    both = bounds(Limit("snr", lower=150.0, lower_percent_of_baseline=90), snr, where)
    assert (both.lower, both.u_lower) == pytest.approx((180.0, 1.8))
    assert both.text == "at least 150 and at least 90 % of the baseline, 200"
    absolute = bounds(Limit("snr", lower=185.0, lower_percent_of_baseline=90), snr, where)
    assert (absolute.lower, absolute.u_lower) == pytest.approx((185.0, 0.0))
    clash = bounds(Limit("snr", upper=170.0, lower_percent_of_baseline=90), snr, where)
    assert isinstance(clash, Unresolved)
    assert "contradict" in clash.reason


def test_a_share_of_a_baseline_needs_one_that_is_above_zero():
    limit = Limit("scale_x", lower_percent_of_baseline=90)
    where = replace(WHERE, baselines=(Baseline("north-3t", "scale_x", -0.3, 0.01, None, 10, DAY),))
    assert "means nothing" in bounds(limit, measured(-0.3, quantity="scale_x", unit="%"), where).reason


def test_drift_a_day_is_taken_over_the_days_that_passed():
    limit = Limit("frequency_drift", per_day=1.0, warn_per_day=0.5, rule="guarded")
    before = measured(2.0, 0.2, "frequency_drift", "ppm")
    week = replace(WHERE, previous=before, previous_day=date(2026, 11, 16))
    found = bounds(limit, measured(9.5, 0.2, "frequency_drift", "ppm"), week)
    assert (found.lower, found.upper, found.u_upper) == pytest.approx((-5.0, 9.0, 0.2))
    assert (found.warn_lower, found.warn_upper) == pytest.approx((-1.5, 5.5))
    assert found.text == "a change of at most 1 ppm a day since 2026-11-16"
    assert judge(measured(9.5, 0.2, "frequency_drift", "ppm"), [limit], week).conformity == "conditional fail"
    same_day = replace(week, previous_day=DAY)
    assert bounds(limit, before, same_day).upper == pytest.approx(3.0)
    assert isinstance(bounds(limit, before, WHERE), Unresolved)


def test_the_baseline_in_force_is_the_latest_that_fits_and_has_begun():
    old = Baseline("north-3t", "snr", 200.0, 1.0, None, 10, date(2026, 1, 5))
    new = replace(old, value=210.0, since=date(2026, 6, 1))
    coming = replace(old, value=220.0, since=date(2026, 12, 1))
    other = replace(old, value=50.0, since=date(2026, 7, 1), coil="body*")
    everything = (new, coming, old, other)
    assert baseline_for(everything, "snr", WHERE) is new
    assert baseline_for(everything, "snr", replace(WHERE, day=date(2026, 5, 31))) is old
    assert baseline_for(everything, "snr", replace(WHERE, day=date(2026, 12, 1))) is coming
    assert baseline_for(everything, "snr", replace(WHERE, day=date(2026, 1, 4))) is None
    assert baseline_for(everything, "snr", replace(WHERE, coil="body 2")) is other


@pytest.mark.parametrize(
    ("limit", "sentence"),
    [
        (Limit("snrr", lower=1.0), "fits no quantity"),
        (Limit("snr", lower=2.0, upper=1.0), "lower 2 lies above upper 1"),
        (Limit("snr", lower=2.0, warn_lower=1.0), "lower 2 lies above warn_lower 1"),
        (Limit("ghosting", upper=2.0, warn_upper=3.0), "warn_upper 3 lies above upper 2"),
        (Limit("snr", lower_percent_of_baseline=90, warn_percent_of_baseline=85), "lower_percent_of_baseline 90 lies above"),
        (Limit("ghosting", upper_percent_of_baseline=150, warn_percent_of_baseline=180), "warn_percent_of_baseline 180 lies"),
        (Limit("slice_thickness", nominal=5.0, plus_minus=0.0), "plus_minus 0 must be above 0"),
        (Limit("slice_thickness", nominal=5.0, upper=6.0), "nominal needs plus_minus"),
        (Limit("frequency_drift", per_day=0.5, warn_per_day=1.0), "warn_per_day 1 lies above per_day 0.5"),
    ],
)
def test_a_limit_that_contradicts_itself_is_named(limit, sentence):
    found = problems([limit])
    assert len(found) == 1
    assert sentence in found[0]


def test_two_limits_for_the_same_thing_are_named_and_sound_sets_pass():
    one = Limit("ghosting", upper=2.5)
    assert problems([one, Limit("ghosting", upper=3.0)]) == (
        "the limit on ghosting is set twice for every scanner: keep one of them",
    )
    assert problems([one, replace(one, shipped=True), replace(one, scanner="north-3t")]) == ()


def test_a_limit_without_bounds_switches_limits_off():
    off = [Limit("ghosting", upper=2.5, shipped=True), Limit("ghosting", scanner="north-3t")]
    assert problems(off) == ()
    assert judge(measured(9.0, quantity="ghosting", unit="%"), off, WHERE) is None
    assert why_not_judged(measured(9.0, quantity="ghosting", unit="%"), off, WHERE) == (
        "no limit applies to ghosting: it is switched off"
    )
