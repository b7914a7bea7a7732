"""What a fleet report is made from, and how it is gathered from each scanner's assessment."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Literal

import numpy as np

from qa.judge import Assessment, Completeness, FleetRow, QuantityState, Schedule, completeness, is_out
from qa.records import Event, Session
from qa.report.content import CAUTIONS, PageSize, Standing
from qa.report.numbers import long_date
from qa.report.words import sentence

__all__ = [
    "Episode",
    "FleetReport",
    "FleetScanner",
    "Week",
    "WeekState",
    "episodes_of",
    "fleet_scanner",
    "mondays",
    "weeks_of",
]

WeekState = Literal["within limits", "control alarm", "out of limits", "missed", "downtime", "not due"]

_REMEDIES = {"service", "repair", "replacement", "upgrade", "calibration", "protocol change"}
_STALE_DAYS = 120
_WEEK = timedelta(days=7)


@dataclass(frozen=True)
class Week:
    """The state of a scanner in the week that begins on a Monday."""

    monday: date
    state: WeekState


@dataclass(frozen=True)
class Episode:
    """A row of sessions out of a limit.

    Attributes
    ----------
    scanner, quantity, phantom, unit : str
        What was out.
    began, ended : date or None
        First session that was out, and first that was good again; None while it lasts.
    sessions : int
        How many were out.
    worst : float
        The value farthest beyond the limit.
    expanded : float
        Its expanded uncertainty.
    limit : str
        The limit's sentence at the time.
    cause : str
        What is held to be the cause, or what was done; empty where nothing is known.
    """

    scanner: str
    quantity: str
    phantom: str
    unit: str
    began: date
    ended: date | None
    sessions: int
    worst: float
    expanded: float
    limit: str
    cause: str = ""


@dataclass(frozen=True)
class FleetScanner:
    """One scanner over the period.

    `expected`, `made` and `missed` count sessions that were due, those of them that were made, and those that were not.
    """

    name: str
    description: str
    standing: Standing
    sentence: str
    last_session: date | None
    next_due: date | None
    expected: int
    made: int
    missed: tuple[date, ...]
    weeks: tuple[Week, ...]
    episodes: tuple[Episode, ...] = ()


@dataclass(frozen=True)
class FleetReport:
    """All scanners of a department over a period; `comparison` holds scanners of one model against each other."""

    department: str
    first_day: date
    last_day: date
    scanners: tuple[FleetScanner, ...]
    software_version: str
    limits_version: int
    limits_sha256: str
    record_head: str
    as_of: date
    comparison: tuple[FleetRow, ...] = ()
    page_size: PageSize = "A4"
    cautions: tuple[str, ...] = CAUTIONS


def mondays(first: date, last: date) -> list[date]:
    """List the Mondays of the weeks that a period touches."""
    monday = first - timedelta(days=first.weekday())
    return [monday + n * _WEEK for n in range((last - monday).days // 7 + 1)]


def _latest_at(state: QuantityState, day: int) -> int | None:
    """Index of a stream's last value up to a day; None where there is none, or it is too old to speak for the scanner."""
    index = int(np.searchsorted(state.stream.days, day, side="right")) - 1
    return index if index >= 0 and day - int(state.stream.days[index]) <= _STALE_DAYS else None


def _state_at(assessment: Assessment, day: date) -> WeekState:
    """Tell how a scanner stood on a day with a session: by the latest value of each of its streams that has a limit."""
    alarm = False
    for state in assessment.quantities:
        index = _latest_at(state, day.toordinal())
        if index is None:
            continue
        verdict = state.stream.verdicts[index]
        if verdict is None:
            continue
        if is_out(verdict.conformity):
            return "out of limits"
        alarm = alarm or bool(state.chart.out[index])
    return "control alarm" if alarm else "within limits"


def weeks_of(
    assessment: Assessment, days: Sequence[date], schedule: Schedule, missed: Iterable[date], *, first: date, last: date
) -> tuple[Week, ...]:
    """Tell how a scanner stood in each week of a period.

    A week with a session has the state of its last; one without is *missed* where a due session was not made in it, else
    *downtime* or *not due*.

    Parameters
    ----------
    assessment : Assessment
        Of the scanner, on the last day of the period or later.
    days : sequence of date
        Days of its sessions.
    schedule : Schedule
        With downtime.
    missed : iterable of date
        Days on which a session was due and not made.
    first, last : date
        The period.
    """
    of_week = {day - timedelta(days=day.weekday()): day for day in sorted(days) if first <= day <= last}
    missing = {day - timedelta(days=day.weekday()) for day in missed}
    weeks = []
    for monday in mondays(first, last):
        state: WeekState
        if monday in of_week:
            state = _state_at(assessment, of_week[monday])
        elif monday in missing:
            state = "missed"
        elif any(schedule.down(monday + timedelta(days=n)) for n in range(7)):
            state = "downtime"
        else:
            state = "not due"
        weeks.append(Week(monday, state))
    return tuple(weeks)


