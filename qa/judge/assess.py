"""A scanner as of a day: every quantity's state, the scanner's standing, what is due, and what to look at first."""

from collections.abc import Iterable, Sequence
from dataclasses import replace
from datetime import date

import numpy as np

from qa.judge.abreast import control_charts
from qa.judge.causes import Movement, likely_causes
from qa.judge.control import ControlChart
from qa.judge.quantity import figure, lasting_alarm, quantity_state, title
from qa.judge.records import Assessment, Grounds, QuantityState, Standing
from qa.judge.schedule import Schedule, completeness, days_overdue, due_day
from qa.judge.streams import Stream, streams
from qa.quantities import QUANTITIES
from qa.records import Session

__all__ = ["assess", "assess_streams"]

_RECENT = 3
"""Sessions for which a new segment is news."""
_USUAL = 12
"""Sessions that tell how often a quantity is usually measured."""
_TREND_LEVEL, _TREND_SESSIONS, _TREND_SIGMAS = 0.001, 16, 2.0
_FAR = 4.5


def assess(scanner_name: str, history: Iterable[Session], grounds: Grounds, today: date) -> Assessment:
    """Judge a scanner.

    Parameters
    ----------
    scanner_name : str
        Whose history it is.
    history : iterable of Session
        All its sessions; none may be missing, or charts begin too late. Sessions of other scanners are left out.
    grounds : Grounds
        Limits, baselines, events and schedule.
    today : datetime.date
        The day to judge as of; sessions and events after it are left out, so that an earlier day can be looked at again.

    Returns
    -------
    Assessment
        See there.
    """
    sessions = [s for s in history if s.scanner_name == scanner_name and s.day <= today]
    known = [e for e in grounds.events if e.scanner_name == scanner_name and e.day <= today]
    return assess_streams(scanner_name, streams(sessions, known), [s.day for s in sessions], grounds, today)


def assess_streams(
    scanner_name: str,
    histories: Sequence[Stream],
    days: Sequence[date],
    grounds: Grounds,
    today: date,
    *,
    charts: Sequence[ControlChart] | None = None,
) -> Assessment:
    """Judge a scanner from streams that were made before, as `assess` does.

    Parameters
    ----------
    scanner_name : str
        Whose they are.
    histories : sequence of Stream
        All its streams.
    days : sequence of datetime.date
        Those of all its sessions.
    grounds, today
        As for `assess`.
    charts : sequence of ControlChart, optional
        Those of the streams, in their order, where they were made before for many scanners at once (`control_charts`).
    """
    events = tuple(e for e in grounds.events if e.scanner_name == scanner_name)
    # Downtime may be planned ahead; of the rest only what has happened counts.
    schedule = grounds.schedule.with_events(events)
    events = tuple(e for e in events if e.day <= today)
    grounds = replace(grounds, events=events, schedule=schedule)
    last = max(days, default=None)
    if charts is None:
        charts = control_charts(histories, grounds.rules)
    judged = [
        quantity_state(stream, grounds, today, _label(stream, histories), chart)
        for stream, chart in zip(histories, charts, strict=True)
    ]
    states = _in_use(judged, last, grounds)
    order = list(QUANTITIES)
    states.sort(key=lambda s: (order.index(s.quantity) if s.quantity in QUANTITIES else len(order), s.stream.phantom))
    counting = [s for s in states if not s.superseded]
    late = days_overdue(schedule, last, today)
    out, drifting = [s for s in counting if s.out], [s for s in counting if s.drifting]
    overdue = _overdue(schedule, last, late, today)
    standing: Standing = "out of limits" if out else "overdue" if overdue else "drifting" if drifting else "within limits"
    reasons = [_out_sentence(s) for s in out] + overdue + [text for s in drifting for text in s.drifting]
    sentence = f"{standing[0].upper()}{standing[1:]}"
    sentence += f": {reasons[0]}." if reasons else f" in the session of {last.isoformat()}." if last else "."
    movements = [m for s in counting if (m := _movement(s)) is not None]
    return Assessment(
        scanner_name=scanner_name,
        today=today,
        standing=standing,
        sentence=sentence,
        reasons=tuple(reasons),
        out=_names(out),
        drifting=_names(drifting),
        out_of_control=_names([s for s in counting if s.control == "out of control"]),
        quantities=tuple(states),
        last_session=last,
        due=due_day(schedule, last),
        days_overdue=late,
        kept=completeness(schedule, days, min(days, default=today), today),
        causes=likely_causes(movements, events, _changes(counting)),
        remarks=tuple(_remarks(counting)),
    )


def _label(stream: Stream, histories: Sequence[Stream]) -> str:
    """Say which of several histories of a quantity is meant."""
    others = [s for s in histories if s is not stream and s.quantity == stream.quantity]
    label = title(stream.quantity)
    if any(s.phantom != stream.phantom for s in others):
        label += f" on {stream.phantom}"
    alike = [s for s in others if s.phantom == stream.phantom]
    if any(s.coil != stream.coil for s in alike):
        label += f" with {stream.coil or 'another coil'}"
    if any(s.protocol != stream.protocol for s in alike):
        label += f" ({stream.protocol or 'another protocol'})"
    return label


def _names(states: Iterable[QuantityState]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(s.quantity for s in states))


