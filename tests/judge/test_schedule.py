from datetime import date, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.judge.schedule import Schedule, completeness, days_overdue, due_day, missed_days
from qa.records import Event

MONDAY = date(2026, 3, 2)


def day(n):
    return MONDAY + timedelta(days=n)


WEEKLY = Schedule(7, 2)


def test_due_a_week_after_the_last_session_and_overdue_only_after_the_days_of_grace():
    assert due_day(WEEKLY, MONDAY) == day(7)
    assert [days_overdue(WEEKLY, MONDAY, day(n)) for n in (0, 7, 9, 10, 30)] == [0, 0, 0, 3, 23]


def test_a_scanner_never_measured_is_due_from_its_first_day_on():
    assert due_day(Schedule(7, 2), None) is None
    assert days_overdue(Schedule(7, 2), None, day(100)) == 0
    new = Schedule(7, 2, since=MONDAY)
    assert due_day(new, None) == MONDAY
    assert [days_overdue(new, None, day(n)) for n in (0, 2, 3)] == [0, 0, 3]


@pytest.mark.parametrize(
    ("downtimes", "due"),
    [
        (((day(3), day(5)),), day(10)),
        (((day(7), day(7)),), day(8)),
        (((day(8), day(9)),), day(7)),
        (((day(-3), day(2)),), day(9)),
        (((day(2), day(4)), (day(4), day(5)), (day(6), day(6))), day(12)),
        (((day(2), day(3)), (day(9), day(9))), day(10)),
        (((day(5), None),), date.max),
    ],
)
def test_planned_downtime_moves_the_due_day(downtimes, due):
    assert due_day(Schedule(7, 2, downtimes=downtimes), MONDAY) == due


def test_no_scanner_is_overdue_while_it_is_down():
    down = Schedule(7, 2, downtimes=((day(8), day(40)),))
    assert due_day(down, MONDAY) == day(7)
    assert [days_overdue(down, MONDAY, day(n)) for n in (8, 40, 41, 42, 43)] == [0, 0, 0, 0, 36]
    assert days_overdue(Schedule(7, 2, downtimes=((day(5), None),)), MONDAY, day(400)) == 0


def test_downtime_of_events_counts():
    visit = Event("north-3t", day(3), "downtime", "magnet service", until=day(4))
    note = Event("north-3t", day(5), "note", "coil cable dressed")
    assert due_day(WEEKLY.with_events([visit, note]), MONDAY) == day(9)


def test_missed_late_and_early_sessions():
    done = [day(0), day(7), day(24), day(28), day(38), day(45)]
    # Due on 14 and 21; the second came on 24, a day after its grace, so it is late. Due on 31, came early on 28; due on 35,
    # came on 38, late again.
    found = completeness(WEEKLY, done, day(0), day(45))
    assert [(d - MONDAY).days for d in found.missed] == [14, 21, 35]
    assert [(d - MONDAY).days for d in found.late] == [21, 35]
    assert (found.expected, found.done) == (7, 4)
    assert found.percent == pytest.approx(100 * 4 / 7)


def test_a_period_starts_from_the_session_before_it_and_ends_with_open_days_of_grace():
    done = [day(0), day(7), day(28)]
    assert missed_days(WEEKLY, done, day(10), day(27)) == (day(14), day(21))
    assert missed_days(WEEKLY, done, day(15), day(27)) == (day(21),)
    assert missed_days(WEEKLY, done, day(20), day(37)) == (day(21),)
    assert missed_days(WEEKLY, done, day(20), day(38)) == (day(21), day(35))
    assert missed_days(WEEKLY, [], day(0), day(100)) == ()
    assert completeness(WEEKLY, [], day(0), day(100)).percent == 100.0
    assert len(missed_days(Schedule(7, 2, since=day(0)), [], day(0), day(27))) == 4


@given(
    gaps=st.lists(st.integers(1, 40), max_size=20),
    downs=st.lists(st.tuples(st.integers(0, 200), st.integers(0, 30)), max_size=3),
    every=st.integers(1, 30),
    grace=st.integers(0, 10),
)
def test_overdue_and_missed_agree(gaps, downs, every, grace):
    schedule = Schedule(every, grace, downtimes=tuple((day(a), day(a + b)) for a, b in downs))
    n, done = 0, [day(0)]
    for gap in gaps:
        n += gap
        done.append(day(n))
    today = day(n + 50)
    found = completeness(schedule, done, day(0), today)
    assert found.expected == found.done + len(found.missed)
    assert set(found.late) <= set(found.missed)
    assert not any(schedule.down(d) for d in found.missed)
    if not schedule.down(today):
        due = due_day(schedule, done[-1])
        assert (days_overdue(schedule, done[-1], today) > 0) == (schedule.later(due, grace) < today)
    if max(gaps, default=0) <= every:
        assert all(d > done[-1] for d in found.missed)