def _beyond(state: QuantityState, index: int) -> float:
    verdict, value = state.stream.verdicts[index], float(state.stream.values[index])
    if verdict is None:
        return 0.0
    over = value - verdict.upper if verdict.upper is not None else -np.inf
    under = verdict.lower - value if verdict.lower is not None else -np.inf
    return float(max(over, under))


def _cause(assessment: Assessment, events: Iterable[Event], quantity: str, began: date, ended: date | None) -> str:
    """Name the cause of an episode: while it lasts the likeliest, afterwards what was done last before it was over."""
    if ended is None:
        return sentence(assessment.causes[0].sentence, "Look first at").partition(". ")[0] if assessment.causes else ""
    done = [
        event
        for event in events
        if event.kind in _REMEDIES and began <= event.day <= ended and (not event.quantities or quantity in event.quantities)
    ]
    if not done:
        return ""
    last = max(done, key=lambda event: event.day)
    return f"over after {last.kind} on {long_date(last.day)}: {sentence(last.text)}"


def episodes_of(assessment: Assessment, events: Iterable[Event], first: date, last: date) -> tuple[Episode, ...]:
    """Find the rows of sessions out of limits that touch a period, in order of their beginning."""
    events = [event for event in events if event.scanner_name == assessment.scanner_name]
    found = []
    for state in assessment.quantities:
        stream = state.stream
        out = [verdict is not None and is_out(verdict.conformity) for verdict in stream.verdicts]
        start = 0
        while start < len(out):
            if not out[start]:
                start += 1
                continue
            stop = start
            while stop < len(out) and out[stop]:
                stop += 1
            began = date.fromordinal(int(stream.days[start]))
            ended = date.fromordinal(int(stream.days[stop])) if stop < len(out) else None
            if began <= last and (ended is None or ended >= first):
                worst = max(range(start, stop), key=lambda index: _beyond(state, index))
                verdict = stream.verdicts[worst]
                found.append(
                    Episode(
                        scanner=assessment.scanner_name,
                        quantity=stream.quantity,
                        phantom=stream.phantom,
                        unit=stream.unit,
                        began=began,
                        ended=ended,
                        sessions=stop - start,
                        worst=float(stream.values[worst]),
                        expanded=2 * float(stream.uncertainties[worst]),
                        limit=verdict.limit if verdict else "",
                        cause=_cause(assessment, events, stream.quantity, began, ended),
                    )
                )
            start = stop
    return tuple(sorted(found, key=lambda episode: (episode.began, episode.quantity, episode.phantom)))


def fleet_scanner(
    assessment: Assessment,
    sessions: Iterable[Session],
    *,
    schedule: Schedule,
    events: Iterable[Event],
    first: date,
    last: date,
    description: str = "",
) -> FleetScanner:
    """Gather what a fleet report says of one scanner.

    Parameters
    ----------
    assessment : Assessment
        As of the day of the report.
    sessions : iterable of Session
        All of the scanner's.
    schedule : Schedule
        Without the downtime that events record: it is added here.
    events : iterable of Event
        Of the scanner; those of others do no harm.
    first, last : date
        The period.
    description : str
        Model, field strength and place.
    """
    events = [event for event in events if event.scanner_name == assessment.scanner_name]
    schedule = schedule.with_events(events)
    days = [session.day for session in sessions]
    kept: Completeness = completeness(schedule, days, first, last)
    return FleetScanner(
        name=assessment.scanner_name,
        description=description,
        standing=assessment.standing,
        sentence=assessment.sentence,
        last_session=assessment.last_session,
        next_due=assessment.due if assessment.due != date.max else None,
        expected=kept.expected,
        made=kept.done,
        missed=kept.missed,
        weeks=weeks_of(assessment, days, schedule, kept.missed, first=first, last=last),
        episodes=episodes_of(assessment, events, first, last),
    )