def _in_use(states: list[QuantityState], last: date | None, grounds: Grounds) -> list[QuantityState]:
    """Mark what was measured otherwise since, and what has not been measured for too long.

    A quantity that is out stays out when it is no longer measured: only another measurement of it can say that it is well.
    On the same phantom one later by a whole interval does; on another phantom, which may be scanned in turn with it, one
    later by three, or any after an event that restarted its baseline. Such an event also ends what was drifting before it.
    """
    found = []
    for state in states:
        stream, grace = state.stream, grounds.schedule.grace_days
        gaps = np.diff(stream.days[-_USUAL:])
        usual = max(float(np.median(gaps)) if gaps.size else 0.0, float(grounds.schedule.every_days))
        restart = _restart(stream, grounds)
        superseded = any(
            (other.last_day - stream.last_day).days > (1 if other.phantom == stream.phantom else 3) * (usual + grace)
            or (restart is not None and other.last_day >= restart)
            for other in (s.stream for s in states if s is not state and s.quantity == state.quantity)
        )
        absent = last is not None and (last - stream.last_day).days > 2 * usual + grace and not superseded
        found.append(
            replace(
                state,
                superseded=superseded,
                absent_since=stream.last_day if absent else None,
                drifting=() if restart else state.drifting,
            )
        )
    return found


def _restart(stream: Stream, grounds: Grounds) -> date | None:
    """Give the day of the first event after a stream's latest value that restarted its baseline."""
    return min(
        (
            e.day
            for e in grounds.events
            if e.restarts_baseline and e.day > stream.last_day and (not e.quantities or stream.quantity in e.quantities)
        ),
        default=None,
    )


def _overdue(schedule: Schedule, last: date | None, late: int, today: date) -> list[str]:
    if last is None and not schedule.down(today) and (schedule.since is None or late):
        return ["no session has been taken in yet"]
    if not late or last is None:
        return []
    due = due_day(schedule, last)
    days = "1 day" if late == 1 else f"{late} days"
    return [f"the session due on {due.isoformat() if due else ''} is {days} late; the last was on {last.isoformat()}"]


def _out_sentence(state: QuantityState) -> str:
    stream, verdict = state.stream, state.verdict
    now = figure(stream.latest.value, stream.quantity, stream.unit)
    limit = "" if verdict is None else f", limit {verdict.limit}"
    word = (
        " (conditional fail: its uncertainty reaches the limit)"
        if verdict and verdict.conformity == "conditional fail"
        else ""
    )
    since = "" if state.out_since in {None, stream.last_day} else f", since {state.out_since}"
    return f"{state.label} is {now}{limit}{word}{since}"


def _movement(state: QuantityState) -> Movement | None:
    """Say how a quantity has moved, for the table of causes; None where it has not."""
    stream, chart = state.stream, state.chart
    if not _moved(state):
        return None
    rising = _rising(state)
    centre = float(chart.centre[-1])
    begun = state.onset
    since = begun.begun if begun else state.alarm_since or state.out_since or stream.last_day
    now = figure(stream.latest.value, stream.quantity, stream.unit)
    was = "" if np.isnan(centre) else f" from {figure(centre, stream.quantity, stream.unit)}"
    sentence = f"{state.label} has {'risen' if rising else 'fallen'}{was} to {now}, since about {since.isoformat()}"
    earliest, latest = (begun.earliest, begun.latest) if begun else (since, since)
    called = state.out or bool(state.drifting)
    return Movement(
        stream.quantity, "up" if rising else "down", earliest, latest, sentence, stream.latest.details, called=called
    )


def _moved(state: QuantityState) -> bool:
    """Tell a movement from a chance alarm: out, drifting, trending, in a lasting alarm, or at once far from the centre.

    Of the set-up every alarm counts: it is made anew each time, so a single odd one is what is looked for.
    """
    chart = state.chart
    far = abs(float(chart.standardised[-1])) > _FAR
    setup = state.quantity in QUANTITIES and QUANTITIES[state.quantity].setup
    return (
        state.out or bool(state.drifting) or _trending(state) or lasting_alarm(chart) or far or (setup and bool(chart.out[-1]))
    )


def _trending(state: QuantityState) -> bool:
    if state.trend is None or state.trend.probability > _TREND_LEVEL or state.trend.sessions < _TREND_SESSIONS:
        return False
    days = state.stream.days[-state.trend.sessions :]
    change = abs(state.trend.per_year) * float(days[-1] - days[0]) / 365.25
    return change > _TREND_SIGMAS * float(state.chart.sigma[-1])


def _rising(state: QuantityState) -> bool:
    if state.shift:
        return state.shift > 0
    verdict, value = state.verdict, state.stream.latest.value
    if verdict is not None and state.out:
        return verdict.upper is not None and value > verdict.upper
    return state.trend is not None and state.trend.per_year > 0


def _recently_restarted(state: QuantityState) -> bool:
    start = state.stream.starts[-1].index
    return start > 0 and state.stream.days.size - start <= _RECENT


def _changes(states: Iterable[QuantityState]) -> list[str]:
    found = [
        f"on {s.stream.starts[-1].day.isoformat()} {s.stream.starts[-1].reason}"
        for s in states
        if _recently_restarted(s) and " changed from " in s.stream.starts[-1].reason
    ]
    return list(dict.fromkeys(found))


def _remarks(states: Sequence[QuantityState]) -> Iterable[str]:
    restarted: dict[str, list[str]] = {}
    for state in states:
        if _recently_restarted(state):
            start = state.stream.starts[-1]
            restarted.setdefault(f"on {start.day.isoformat()} {start.reason}", []).append(state.label)
    for why, titles in restarted.items():
        yield f"{', '.join(dict.fromkeys(titles))}: charts start anew, because {why}"
    for state in states:
        if state.absent_since is not None:
            yield f"{state.label} has not been measured since {state.absent_since.isoformat()}"
        if state.not_judged and "no limit for" not in state.not_judged:
            yield f"{state.label} is not judged: {state.not_judged}"
