"""Histories straight from columns: what `qa.judge.streams` makes of sessions, made of a fleet's `History` at once.

The same figures fall into the same streams with the same segments. Only the latest value of a stream has its details and its
verdict, which are asked for; of all others the columns say whether they were out of limits, and judgement needs no more.
"""

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import date
from itertools import groupby, pairwise
from operator import itemgetter

import numpy as np
from numpy.typing import NDArray

from qa.judge.streams import Conditions, Group, Stream, Ways, chains, restarts_of, segment_starts
from qa.records import Event, History, Judged

__all__ = ["ScannerStreams", "scanner_streams"]

Whole = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class ScannerStreams:
    """All streams of one scanner, in order of quantity, phantom and first day, and the days of all its sessions."""

    scanner_name: str
    streams: tuple[Stream, ...]
    days: tuple[date, ...]


def scanner_streams(
    history: History,
    judged: Callable[[Sequence[tuple[int, int]]], Sequence[Judged]],
    events: Iterable[Event] = (),
    today: date = date.max,
) -> dict[str, ScannerStreams]:
    """Sort the figures of a fleet into streams.

    Parameters
    ----------
    history : History
        Of one or many scanners.
    judged : callable
        Gives figures in full, with their verdicts, for identifiers of acquisitions and positions in them.
    events : iterable of Event
        Of any scanners; those that restart baselines start new segments, as for `streams`.
    today : datetime.date
        Sessions and events after it are left out.

    Returns
    -------
    dict of str to ScannerStreams
        For each scanner that has a session, the streams that `streams` makes of its sessions.
    """
    past = history.days <= today.toordinal()
    figures = _Figures(history, past)
    found = list(figures.streams())
    latest = judged([figures.latest(rows) for rows in found]) if found else ()
    known = [event for event in events if event.day <= today]
    of_scanner: dict[str, list[Stream]] = {}
    for rows, one in zip(found, latest, strict=True):
        stream = figures.stream(rows, one, known)
        of_scanner.setdefault(stream.scanner_name, []).append(stream)
    return {
        name: ScannerStreams(name, tuple(of_scanner.get(name, ())), tuple(map(date.fromordinal, days.tolist())))
        for number, name in enumerate(history.scanner_names)
        if (days := np.unique(history.days[past & (history.scanner_name == number)])).size
    }


class _Figures:
    """The figures that count: of several on one day with the same settings the last does."""

    def __init__(self, history: History, past: NDArray[np.bool_]) -> None:
        self.history = history
        self.ways, self.way = _ways(history)
        software = list(dict.fromkeys(s.software for s in history.scanners))
        self.software = np.array([software.index(s.software) for s in history.scanners], dtype=np.int64)
        row = np.flatnonzero(past[history.acquisition])
        made, quantity = history.acquisition[row], _rank(history.quantities)[history.quantity[row]]
        key = _joined(history.scanner_name[made], quantity, _rank(history.phantoms)[history.phantom[made]])
        group = _joined(key, self.way[made])
        order = np.argsort(group, kind="stable")
        row, key, group = row[order], key[order], group[order]
        day = history.days[history.acquisition[row]]
        # The first row of a group, whether it counts or not, tells which settings came first.
        self.came = row[_begins(group)]
        counts = np.append((group[1:] != group[:-1]) | (day[1:] != day[:-1]), True)[: row.size]
        self.row, self.key, self.group = row[counts], key[counts], group[counts]
        self.made = history.acquisition[self.row]
        self.day = history.days[self.made]

    def streams(self) -> Iterator[Whole | slice]:
        """Give the places of the values of each stream among the figures that count."""
        begins = _begins(self.group).tolist()
        spans = (slice(*span) for span in pairwise([*begins, self.row.size]))
        groups = zip(self.key[begins].tolist(), self.came.tolist(), spans, strict=True)
        for _, alike in groupby(groups, key=itemgetter(0)):
            for chain in chains(self._group(span) for _, _, span in sorted(alike, key=itemgetter(1))):
                places = [group.points for group in chain]
                yield places[0] if len(places) == 1 else np.concatenate([np.arange(p.start, p.stop) for p in places])

    def _group(self, places: slice) -> Group[slice]:
        first, last = places.start, places.stop - 1
        begins, ends = (self.history.settings[self.history.setting[self.made[i]]].protocol for i in (first, last))
        return Group(int(self.day[first]), int(self.day[last]), begins, ends, places)

    def latest(self, places: Whole | slice) -> tuple[int, int]:
        """Say where the latest value of a stream is to be found in full."""
        return int(self.history.identifiers[self.made[places][-1]]), int(self.history.position[self.row[places][-1]])

    def stream(self, places: Whole | slice, latest: Judged, events: Iterable[Event]) -> Stream:
        """Put a stream together."""
        history, row, made, day = self.history, self.row[places], self.made[places], self.day[places]
        name = history.scanner_names[history.scanner_name[made[-1]]]
        quantity = history.quantities[history.quantity[row[-1]]]
        settings, scanner = history.settings[history.setting[made[-1]]], history.scanners[history.scanner[made[-1]]]
        way, software, method = self.way[made], self.software[history.scanner[made]], history.method[row]
        changed = np.flatnonzero(np.diff(way) | np.diff(software) | np.diff(method)) + 1

        def conditions(index: int) -> Conditions:
            return int(way[index]), history.scanners[history.scanner[made[index]]].software, *history.methods[method[index]]

        restarts = restarts_of((e for e in events if e.scanner_name == name), quantity)
        return Stream(
            name,
            quantity,
            history.phantoms[history.phantom[made[-1]]],
            settings.protocol,
            settings.receive_coil,
            latest.measurement.unit,
            day,
            history.values[row],
            history.uncertainties[row],
            (latest.verdict,),
            tuple(history.identifiers[made].tolist()),
            segment_starts(day.tolist(), changed.tolist(), conditions, self.ways[name], restarts),
            latest.measurement,
            settings.slice_thickness_mm,
            scanner.field_strength_T,
            history.out[row],
        )


def _ways(history: History) -> tuple[dict[str, Ways], Whole]:
    """Give the settings of each scanner's acquisitions numbers, in the order in which they came."""
    ways: dict[str, Ways] = {}
    found = np.zeros(history.setting.size, dtype=np.int64)
    for number, name in enumerate(history.scanner_names):
        of_scanner = np.flatnonzero(history.scanner_name == number)
        settings, first, back = np.unique(history.setting[of_scanner], return_index=True, return_inverse=True)
        ways[name] = Ways()
        numbers = np.zeros(settings.size, dtype=np.int64)
        for i in np.argsort(first).tolist():
            numbers[i] = ways[name].number(history.settings[settings[i]])
        found[of_scanner] = numbers[back]
    return ways, found


def _rank(names: Sequence[str]) -> Whole:
    """Give each name's place in order of the alphabet."""
    rank = np.empty(len(names), dtype=np.int64)
    rank[sorted(range(len(names)), key=names.__getitem__)] = np.arange(len(names))
    return rank


def _joined(*parts: Whole) -> Whole:
    """Make one number of several, in the order of the first, then the second and so on."""
    found = parts[0]
    for part in parts[1:]:
        found = found * (int(part.max(initial=0)) + 1) + part
    return found


def _begins(numbers: Whole) -> Whole:
    """Give the places at which a number differs from the one before."""
    return np.flatnonzero(np.diff(numbers, prepend=-1))
