from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import pytest

from qa.judge import NoBaseline, baseline_for, baseline_from, in_force, propose_baseline
from qa.judge.baseline import robust_scatter
from qa.judge.limits import Context
from qa.judge.streams import SegmentStart
from qa.records import Baseline, Event

DAY = date(2024, 3, 4)


@pytest.mark.parametrize("count", [2, 3, 4, 5, 6, 7, 8, 9, 10, 15, 25])
def test_the_robust_scatter_is_unbiased_for_normal_values(count):
    rng = np.random.default_rng(count)
    found = [robust_scatter(x) for x in rng.normal(50, 3, (8000, count))]
    assert np.mean(found) == pytest.approx(3.0, abs=4 * np.std(found) / np.sqrt(8000) + 0.03)


def test_median_and_scatter_stand_one_odd_session_and_the_uncertainty_is_the_medians():
    rng = np.random.default_rng(1)
    values = rng.normal(200, 2, (4000, 10))
    found = [baseline_from(x, np.full(10, 0.5)) for x in values]
    spread = np.std([f[0] for f in found])
    # The formula is that of many sessions; with ten it is 6 % on the safe side.
    assert np.mean([f[1] for f in found]) == pytest.approx(1.06 * spread, rel=0.03)
    odd = values[0].copy()
    odd[3] = 20.0
    assert baseline_from(odd, np.full(10, 0.5))[0] == pytest.approx(np.median(values[0]), abs=1.0)


def test_sessions_that_agree_by_chance_keep_their_own_uncertainty():
    value, u, scatter = baseline_from([100.0] * 4, [2.0] * 4)
    assert (value, scatter) == (100.0, 0.0)
    assert u == pytest.approx(2.0 * np.sqrt(np.pi / 2 / 4))


@pytest.mark.parametrize(("values", "count"), [([], "no session"), ([5.0], "one session")])
def test_one_session_is_no_baseline(values, count):
    found = baseline_from(values, values)
    assert isinstance(found, NoBaseline)
    assert f"cannot be taken from {count}" in found.reason


def test_the_first_accepted_sessions_make_the_baseline(make):
    stream = make.stream(100.0 + np.arange(20))
    accepted = [date.fromordinal(int(d)) for d in stream.days if d != stream.days[1]]
    found = propose_baseline(stream, accepted, 5)
    # 100, 102, 103, 104, 105: the second was not accepted.
    assert (found.value, found.sessions, found.since) == (103.0, 5, make.first)
    assert found.method == "median of 5 accepted sessions, 2024-01-01 to 2024-02-05"
    assert found.scatter == pytest.approx(1.4826 * 1.206 * 1.0)
    later = propose_baseline(stream, accepted, 5, since=make.first + timedelta(weeks=10))
    assert (later.value, later.since) == (112.0, make.first + timedelta(weeks=10))


def test_too_few_accepted_sessions_say_how_many_are_missing(make):
    stream = make.stream(100.0 + np.arange(20))
    found = propose_baseline(stream, [make.first, make.first + timedelta(weeks=2), date(2023, 1, 1)], 10)
    assert found.reason == (
        "2 of 10 sessions of snr since 2024-01-01 are accepted: accept 8 more, or set the baseline by hand"
    )
    assert "cannot be taken from one session" in propose_baseline(stream, [make.first], 1).reason


def test_a_new_segment_needs_a_new_baseline(make):
    stream = make.stream(100.0 + np.arange(20))
    start = make.first + timedelta(weeks=15)
    stream = make.replace(stream, starts=(*stream.starts, SegmentStart(15, start, "the receive coil changed")))
    accepted = [date.fromordinal(int(d)) for d in stream.days]
    assert propose_baseline(stream, accepted, 5).since == start
    assert "5 of 10 sessions of snr since 2024-04-15" in propose_baseline(stream, accepted, 10).reason


def test_a_name_with_wildcards_in_it_fits_itself_alone(make):
    stream = make.replace(make.stream(100.0 + np.arange(20)), protocol="QA [1]*", coil="Head?")
    found = propose_baseline(stream, [date.fromordinal(int(d)) for d in stream.days], 5)
    where = Context("north-3t", "sphere-170", stream.last_day, coil="Head?", protocol="QA [1]*")
    assert baseline_for([found], "snr", where) is found
    assert baseline_for([found], "snr", replace(where, coil="HeadX")) is None


def test_only_an_event_that_says_so_ends_a_baseline_and_only_of_what_it_concerns():
    snr = Baseline("north-3t", "snr", 200.0, 1.0, 2.0, 10, DAY)
    ghosting = replace(snr, quantity="ghosting")
    south = replace(snr, scanner_name="south")
    fresh = replace(snr, since=DAY + timedelta(days=30))
    every = (snr, ghosting, south, fresh)
    visit = Event("north-3t", DAY + timedelta(days=30), "repair", "coil repaired", ("snr",), restarts_baseline=True)
    after = DAY + timedelta(days=40)
    assert in_force(every, [visit], after) == (ghosting, south, fresh)
    assert in_force(every, [visit], DAY + timedelta(days=29)) == every
    assert in_force(every, [replace(visit, restarts_baseline=False)], after) == every
    assert in_force(every, [replace(visit, quantities=())], after) == (south, fresh)
