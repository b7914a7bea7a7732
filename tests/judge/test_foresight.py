from datetime import timedelta

import numpy as np
import pytest

from qa.judge import forecast, onset, trend
from qa.judge.course import BROKEN, STEP, STRAIGHT, fit_course, spikes
from qa.judge.foresight import pettitt

RNG = np.random.default_rng(11)


def test_pettitts_statistic_is_the_sum_of_signs_it_is_defined_by():
    for seed in range(8):
        x = np.round(np.random.default_rng(seed).normal(0, 1, 25), 1 if seed % 2 else 6)
        sums = [np.sign(x[None, :t] - x[t:, None]).sum() for t in range(1, 25)]
        position, probability = pettitt(x)
        largest = abs(sums[position - 1])
        assert largest == max(np.abs(sums))
        assert probability == pytest.approx(min(1.0, 2 * np.exp(-6 * largest**2 / (25**3 + 25**2))))


def test_pettitts_test_is_not_too_free_with_alarms_and_finds_a_step():
    rng = np.random.default_rng(1)
    assert np.mean([pettitt(x)[1] < 0.05 for x in rng.standard_normal((2000, 40))]) <= 0.05
    stepped = rng.standard_normal(40)
    stepped[22:] += 3
    position, probability = pettitt(stepped)
    assert abs(position - 22) <= 1
    assert probability < 1e-4


def test_a_trend_is_in_units_a_year_whatever_the_spacing(make):
    days = make.first.toordinal() + np.cumsum(np.random.default_rng(2).integers(1, 20, 40))
    values = 100 + 3.0 * (days - days[0]) / 365.25
    found = trend(days, values)
    assert found.per_year == pytest.approx(3.0)
    assert found.real
    noisy = trend(days, values + np.random.default_rng(3).normal(0, 0.2, 40))
    assert noisy.lower < 3.0 < noisy.upper
    assert noisy.sessions == 40


def test_trends_need_ten_sessions_on_different_days_and_look_back_a_year(make):
    assert trend(make.weeks(9), np.arange(9.0)) is None
    assert trend(np.full(12, 738000), np.arange(12.0)) is None
    values = np.concatenate((np.arange(60.0), np.full(52, 60.0) + 0.1 * RNG.standard_normal(52)))
    assert not trend(make.weeks(112), values).real


def test_a_trend_is_called_real_by_chance_in_one_of_a_hundred_steady_histories(make):
    rng = np.random.default_rng(4)
    found = np.mean([trend(make.weeks(52), x).real for x in rng.standard_normal((1500, 52))])
    assert found <= 0.01 + 3 * np.sqrt(0.01 / 1500)


def test_the_forecast_of_a_clear_ramp_is_its_date_and_starts_from_the_mean(make):
    days = make.weeks(40)
    values = 100 - 0.5 * np.arange(40) + 0.2 * np.random.default_rng(5).standard_normal(40)
    found = forecast(days, values, 75.0, None)
    assert (found.rising, found.limit) == (False, 75.0)
    assert abs((found.crossing - make.first).days - 350) <= 4
    assert found.earliest <= found.crossing <= found.latest
    assert found.from_day == make.first + timedelta(weeks=39)
    assert found.from_value == pytest.approx(80.5, abs=0.2)


def test_no_forecast_away_from_the_limit_beyond_the_horizon_or_past_the_limit(make):
    days = make.weeks(40)
    values = 100 - 0.5 * np.arange(40) + 0.2 * np.random.default_rng(5).standard_normal(40)
    assert forecast(days, values, None, 105.0) is None
    assert forecast(days, values, 75.0, None, horizon_days=60) is None
    assert forecast(days, values, 90.0, None) is None
    assert forecast(days, values, None, None) is None


def test_kinds_of_course_are_told_apart():
    rng = np.random.default_rng(6)
    t = 7.0 * np.arange(50)
    noise = rng.normal(0, 0.5, 50)
    line = fit_course(t, 0.2 * np.arange(50) + noise, straight=True)
    broken = fit_course(t, 0.4 * np.maximum(0, np.arange(50) - 25) + noise, straight=True)
    stepped = fit_course(t, 5.0 * (np.arange(50) >= 30) + noise, straight=True)
    assert line.probability(STRAIGHT) > 0.8
    assert broken.probability(BROKEN) > 0.95
    assert stepped.probability(STEP) > 0.95
    assert line.weight.sum() == pytest.approx(1.0)
    assert broken.scatter == pytest.approx(0.5, rel=0.2)


def test_a_straight_line_is_the_least_squares_line_of_numpy():
    rng = np.random.default_rng(7)
    t, x = 7.0 * np.arange(30), rng.normal(0, 1, 30) + 0.1 * np.arange(30)
    course = fit_course(t, x, straight=True)
    slope, level = np.polyfit(t, x, 1)
    assert course.change[0] == pytest.approx(slope * t[-1])
    assert course.level[0] == pytest.approx(level)


def test_the_chance_of_being_beyond_is_one_half_where_the_line_meets_the_limit():
    t = 7.0 * np.arange(60)
    course = fit_course(t, 0.1 * np.arange(60) + 0.3 * np.random.default_rng(8).standard_normal(60), straight=True)
    ahead = t[-1] + 7.0 * np.arange(80)
    chance = course.beyond(8.0, rising=True, days=ahead)
    assert np.all(np.diff(chance) >= -1e-9)
    assert abs(np.interp(0.5, chance, ahead) - 560) < 45
    assert np.allclose(course.beyond(8.0, rising=True, days=ahead) + course.beyond(8.0, rising=False, days=ahead), 1.0)


def test_odd_sessions_are_left_out_of_fits_and_beginnings_are_not():
    x = np.random.default_rng(9).normal(0, 1, 40)
    x[17] += 30
    x[38:] += 30
    assert np.flatnonzero(spikes(x)).tolist() == [17]
    assert not spikes(np.ones(12)).any()
    stepped = np.concatenate((np.zeros(20), np.full(20, 50.0))) + np.random.default_rng(9).normal(0, 1, 40)
    assert not spikes(stepped).any()


def test_an_onset_needs_a_change_or_an_alarm(make):
    steady = np.random.default_rng(10).standard_normal(60)
    assert onset(make.weeks(60), steady) is None
    assert onset(make.weeks(9), steady[:9], alarmed=True) is None
    fallen = steady.copy()
    fallen[40:] -= 6
    found = onset(make.weeks(60), fallen)
    assert found.kind == "step"
    assert found.begun == make.first + timedelta(weeks=40)
    assert found.change == pytest.approx(-6, abs=0.7)
    assert found.probability > 0.9


def test_a_ramp_that_is_older_than_the_history_says_so(make):
    values = 0.3 * np.arange(60) + np.random.default_rng(12).standard_normal(60)
    found = onset(make.weeks(60), values)
    assert (found.kind, found.before_history) == ("ramp", True)
    assert found.earliest == make.first


def test_a_history_without_scatter_is_no_trouble(make):
    days = make.weeks(40)
    flat = np.full(40, 63.866)
    assert not trend(days, flat).real
    assert onset(days, flat) is None
    jump = np.where(np.arange(40) < 25, 1.0, 2.0)
    assert onset(days, jump).begun == make.first + timedelta(weeks=25)
    line = 1.0 * np.arange(40)
    found = forecast(days, line, None, 50.0)
    assert abs((found.crossing - make.first).days - 350) <= 3
    assert found.latest - found.earliest < timedelta(days=7)
