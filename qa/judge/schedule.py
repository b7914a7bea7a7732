"""When a scanner is due, whether it is overdue, and which sessions were missed; planned downtime does not count."""

from collections import deque
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from functools import cached_property

from qa.records import Event

__all__ = ["Completeness", "Schedule", "completeness", "days_overdue", "due_day", "missed_days"]

_DAY = timedelta(days=1)


@dataclass(frozen=True)
class Schedule:
    """How often a scanner is expected, and when it is not.

    Attributes
    ----------
    every_days, grace_days : int
        Days between sessions, and days that one may come late.
    since : datetime.date or None
        First day on which the scanner is expected; None: from its first session on.
    downtimes : tuple of (datetime.date, datetime.date or None)
        First and last day of planned downtime, both included; None: until further notice.
    """

    every_days: int = 7
    grace_days: int = 2
    since: date | None = None
    downtimes: tuple[tuple[date, date | None], ...] = ()

    def with_events(self, events: Iterable[Event]) -> "Schedule":
        """Add the downtime that events record; one without a last day is a single day."""
        more = tuple((e.day, e.until or e.day) for e in events if e.kind == "downtime")
        return Schedule(self.every_days, self.grace_days, self.since, self.downtimes + more)

    def down(self, day: date) -> bool:
        """Tell whether a day belongs to planned downtime."""
        return any(first <= day <= (last or date.max) for first, last in self.downtimes)

    def later(self, day: date, days: int) -> date:
        """Give the day that lies so many days that count after another; `date.max` where downtime has no end."""
        for first, last in self._spans:
            if last <= day:
                continue
            between = max((first - day).days - 1, 0)
            if days <= between:
                break
            if last == date.max:
                return date.max
            day, days = last, days - between
        return day + timedelta(days=days)

    @cached_property
    def _spans(self) -> list[tuple[date, date]]:
        """Give the downtimes in order, such as touch or overlap made one."""
        spans: list[tuple[date, date]] = []
        for first, end in sorted((f, e or date.max) for f, e in self.downtimes):
            if spans and (spans[-1][1] == date.max or first <= spans[-1][1] + _DAY):
                spans[-1] = (spans[-1][0], max(spans[-1][1], end))
            else:
                spans.append((first, end))
        return spans


@dataclass(frozen=True)
class Completeness:
    """How much of a schedule was kept over a period.

    Attributes
    ----------
    expected : int
        Days in the period on which a session was due.
    done : int
        Those for which one came in time.
    missed : tuple of datetime.date
        Those for which none came within the days of grace.
    late : tuple of datetime.date
        Those of the missed days for which one came after all, before the next was nearer.
    """

    expected: int
    done: int
    missed: tuple[date, ...]
    late: tuple[date, ...] = ()

    @property
    def percent(self) -> float:
        """Share of the expected sessions that were made."""
        return 100.0 * self.done / self.expected if self.expected else 100.0


def due_day(schedule: Schedule, last_session: date | None) -> date | None:
    """Day on which the next session is due; None where the scanner has neither a session nor a first day."""
    if last_session is None:
        return None if schedule.since is None else _first_due(schedule)
    return schedule.later(last_session, schedule.every_days)


def days_overdue(schedule: Schedule, last_session: date | None, today: date) -> int:
    """Days by which a session is late, counted from the day it was due; 0 within its days of grace and during downtime."""
    due = due_day(schedule, last_session)
    if due is None or due == date.max or schedule.down(today):
        return 0
    return (today - due).days if today > schedule.later(due, schedule.grace_days) else 0


def completeness(schedule: Schedule, sessions: Sequence[date], first: date, last: date) -> Completeness:
    """Hold the sessions of a period against a schedule.

    Parameters
    ----------
    schedule : Schedule
        What is expected.
    sessions : sequence of datetime.date
        Days of all sessions, also those before the period: the one before it tells when the first in it was due.
    first, last : datetime.date
        The period, both days included. A session whose days of grace are not over on the last day is not missed yet.

    Returns
    -------
    Completeness
        Each session makes the next due `every_days` later.
    """
    days = sorted({day for day in sessions if day <= last})
    before = [day for day in days if day < first]
    if before:
        due = schedule.later(before[-1], schedule.every_days)
    elif schedule.since is not None:
        due = _first_due(schedule)
    elif days:
        due = days[0]
    else:
        return Completeness(0, 0, ())
    coming = deque(days[len(before) :])
    done = 0
    missed: list[date] = []
    late: list[date] = []
    while due <= last or coming:
        latest = schedule.later(due, schedule.grace_days)
        if coming and coming[0] <= latest:
            done += 1
            due = schedule.later(coming.popleft(), schedule.every_days)
        elif latest >= last:
            break
        else:
            missed.append(due)
            following = schedule.later(due, schedule.every_days)
            if coming and coming[0] - due < following - coming[0]:
                late.append(due)
                following = schedule.later(coming.popleft(), schedule.every_days)
            due = following
    inside = tuple(day for day in missed if day >= first)
    return Completeness(done + len(inside), done, inside, tuple(day for day in late if day >= first))


def missed_days(schedule: Schedule, sessions: Sequence[date], first: date, last: date) -> tuple[date, ...]:
    """Days in a period on which a session was due and none came within its days of grace, as `completeness` finds them."""
    return completeness(schedule, sessions, first, last).missed


def _first_due(schedule: Schedule) -> date:
    since = schedule.since or date.max
    return schedule.later(since - _DAY, 1) if since > date.min else since
