"""What belongs together over time: the values of one quantity on one phantom, with what was judged of them."""

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, replace
from datetime import date, timedelta
from itertools import pairwise

from qa.quantities import QUANTITIES, Quantity
from qa.records import Event, Judged, RecordedAcquisition, Session
from qa.report.chart import BaselineSpan, EventMark, ForecastLine, TrendChart, TrendPoint
from qa.report.content import ControlPoint, Course, ScannerReport
from qa.report.marks import Mark
from qa.report.numbers import COVERAGE_FACTOR, rounded, with_unit
from qa.report.words import about, clipped, expanded

__all__ = [
    "History",
    "Stream",
    "event_letters",
    "histories",
    "in_order",
    "mark_of",
    "split_phantoms",
    "stream_of",
]

_BASELINE_BAND = 2
"""Half the baseline's band, in scatters of single sessions."""


@dataclass(frozen=True, order=True)
class Stream:
    """A phantom, and coil and protocol where one session holds several of them."""

    phantom: str
    protocol: str = ""
    coil: str = ""

    @property
    def title(self) -> str:
        """Its name on a page."""
        return ", ".join(clipped(part) for part in (self.phantom, self.protocol, self.coil) if part)


@dataclass(frozen=True)
class History:
    """One quantity of one stream over the period: the chart, the latest judged value and the courses that speak of it."""

    stream: Stream
    quantity: Quantity
    chart: TrendChart
    latest: Judged
    acquisition: RecordedAcquisition
    courses: tuple[Course, ...]

    @property
    def course(self) -> Course | None:
        """The course in force."""
        return self.courses[-1] if self.courses else None


def split_phantoms(sessions: Iterable[Session]) -> frozenset[str]:
    """Find phantoms that some session measures with more than one coil or protocol."""
    split: set[str] = set()
    for session in sessions:
        ways = {(a.phantom, a.settings.protocol, a.settings.receive_coil) for a in session.acquisitions}
        split.update(phantom for phantom, count in Counter(way[0] for way in ways).items() if count > 1)
    return frozenset(split)


def stream_of(acquisition: RecordedAcquisition, split: frozenset[str]) -> Stream:
    """Tell which stream an acquisition belongs to."""
    if acquisition.phantom not in split:
        return Stream(acquisition.phantom)
    return Stream(acquisition.phantom, acquisition.settings.protocol, acquisition.settings.receive_coil)


def mark_of(judged: Judged) -> Mark:
    """Tell which mark a judged value gets."""
    return judged.verdict.conformity if judged.verdict else "no limit"


def _rank(name: str) -> tuple[int, str]:
    names = list(QUANTITIES)
    return (names.index(name) if name in QUANTITIES else len(names), name)


def in_order(judged: Iterable[Judged]) -> list[Judged]:
    """Put judged values into the order of the table of quantities."""
    return sorted(judged, key=lambda one: _rank(one.measurement.quantity))


def event_letters(events: Iterable[Event]) -> list[tuple[str, Event]]:
    """Give each event a letter, in order of day: A to Z, then AA and so on."""
    lettered = []
    for number, event in enumerate(sorted(events, key=lambda e: e.day)):
        letter, rest = "", number
        while True:
            letter = chr(ord("A") + rest % 26) + letter
            rest = rest // 26 - 1
            if rest < 0:
                break
        lettered.append((letter, event))
    return lettered


def _point(acquisition: RecordedAcquisition, judged: Judged, control: ControlPoint | None) -> TrendPoint:
    found, verdict = judged.measurement, judged.verdict
    return TrendPoint(
        at=acquisition.acquired_at,
        value=found.value,
        expanded=expanded(found),
        mark=mark_of(judged),
        lower=verdict.lower if verdict else None,
        upper=verdict.upper if verdict else None,
        control_lower=control.lower if control else None,
        control_upper=control.upper if control else None,
        tripped=bool(control and control.rules),
    )


def _speaks_of(course: Course, stream: Stream, quantity: str) -> bool:
    return (
        course.quantity == quantity
        and course.phantom == stream.phantom
        and ("" in (course.protocol, stream.protocol) or course.protocol == stream.protocol)
        and ("" in (course.coil, stream.coil) or course.coil == stream.coil)
    )


def _baseline_spans(courses: Iterable[Course], first: date, last: date, of: Quantity, unit: str) -> tuple[BaselineSpan, ...]:
    """Lay baselines end to end: each holds until the next one comes into force."""
    baselines = sorted((b for course in courses for b in course.baselines), key=lambda b: b.since)
    if not baselines:
        return ()
    ends = [following.since - timedelta(days=1) for _, following in pairwise(baselines)] + [last]
    return tuple(
        BaselineSpan(
            max(one.since, first),
            min(end, last),
            one.value,
            _BASELINE_BAND * (one.scatter or 0.0),
            with_unit(rounded(one.value, COVERAGE_FACTOR * one.standard_uncertainty, of.decimals)[0], unit),
        )
        for one, end in zip(baselines, ends, strict=True)
        if max(one.since, first) <= min(end, last)
    )


def _forecast(course: Course | None) -> ForecastLine | None:
    if course is None or course.forecast is None:
        return None
    found = course.forecast
    return ForecastLine(found.from_day, found.from_value, found.crosses_on, found.at_limit, found.earliest, found.latest)


def histories(content: ScannerReport) -> tuple[History, ...]:
    """Collect the history of every quantity measured in the period, in the order of streams and of the table of quantities."""
    split = split_phantoms(content.sessions)
    found: dict[tuple[Stream, str], list[tuple[RecordedAcquisition, Judged]]] = {}
    for session in content.sessions:
        for acquisition in session.acquisitions:
            for judged in acquisition.judged:
                found.setdefault((stream_of(acquisition, split), judged.measurement.quantity), []).append(
                    (acquisition, judged)
                )
    letters = event_letters(content.events)
    collected = []
    for (stream, name), values in sorted(found.items(), key=lambda item: (item[0][0], _rank(item[0][1]))):
        values.sort(key=lambda pair: pair[0].acquired_at)
        courses = tuple(course for course in content.courses if _speaks_of(course, stream, name))
        control = {point.acquisition: point for course in courses for point in course.control}
        last_acquisition, latest = values[-1]
        first_day = min(content.first_day, values[0][0].acquired_at.date())
        last_day = max(content.last_day, last_acquisition.acquired_at.date())
        concerned = [
            EventMark(letter, event.day)
            for letter, event in letters
            if (not event.quantities or name in event.quantities) and first_day <= event.day <= last_day
        ]
        of = about(name, latest.measurement.unit)
        chart = TrendChart(
            label=of.title,
            unit=latest.measurement.unit,
            points=tuple(_point(a, judged, control.get(a.identifier)) for a, judged in values),
            first_day=first_day,
            last_day=last_day,
            missing=content.missing,
            every_days=content.every_days,
            grace_days=content.grace_days,
            baselines=_baseline_spans(courses, first_day, last_day, of, latest.measurement.unit),
            events=tuple(concerned),
            changes=tuple((c.earliest, c.day, c.latest) for course in courses for c in course.change_points),
            forecast=_forecast(courses[-1] if courses else None),
        )
        collected.append(History(stream, of, _within(chart), latest, last_acquisition, courses))
    return tuple(collected)


def _within(chart: TrendChart) -> TrendChart:
    """Leave out change-points that the chart's time does not reach."""
    first, last = chart.first_day, chart.last_day
    kept = tuple((max(a, first), b, min(c, last)) for a, b, c in chart.changes if first <= b <= last)
    return replace(chart, changes=kept)
