import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.judge.control import (
    LEARNING,
    QUARANTINE,
    REFERENCE,
    ControlRules,
    control_chart,
    first_outliers,
)

SERIES = np.random.default_rng(5).normal(100.0, 2.0, 140)
DAYS = 7 * np.arange(140)


def same(a, b):
    return np.allclose(a, b, rtol=1e-9, atol=1e-9, equal_nan=True)


def test_a_segment_learns_before_it_judges():
    short = control_chart(DAYS[:LEARNING], SERIES[:LEARNING])
    assert np.isnan(short.centre).all()
    assert not short.out.any()
    chart = control_chart(DAYS[: LEARNING + 1], SERIES[: LEARNING + 1])
    assert chart.centre[-1] == pytest.approx(SERIES[:LEARNING].mean())
    assert chart.reference[-1] == LEARNING
    # Prediction limits from ten values: Student's distribution with the error of the mean, widened by what autocorrelation
    # is allowed for; never as narrow as three standard deviations.
    assert chart.upper[-1] - chart.centre[-1] > 3 * SERIES[:LEARNING].std(ddof=1)


def test_limits_of_independent_sessions_are_exact_prediction_limits():
    # With the first ten alternating, the autocorrelation allowed for is 0, and the limits are mean +- t s sqrt(1 + 1/n)
    # with t of the same probability as three standard deviations.
    from scipy.stats import norm, t

    first = np.array([99.0, 101.0] * 5) + np.arange(10) / 100
    chart = control_chart(7 * np.arange(11), [*first, 100.0])
    assert chart.correlation[-1] == 0.0
    reach = t.isf(norm.sf(3), 9) * first.std(ddof=1) * np.sqrt(1.1)
    assert chart.upper[-1] - chart.centre[-1] == pytest.approx(reach, rel=0.005)


def test_the_reference_grows_for_two_years_and_then_stays():
    long = control_chart(7 * np.arange(300), np.random.default_rng(8).normal(0, 1, 300))
    assert long.reference[LEARNING] == LEARNING
    assert np.all(np.diff(long.reference[LEARNING:]) >= 0)
    assert np.unique(long.reference[REFERENCE + QUARANTINE :]).size == 1
    assert long.reference[-1] <= REFERENCE
    assert long.reference[-1] > 0.9 * REFERENCE


@settings(deadline=None, max_examples=40)
@given(st.integers(LEARNING + 1, 139))
def test_what_was_said_of_a_session_does_not_change_when_later_ones_come(length):
    whole, part = control_chart(DAYS, SERIES), control_chart(DAYS[:length], SERIES[:length])
    assert same(whole.upper[:length], part.upper)
    assert same(whole.smoothed[:length], part.smoothed)
    assert np.array_equal(whole.out[:length], part.out)


@settings(deadline=None, max_examples=25)
@given(factor=st.floats(1e-6, 1e6), offset=st.floats(-1e3, 1e3), flip=st.booleans())
def test_units_and_sign_do_not_matter(factor, offset, flip):
    scale = -factor if flip else factor
    chart, other = control_chart(DAYS, SERIES), control_chart(DAYS, scale * (SERIES + offset))
    assert np.allclose(chart.standardised, np.sign(scale) * other.standardised, rtol=1e-5, atol=1e-6, equal_nan=True)
    assert np.array_equal(chart.out, other.out)


def test_hertz_on_top_of_megahertz_are_not_lost():
    drift = np.random.default_rng(3).normal(0, 2e-6, 60)
    small, large = control_chart(DAYS[:60], drift), control_chart(DAYS[:60], 127.732 + drift)
    assert np.allclose(small.standardised, large.standardised, atol=1e-4, equal_nan=True)


def test_a_fault_is_found_and_not_learnt_as_normal():
    values = SERIES.copy()
    values[60:] -= 8.0
    chart = control_chart(DAYS, values)
    assert not chart.out[50:60].any()
    assert chart.out[60:].all()
    assert chart.centre[-1] == pytest.approx(SERIES[:60].mean(), abs=0.3)
    assert chart.tripped["ewma"][62:].all()
    assert np.array_equal(chart.out, np.any(list(chart.tripped.values()), axis=0))


