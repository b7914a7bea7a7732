from datetime import date, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.site import Due, SiteScanner, missed_days, when_due

DAY = timedelta(days=1)
MONDAY = date(2026, 3, 2)
BEGINS = date(2026, 1, 5)


def scanner(every=7, grace=2, **other):
    return SiteScanner(name="n", match={"station": "N"}, field_strength_T=3.0, every_days=every, grace_days=grace, **other)


@pytest.mark.parametrize(("today", "overdue"), [(MONDAY, False), (MONDAY + 9 * DAY, False), (MONDAY + 10 * DAY, True)])
def test_a_scanner_is_overdue_after_its_days_of_grace(today, overdue):
    found = when_due(scanner(), [MONDAY - 7 * DAY, MONDAY], today, begins=BEGINS)
    assert found == Due(MONDAY + 7 * DAY, MONDAY + 9 * DAY, overdue)


def test_a_scanner_without_a_session_is_due_when_its_schedule_begins():
    assert when_due(scanner(), [], MONDAY, begins=BEGINS) == Due(BEGINS, BEGINS + 2 * DAY, overdue=True)
    late = scanner(since=date(2026, 3, 1))
    assert when_due(late, [], MONDAY, begins=BEGINS) == Due(date(2026, 3, 1), date(2026, 3, 3), overdue=False)


def test_a_session_dated_after_today_does_not_count():
    assert when_due(scanner(), [MONDAY, MONDAY + 300 * DAY], MONDAY, begins=BEGINS).day == MONDAY + 7 * DAY


def test_downtime_puts_off_the_due_day_and_the_grace():
    week = [(MONDAY + 3 * DAY, MONDAY + 9 * DAY)]
    assert when_due(scanner(), [MONDAY], MONDAY, begins=BEGINS, away=week).day == MONDAY + 14 * DAY
    inside_grace = [(MONDAY + 8 * DAY, MONDAY + 12 * DAY)]
    found = when_due(scanner(), [MONDAY], MONDAY, begins=BEGINS, away=inside_grace)
    assert (found.day, found.last_day) == (MONDAY + 7 * DAY, MONDAY + 14 * DAY)


def test_downtime_without_an_end_keeps_it_from_being_due():
    assert when_due(scanner(), [MONDAY], MONDAY + 500 * DAY, begins=BEGINS, away=[(MONDAY, None)]) == Due(
        None, None, overdue=False
    )
    assert (
        missed_days(scanner(), [MONDAY], BEGINS, MONDAY + 99 * DAY, MONDAY + 99 * DAY, begins=MONDAY, away=[(MONDAY, None)])
        == ()
    )


def test_overlapping_downtimes_count_once():
    away = [(MONDAY + 1 * DAY, MONDAY + 4 * DAY), (MONDAY + 3 * DAY, MONDAY + 7 * DAY)]
    assert when_due(scanner(), [MONDAY], MONDAY, begins=BEGINS, away=away).day == MONDAY + 14 * DAY


def test_two_missed_weeks_are_named():
    held = [MONDAY + 7 * n * DAY for n in range(10) if n not in {3, 4}]
    end = MONDAY + 69 * DAY
    wanted = (MONDAY + 21 * DAY, MONDAY + 28 * DAY)
    assert missed_days(scanner(), held, MONDAY, end, end, begins=MONDAY) == wanted
    assert missed_days(scanner(), held, MONDAY + 25 * DAY, end, end, begins=MONDAY) == wanted[1:]
    assert missed_days(scanner(), held, MONDAY, MONDAY + 25 * DAY, end, begins=MONDAY) == wanted[:1]


def test_a_session_on_the_last_day_of_grace_is_in_time_and_moves_the_next():
    held = [MONDAY, MONDAY + 9 * DAY]
    assert missed_days(scanner(), held, MONDAY, MONDAY + 18 * DAY, MONDAY + 18 * DAY, begins=MONDAY) == ()
    assert when_due(scanner(), held, MONDAY + 18 * DAY, begins=MONDAY).day == MONDAY + 16 * DAY
    assert missed_days(
        scanner(), [MONDAY, MONDAY + 10 * DAY], MONDAY, MONDAY + 12 * DAY, MONDAY + 12 * DAY, begins=MONDAY
    ) == (MONDAY + 7 * DAY,)


def test_what_is_due_but_not_yet_late_is_not_missed():
    today = MONDAY + 9 * DAY
    assert missed_days(scanner(), [MONDAY], MONDAY, today, today, begins=MONDAY) == ()
    assert missed_days(scanner(), [MONDAY], MONDAY, MONDAY + 7 * DAY, MONDAY + 10 * DAY, begins=MONDAY) == (MONDAY + 7 * DAY,)


def test_a_year_without_a_session_misses_every_week():
    end = MONDAY + 364 * DAY
    assert missed_days(scanner(), [MONDAY], MONDAY, end, end, begins=MONDAY) == tuple(
        MONDAY + 7 * n * DAY for n in range(1, 52)
    )


DAYS = st.integers(0, 400).map(lambda n: BEGINS + n * DAY)
AWAY = st.lists(st.tuples(DAYS, st.integers(0, 40)).map(lambda p: (p[0], p[0] + p[1] * DAY)), max_size=4)


@given(held=st.sets(DAYS, max_size=30), today=DAYS, away=AWAY, every=st.integers(1, 30), grace=st.integers(0, 10))
def test_overdue_and_missed_agree(held, today, away, every, grace):
    one = scanner(every, grace)
    found = when_due(one, held, today, begins=BEGINS, away=away)
    missed = missed_days(one, held, BEGINS, today, today, begins=BEGINS, away=away)
    assert found.overdue == (found.day in missed)
    assert found.last_day >= found.day
    assert not any(first <= day <= last for first, last in away for day in (*missed, found.day))
    assert set(missed).isdisjoint(held)
    assert list(missed) == sorted(set(missed))


@given(held=st.sets(DAYS, min_size=1, max_size=30), more=DAYS, today=DAYS)
def test_one_more_session_costs_at_most_one_more_missed(held, more, today):
    count = [len(missed_days(scanner(), days, BEGINS, today, today, begins=BEGINS)) for days in (held, held | {more})]
    assert count[1] <= count[0] + 1
