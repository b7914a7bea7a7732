"""Histories of known truth, 1,000 each: what the control state and foresight promise."""

from datetime import date

import numpy as np
import pytest

from qa.judge import FALSE_ALARM_RATE, Grounds, control_chart, forecast, onset
from qa.judge.control import LEARNING
from qa.judge.quantity import quantity_state
from qa.records import Limit

HISTORIES = 1000


def first_alarm(alarms):
    """Sessions until the first alarm, (n, m) bool; the first session counts 1."""
    return np.where(alarms.any(axis=1), alarms.argmax(axis=1) + 1, alarms.shape[1] + 1)


@pytest.mark.parametrize("correlation", [0.0, 0.3])
def test_false_alarms_come_at_the_stated_rate(make, correlation):
    series = make.ar1(np.random.default_rng(20), HISTORIES, 156, correlation)
    out = np.array([control_chart(make.weeks(156), x).out for x in series])
    starts = (out[:, LEARNING:] & ~out[:, LEARNING - 1 : -1]).sum(axis=1)
    rate = starts.mean() / (156 - LEARNING)
    error = starts.std(ddof=1) / np.sqrt(HISTORIES) / (156 - LEARNING)
    print(f"\nautocorrelation {correlation}: {rate:.5f} +- {error:.5f} a session, stated {FALSE_ALARM_RATE[correlation]}")
    assert rate == pytest.approx(FALSE_ALARM_RATE[correlation], abs=3 * error)
    assert error < 0.1 * rate


@pytest.mark.parametrize(("correlation", "bar"), [(0.0, 4.0), (0.3, 6.0)])
def test_a_step_of_two_standard_deviations_is_found_within_four_sessions(make, correlation, bar):
    # After a year and a half of history. With an autocorrelation of 0.3 there is less to tell the step by; the bar is for
    # independent sessions, and what is reached there is held fast.
    at, after = 78, 60
    series = make.ar1(np.random.default_rng(21), HISTORIES, at + after, correlation)
    series[:, at:] += 2.0
    out = np.array([control_chart(make.weeks(at + after), x).out for x in series])
    fresh = ~out[:, at - 4 : at].any(axis=1)
    delay = first_alarm(out[fresh, at:])
    print(f"\nautocorrelation {correlation}: a step of 2 sd is found after {delay.mean():.2f} sessions on average")
    assert delay.mean() <= bar


@pytest.mark.parametrize("correlation", [0.0, 0.3])
def test_a_slow_ramp_is_flagged_eight_sessions_ahead(make, correlation):
    # The limit lies 4 to 10 standard deviations off and is reached a year of weeks after the ramp begins, which it does after
    # none to two years of steady history. "Flagged" is what makes a scanner drifting, eight sessions before the limit.
    rng = np.random.default_rng(22)
    flagged = 0
    for _ in range(HISTORIES):
        distance, steady = rng.uniform(4, 10), int(rng.integers(0, 105))
        count = steady + 52 - 8 + 1
        values = 100 + make.ar1(rng, 1, count, correlation)[0] - distance * np.maximum(0, np.arange(count) - steady) / 52
        limits = (Limit("snr", lower=100 - distance),)
        stream = make.stream(values, limits)
        state = quantity_state(stream, Grounds(limits), stream.last_day)
        flagged += bool(state.drifting) or state.out
    print(f"\nautocorrelation {correlation}: {100 * flagged / HISTORIES:.1f} % of ramps flagged eight sessions ahead")
    assert flagged >= 0.9 * HISTORIES


def test_a_steady_quantity_is_hardly_ever_called_drifting(make):
    rng = np.random.default_rng(23)
    called = 0
    for _ in range(HISTORIES):
        distance = rng.uniform(4, 10)
        limits = (Limit("snr", lower=100 - distance),)
        stream = make.stream(100 + make.ar1(rng, 1, int(rng.integers(12, 157)), 0.3)[0], limits)
        called += bool(quantity_state(stream, Grounds(limits), stream.last_day).drifting)
    print(f"\n{called} of {HISTORIES} steady histories are called drifting")
    assert called <= 0.01 * HISTORIES


@pytest.mark.parametrize("correlation", [0.0, 0.3])
def test_the_forecast_interval_holds_the_true_date(make, correlation):
    rng = np.random.default_rng(24)
    held: list[bool] = []
    asked = 0
    while len(held) < HISTORIES:
        distance, steady = rng.uniform(4, 10), int(rng.integers(0, 105))
        asked += 1
        count = steady + int(rng.integers(8, 49)) + 1
        days = make.weeks(count)
        values = make.ar1(rng, 1, count, correlation)[0] + distance * np.maximum(0, np.arange(count) - steady) / 52
        found = forecast(days, values, None, distance)
        if found is not None:
            truth = date.fromordinal(int(days[0]) + 7 * (steady + 52))
            held.append(found.earliest <= truth <= found.latest)
    print(f"\nautocorrelation {correlation}: {100 * np.mean(held):.1f} % hold the true date; given in {len(held)} of {asked}")
    assert np.mean(held) == pytest.approx(0.90, abs=0.04)


@pytest.mark.parametrize("correlation", [0.0, 0.3])
def test_no_date_is_foretold_where_nothing_leads_there(make, correlation):
    rng = np.random.default_rng(25)
    steady = jumped = 0
    for _ in range(HISTORIES):
        values = make.ar1(rng, 1, 70, correlation)[0]
        steady += forecast(make.weeks(70), values, -5.0, 5.0) is not None
        values[45:] += 2.5
        jumped += forecast(make.weeks(70), values, None, 5.0) is not None
    print(f"\nautocorrelation {correlation}: a date for {steady} steady and {jumped} stepped histories of {HISTORIES}")
    assert steady <= 0.01 * HISTORIES
    # A date is given where a jump is held less likely than 5 %.
    assert jumped <= 0.05 * HISTORIES


@pytest.mark.parametrize(("kind", "size", "after"), [("step", 2.0, 12), ("step", 5.0, 6), ("ramp", 6.0, 26)])
def test_the_interval_of_the_onset_holds_it(make, kind, size, after):
    rng = np.random.default_rng(26)
    held, right = [], []
    for _ in range(500):
        steady = int(rng.integers(20, 60))
        index = np.arange(steady + after)
        course = size * (index >= steady) if kind == "step" else size * np.maximum(0, index - steady) / (after - 1)
        days = make.weeks(index.size)
        found = onset(days, make.ar1(rng, 1, index.size, 0.0)[0] + course, alarmed=True)
        truth = date.fromordinal(int(days[steady]))
        held.append(found.earliest <= truth <= found.latest)
        right.append(found.kind == kind)
    print(f"\n{kind} of {size} sd: {100 * np.mean(held):.1f} % hold the onset; kind right in {100 * np.mean(right):.0f} %")
    # Dates are whole sessions, so an interval of at least 90 % holds more.
    assert np.mean(held) >= 0.88
    if size > 3:
        assert np.mean(right) >= 0.9