def test_a_new_segment_starts_anew_without_an_alarm():
    values = SERIES.copy()
    values[60:] += 30.0
    chart = control_chart(DAYS, values, [0, 60])
    assert not chart.out[60:70].any()
    assert np.isnan(chart.centre[60:70]).all()
    assert chart.centre[75] == pytest.approx(130.0, abs=2.0)
    assert chart.segment.tolist() == [0] * 60 + [1] * 80
    assert not np.isnan(chart.centre[LEARNING:60]).any()


def test_one_crooked_session_among_the_first_is_set_aside():
    values = SERIES.copy()
    values[4] += 60.0
    assert first_outliers(values[:LEARNING]).tolist() == [i == 4 for i in range(LEARNING)]
    chart = control_chart(DAYS, values)
    assert chart.tripped["outlier"][4]
    assert chart.centre[LEARNING] == pytest.approx(np.delete(values[:LEARNING], 4).mean())
    assert chart.sigma[20] < 4.0


def test_a_frequency_that_never_moved_alarms_when_it_does_and_not_before():
    values = np.full(60, 63.866)
    assert not control_chart(DAYS[:60], values).out.any()
    values[50:] += 1e-6
    chart = control_chart(DAYS[:60], values)
    assert np.flatnonzero(chart.out)[0] == 50
    assert np.isfinite(chart.standardised[LEARNING:]).all()


def test_autocorrelation_is_seen_allowed_for_and_not_explained_away(make):
    rng = np.random.default_rng(2)
    found = {
        phi: np.mean([control_chart(make.weeks(140), x).correlation[-1] for x in make.ar1(rng, 60, 140, phi)])
        for phi in (0.0, 0.3, 0.9)
    }
    # One standard error, 0.1 for a hundred sessions, is added on purpose.
    assert found[0.0] < 0.15
    assert found[0.3] == pytest.approx(0.36, abs=0.06)
    assert found[0.9] == pytest.approx(0.4, abs=0.03)


def test_after_a_gap_the_smoothed_chart_forgets():
    values = np.full(40, 100.0) + np.random.default_rng(4).normal(0, 1, 40)
    values[30:33] += 2.5
    values[33] = values[:30].mean()
    weekly, year = 7 * np.arange(40), 7 * np.arange(40)
    year = np.where(np.arange(40) >= 33, year + 364, year)
    soon, later = control_chart(weekly, values), control_chart(year, values)
    assert soon.smoothed[33] > soon.centre[33] + 0.5
    assert later.smoothed[33] == pytest.approx(later.centre[33], abs=0.3)
    # The first session after it counts for itself alone: limits as wide as those of the smoothed chart's width in sigmas.
    assert later.smoothed_upper[33] - later.centre[33] > 1.5 * (soon.smoothed_upper[33] - soon.centre[33])


def test_a_day_early_or_late_changes_nothing():
    jitter = DAYS + np.random.default_rng(1).integers(-1, 2, DAYS.size)
    assert same(control_chart(DAYS, SERIES).smoothed, control_chart(jitter, SERIES).smoothed)


def test_every_rule_can_be_switched_on_and_off():
    values = SERIES.copy()
    values[70:] += 2.5
    quiet = control_chart(DAYS, values, rules=ControlRules(nelson=(), ewma=False))
    assert not quiet.out[LEARNING:].any()
    every = ControlRules(nelson=(1, 2, 3, 4, 5, 6, 7, 8), cusum=True, moving_range=True)
    chart = control_chart(DAYS, values, rules=every)
    assert {f"nelson-{n}" for n in range(1, 9)} | {"ewma", "cusum", "moving-range", "outlier"} == set(chart.tripped)
    assert chart.tripped["cusum"][80:].all()
    assert chart.tripped["nelson-2"][90:].any()
    values[100] += 20.0
    assert control_chart(DAYS, values, rules=every).tripped["moving-range"][100]
