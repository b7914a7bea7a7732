"""Histories: the values of one quantity of one scanner that belong together over time, and where they start anew.

Acquisitions with the same phantom and settings form a stream. When the settings change from one day to the next for good, the
stream goes on, in a new segment; settings that are used side by side make streams of their own. A stream has one value a
day: measured again on the same day, the last counts.
"""

from bisect import bisect_left
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from itertools import pairwise
from operator import attrgetter
from typing import Generic, NamedTuple, TypeVar

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.records import OUT_OF_LIMITS, Event, Judged, Measurement, RecordedAcquisition, Session, Settings, Verdict

__all__ = ["Conditions", "Group", "SegmentStart", "Stream", "Ways", "chains", "restarts_of", "segment_starts", "streams"]

_Values = tuple[object, ...]
_SAME = 0.01
_SETTING_WORDS: Mapping[str, str] = {
    "protocol": "protocol",
    "sequence": "sequence",
    "slice_thickness_mm": "slice thickness (mm)",
    "slice_spacing_mm": "slice spacing (mm)",
    "pixel_mm": "pixel size (mm)",
    "matrix": "matrix",
    "repetition_ms": "repetition time (ms)",
    "echo_ms": "echo time (ms)",
    "flip_deg": "flip angle (degrees)",
    "averages": "averages",
    "bandwidth_hz_per_pixel": "bandwidth (Hz per pixel)",
    "phase_encode": "phase-encode direction",
    "receive_coil": "receive coil",
    "parallel_imaging": "parallel imaging",
    "filtered": "filter",
}
"""Settings whose change starts a new segment. The centre frequency is not among them: it is measured."""
_values: Callable[[Settings], _Values] = attrgetter(*_SETTING_WORDS)


@dataclass(frozen=True)
class SegmentStart:
    """Where a stream starts anew: index of its first value, its day, and why, as a clause ("the receive coil changed ...")."""

    index: int
    day: date
    reason: str


@dataclass(frozen=True, eq=False)
class Stream:
    """One quantity of one scanner, n values in order of day.

    Attributes
    ----------
    scanner_name, quantity, phantom, unit : str
        What it is.
    protocol, coil : str
        Of the latest value.
    days : (n,) int
        Proleptic ordinals (`date.toordinal`), strictly increasing.
    values, uncertainties : (n,) float
        In `unit`; standard uncertainties.
    verdicts : tuple of Verdict or None
        As the record keeps them; of a stream that was made from columns only the latest is there.
    acquisitions : tuple of int
        Identifiers of the recorded acquisitions, to find the image.
    starts : tuple of SegmentStart
        At least one, at index 0.
    latest : Measurement
        The latest value with its details.
    slice_thickness_mm, field_strength_T : float or None
        Of the latest value, for choosing its limit.
    was_out : (n,) bool or None
        What `out` gives; None where the verdicts say it.
    """

    scanner_name: str
    quantity: str
    phantom: str
    protocol: str
    coil: str
    unit: str
    days: NDArray[np.int64]
    values: Floats
    uncertainties: Floats
    verdicts: tuple[Verdict | None, ...]
    acquisitions: tuple[int, ...]
    starts: tuple[SegmentStart, ...]
    latest: Measurement
    slice_thickness_mm: float | None = None
    field_strength_T: float | None = None
    was_out: NDArray[np.bool_] | None = None

    @property
    def out(self) -> NDArray[np.bool_]:
        """Where a value lay outside its limits, whatever its uncertainty."""
        if self.was_out is not None:
            return self.was_out
        return np.array([v is not None and v.conformity in OUT_OF_LIMITS for v in self.verdicts], dtype=bool)

    @property
    def last_day(self) -> date:
        """Day of the latest value."""
        return date.fromordinal(int(self.days[-1]))

    @property
    def segment(self) -> slice:
        """The values of the latest segment."""
        return slice(self.starts[-1].index, None)


Conditions = tuple[int, str, str, int]
"""Settings by number, scanner software, method and its version: plain tuples, because there are as many as figures."""
_Point = tuple[int, Conditions, Judged, RecordedAcquisition]
T = TypeVar("T")


class Group(NamedTuple, Generic[T]):
    """Points with the same phantom and settings: days of the first and the last, their protocols, and the points."""

    first: int
    last: int
    begins: str
    ends: str
    points: T


def streams(sessions: Iterable[Session], events: Sequence[Event] = ()) -> tuple[Stream, ...]:
    """Sort the sessions of one scanner into streams.

    Parameters
    ----------
    sessions : iterable of Session
        Of one scanner.
    events : sequence of Event
        Of the same scanner; one that restarts baselines starts a new segment of the quantities it concerns. What was
        measured on the very day of an event counts as after it.

    Returns
    -------
    tuple of Stream
        In order of quantity, phantom and first day.
    """
    ways = Ways()
    found: dict[tuple[str, str], dict[int, dict[int, _Point]]] = {}
    for session in sorted(sessions, key=lambda s: s.day):
        day = session.day.toordinal()
        for acquisition in session.acquisitions:
            way, software = ways.number(acquisition.settings), acquisition.scanner.software
            for judged in acquisition.judged:
                measurement = judged.measurement
                conditions = (way, software, measurement.method, measurement.method_version)
                by_way = found.setdefault((measurement.quantity, acquisition.phantom), {})
                by_way.setdefault(way, {})[day] = (day, conditions, judged, acquisition)
    return tuple(
        _stream([point for group in chain for point in group.points], ways, restarts_of(events, quantity))
        for (quantity, _), by_way in sorted(found.items())
        for chain in chains(_group(list(points.values())) for points in by_way.values())
    )


