"""When a scanner is due, overdue, and which sessions it missed.

The next session is due `every_days` after the last one, and overdue when `grace_days` more have passed without it. A day of
planned downtime counts for nothing: it puts the due day off, and the end of the grace too. A scanner without a session is
due from the day on which its schedule begins.
"""

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from datetime import date, timedelta

from qa.site.tables import SiteScanner

__all__ = ["Away", "Due", "missed_days", "when_due"]

Away = tuple[date, date | None]
"""A period of planned downtime, both days included; no last day means until further notice."""

_DAY = timedelta(days=1)


@dataclass(frozen=True)
class Due:
    """The next session: the day on which it is due, and the last day on which it is not yet late; None: none is expected.

    `overdue` tells whether that last day has passed.
    """

    day: date | None
    last_day: date | None
    overdue: bool


def when_due(scanner: SiteScanner, sessions: Collection[date], today: date, *, begins: date, away: Sequence[Away] = ()) -> Due:
    """Tell when the next session of a scanner is due.

    Parameters
    ----------
    scanner : SiteScanner
        Its `every_days` and `grace_days`; its `since`, where given, comes before `begins`.
    sessions : collection of datetime.date
        Days on which it was measured; those after `today` do not count.
    today : datetime.date
        By the department's clock.
    begins : datetime.date
        Day on which the schedule begins for a scanner that states no `since`.
    away : sequence of (date, date or None)
        Its planned downtime.

    Returns
    -------
    Due
        No day where downtime without an end keeps it from ever being due.
    """
    held = [day for day in sessions if day <= today]
    day = _after(max(held), scanner.every_days, away) if held else _after((scanner.since or begins) - _DAY, 1, away)
    last_day = None if day is None else _after(day, scanner.grace_days, away)
    return Due(day, last_day, last_day is not None and last_day < today)


def missed_days(
    scanner: SiteScanner,
    sessions: Collection[date],
    first_day: date,
    last_day: date,
    today: date,
    *,
    begins: date,
    away: Sequence[Away] = (),
) -> tuple[date, ...]:
    """Give the days of a period on which a session was due and none was made within the days of grace.

    Parameters
    ----------
    first_day, last_day : datetime.date
        The period, both days included.
    scanner, sessions, today, begins, away
        As for `when_due`; sessions from before and after the period count.

    Returns
    -------
    tuple of datetime.date
        In order; a session that is due but not yet late is not missed.
    """
    held = sorted(day for day in sessions if day <= today)
    due = _after((scanner.since or begins) - _DAY, 1, away)
    missed: list[date] = []
    for session in [*held, None]:
        # Every day that fell due before this session and whose grace had run out by then; at the end, by today.
        while due is not None and due <= min(last_day, today):
            late = _after(due, scanner.grace_days, away)
            if late is None or late >= (session or today):
                break
            missed.append(due)
            due = _after(due, scanner.every_days, away)
        if session is not None:
            due = _after(session, scanner.every_days, away)
    return tuple(day for day in missed if day >= first_day)


def _after(day: date, count: int, away: Sequence[Away]) -> date | None:
    """Go on by a number of days, those of downtime not counted; None where downtime has no end."""
    for _ in range(count):
        following = _present(day + _DAY, away)
        if following is None:
            return None
        day = following
    return day


def _present(day: date, away: Sequence[Away]) -> date | None:
    """Give the first day, from one day on, that lies in no downtime; None where there is none."""
    while True:
        ends = [last for first, last in away if first <= day and (last is None or day <= last)]
        if not ends:
            return day
        if None in ends:
            return None
        day = max(end for end in ends if end is not None) + _DAY