def restarts_of(events: Iterable[Event], quantity: str) -> list[Event]:
    """Give the events that restart a quantity, in order of their days."""
    concerned = (e for e in events if e.restarts_baseline and (not e.quantities or quantity in e.quantities))
    return sorted(concerned, key=lambda e: e.day)


class Ways:
    """Settings by number; such as differ by less than 1 % in every figure are the same."""

    def __init__(self) -> None:
        self.known: list[_Values] = []
        self.numbers: dict[_Values, int] = {}

    def number(self, settings: Settings) -> int:
        """Give the number of these settings; new ones get the next."""
        values = _values(settings)
        found = self.numbers.get(values)
        if found is None:
            found = next((i for i, other in enumerate(self.known) if all(map(_same, other, values))), len(self.known))
            if found == len(self.known):
                self.known.append(values)
            self.numbers[values] = found
        return found


def _same(a: object, b: object) -> bool:
    if isinstance(a, tuple) and isinstance(b, tuple):
        return len(a) == len(b) and all(map(_same, a, b))
    if isinstance(a, float) and isinstance(b, float):
        return abs(a - b) <= _SAME * max(abs(a), abs(b))
    return a == b


def _say(value: object) -> str:
    if isinstance(value, tuple):
        return " by ".join(_say(v) for v in value)
    if isinstance(value, bool):
        return "on" if value else "off"
    if isinstance(value, float):
        return f"{value:g}"
    return "unknown" if value is None or value == "" else str(value)


def _group(points: list[_Point]) -> Group[list[_Point]]:
    first, last = points[0], points[-1]
    return Group(first[0], last[0], first[3].settings.protocol, last[3].settings.protocol, points)


def chains(groups: Iterable[Group[T]]) -> list[list[Group[T]]]:
    """Join groups that follow each other in time, those of one protocol first; such as overlap stay apart."""
    found: list[list[Group[T]]] = []
    for group in sorted(groups, key=lambda g: (g.first, g.last)):
        ended = [chain for chain in found if chain[-1].last < group.first]
        if ended:
            max(ended, key=lambda c: (c[-1].ends == group.begins, c[-1].last)).append(group)
        else:
            found.append([group])
    return found


def segment_starts(
    days: Sequence[int],
    changed: Iterable[int],
    conditions: Callable[[int], Conditions],
    ways: Ways,
    restarts: Iterable[Event],
) -> tuple[SegmentStart, ...]:
    """Say where a stream starts anew.

    Parameters
    ----------
    days : sequence of int
        Of its values, strictly increasing.
    changed : iterable of int
        Indices of the values whose conditions are not those of the value before.
    conditions : callable
        Gives the conditions of a value.
    ways : Ways
        What the conditions' numbers mean.
    restarts : iterable of Event
        That concern the quantity, from `restarts_of`.
    """
    reasons = {index: list(_changes(conditions(index - 1), conditions(index), ways)) for index in changed}
    for event in restarts:
        index = bisect_left(days, event.day.toordinal())
        if 0 < index < len(days):
            reasons.setdefault(index, []).append(f"the baseline was restarted: {event.text}")
    later = (SegmentStart(i, date.fromordinal(days[i]), "; ".join(reasons[i])) for i in sorted(reasons) if reasons[i])
    return (SegmentStart(0, date.fromordinal(days[0]), "the first session"), *later)


def _stream(points: list[_Point], ways: Ways, restarts: Sequence[Event]) -> Stream:
    days, conditions, judged, acquisitions = zip(*points, strict=True)
    changed = (index for index, (old, new) in enumerate(pairwise(conditions), start=1) if old != new)
    starts = segment_starts(days, changed, conditions.__getitem__, ways, restarts)
    measurements = [j.measurement for j in judged]
    latest, last = measurements[-1], acquisitions[-1]
    return Stream(
        last.scanner_name,
        latest.quantity,
        last.phantom,
        last.settings.protocol,
        last.settings.receive_coil,
        latest.unit,
        np.array(days, dtype=np.int64),
        np.array([m.value for m in measurements], dtype=float),
        np.array([m.standard_uncertainty for m in measurements], dtype=float),
        tuple([j.verdict for j in judged]),
        tuple([a.identifier for a in acquisitions]),
        starts,
        latest,
        last.settings.slice_thickness_mm,
        last.scanner.field_strength_T,
    )


def _changes(old: Conditions, new: Conditions, ways: Ways) -> Iterator[str]:
    if old[0] != new[0]:
        for word, a, b in zip(_SETTING_WORDS.values(), ways.known[old[0]], ways.known[new[0]], strict=True):
            if not _same(a, b):
                yield f"{word} changed from {_say(a)} to {_say(b)}"
    if old[1] != new[1]:
        yield f"scanner software changed from {_say(old[1])} to {_say(new[1])}"
    if old[2:] != new[2:]:
        yield f"the method changed from {_method(old)} to {_method(new)}"


def _method(conditions: Conditions) -> str:
    return f"{conditions[2]} (version {conditions[3]})"
