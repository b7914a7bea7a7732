"""Ten years of a fleet as columns: what judgement needs of every figure, read in one pass."""

import re
from collections.abc import Hashable, Iterator, Sequence
from dataclasses import replace
from datetime import date
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from sqlalchemy import Connection, Select, select

from qa.records import OUT_OF_LIMITS, History, Judged, Measurement, Session, Settings
from qa.store import queries, rows
from qa.store.tables import acquisitions, details, measurements, sessions, verdicts

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from qa.geometry import Floats

__all__ = ["history_between", "judged_at", "light_sessions"]

_BATCH = 500
"""Rows at a time: with more, Python looks for garbage among them again and again."""
_FREQUENCY = re.compile(r'"frequency_MHz":[^,}]*')
T = TypeVar("T", bound=Hashable)

Period = tuple[str | None, date | None, date | None]
"""Scanner, first and last day; None where open."""


def history_between(connection: Connection, period: Period) -> History:
    """Read all figures of a period that no later entry has taken the place of."""
    made = _Acquisitions(connection, period)
    m, v = measurements.c, verdicts.c
    columns = (m.entry, m.position, m.quantity, m.value, m.standard_uncertainty, m.method, m.method_version)
    query = select(*columns).order_by(m.entry, m.position)
    outside = select(v.entry, v.position).where(v.conformity.in_(OUT_OF_LIMITS)).order_by(v.entry, v.position)
    if any(bound is not None for bound in period[:2]):
        # Where but a last day is named almost all is wanted: reading the whole and leaving the rest out is faster.
        wanted = queries.standing_acquisitions(*period)
        query, outside = query.where(m.entry.in_(wanted)), outside.where(v.entry.in_(wanted))
    figures = _Figures()
    for batch in _batches(connection, query):
        figures.add(batch)
    out = [row for batch in _batches(connection, outside) for row in batch]
    return figures.history(made, out)


def light_sessions(connection: Connection, period: Period) -> tuple[Session, ...]:
    """Read the sessions of a period with every figure and verdict, but without details, regions, files and series."""
    m = measurements.c
    of_measurement = (m.quantity, m.value, m.unit, m.standard_uncertainty, m.method, m.method_version, m.slice)
    of_verdict = [verdicts.c[name] for name in rows.VERDICT_COLUMNS]
    figures: dict[int, list[Judged]] = {}
    last = len(of_measurement) + 1
    for batch in _figures(connection, period, (m.entry, *of_measurement), of_verdict):
        for row in batch:
            measurement = Measurement(*row[1:last])
            verdict = None if row[last] is None else rows.verdict(row[1], row[last:])
            figures.setdefault(row[0], []).append(Judged(measurement, verdict))
    build = rows.Builder()
    found = (
        ((row.scanner_name, row.day), build.acquisition(row, judged=tuple(figures.get(row.entry, ()))))
        for row in queries.acquisition_rows(connection, *period)
    )
    return queries.grouped(found)


def _figures(
    connection: Connection, period: Period, of_measurement: Sequence[Any], of_verdict: Sequence[Any]
) -> Iterator[Sequence[Any]]:
    """Read measurements with their verdicts, None where there is none, in batches of the driver's own tuples."""
    m, v = measurements, verdicts
    query = (
        select(*of_measurement, *of_verdict)
        .outerjoin_from(m, v, (v.c.entry == m.c.entry) & (v.c.position == m.c.position))
        .order_by(m.c.entry, m.c.position)
    )
    if any(bound is not None for bound in period):
        query = query.where(m.c.entry.in_(queries.standing_acquisitions(*period)))
    return _batches(connection, query)


def _batches(connection: Connection, query: Select[Any]) -> Iterator[Sequence[Any]]:
    """Read rows in batches of the driver's own tuples: there may be 300,000, and anything more costs seconds."""
    cursor = connection.connection.cursor()
    try:
        cursor.execute(str(query.compile(dialect=connection.dialect, compile_kwargs={"literal_binds": True})))
        while batch := cursor.fetchmany(_BATCH):
            yield batch
    finally:
        cursor.close()


class _Numbers(dict[T, int]):
    """Things by number, in the order in which they are met."""

    def __missing__(self, key: T) -> int:
        number = self[key] = len(self)
        return number


class _Acquisitions:
    """The acquisitions of a period as columns, in order of scanner, day and time."""

    def __init__(self, connection: Connection, period: Period) -> None:
        a, s = acquisitions.c, sessions.c
        query = (
            select(a.entry, s.scanner_name, s.day, a.phantom, a.scanner, a.settings)
            .join(sessions, s.entry == a.session)
            .where(a.entry.in_(queries.standing_acquisitions(*period)))
            .order_by(s.scanner_name, s.day, a.acquired_at, a.entry)
        )
        build, days = rows.Builder(), _Numbers[str]()
        names, phantoms, settings, scanners = _Numbers[str](), _Numbers[str](), _Numbers[str](), _Numbers[str]()
        parsed: list[Settings] = []
        columns: list[list[int]] = [[], [], [], [], [], []]
        for batch in _batches(connection, query):
            entry, *words, setting = zip(*batch, strict=True)
            # The frequency alone would make the settings of every acquisition a text of their own.
            keys = [_FREQUENCY.sub("", text) for text in setting]
            numbers = [settings[key] for key in keys]
            for number, text in zip(numbers, setting, strict=True):
                if number == len(parsed):
                    parsed.append(replace(build.setting(text), frequency_MHz=None))
            columns[0] += entry
            columns[1] += numbers
            for column, known, texts in zip(columns[2:], (names, days, phantoms, scanners), words, strict=True):
                column += [known[text] for text in texts]
        self.identifiers, self.setting, self.scanner_name, day, self.phantom, self.scanner = np.array(columns, dtype=np.int64)
        self.days = np.array([date.fromisoformat(text).toordinal() for text in days], dtype=np.int64)[day]
        self.scanner_names, self.phantoms, self.settings = tuple(names), tuple(phantoms), tuple(parsed)
        self.scanners = tuple(build.scanner(text) for text in scanners)


class _Figures:
    """Gathers batches of rows into arrays."""

    def __init__(self) -> None:
        self._kinds = _Numbers[tuple[str, str, int]]()
        self._whole: list[NDArray[np.int64]] = []
        self._real: list[Floats] = []

    def add(self, batch: Sequence[Sequence[Any]]) -> None:
        """Take (entry, position, quantity, value, uncertainty, method, version) rows in."""
        entry, position, quantity, value, uncertainty, method, version = zip(*batch, strict=True)
        kinds = self._kinds
        kind = [kinds[one] for one in zip(quantity, method, version, strict=True)]
        self._whole.append(np.array((entry, position, kind), dtype=np.int64))
        self._real.append(np.array((value, uncertainty), dtype=np.float64))

    def history(self, made: _Acquisitions, outside: Sequence[Sequence[Any]]) -> History:
        """Put the rows in order of the acquisitions; those of acquisitions that are not among them are left out."""
        whole = np.concatenate(self._whole, axis=1) if self._whole else np.zeros((3, 0), np.int64)
        real = np.concatenate(self._real, axis=1) if self._real else np.zeros((2, 0))
        out = _found(whole[0], whole[1], outside)
        rank = np.full(max(made.identifiers.max(initial=0), whole[0].max(initial=0)) + 1, -1)
        rank[made.identifiers] = np.arange(made.identifiers.size)
        place = rank[whole[0]]
        order = np.argsort(place, kind="stable")
        order = order[place[order] >= 0]
        quantities, methods = _Numbers[str](), _Numbers[tuple[str, int]]()
        quantity = _numbered(quantities, [one for one, _, _ in self._kinds])
        method = _numbered(methods, [(name, version) for _, name, version in self._kinds])
        kind = whole[2, order]
        return History(
            scanner_names=made.scanner_names,
            phantoms=made.phantoms,
            settings=made.settings,
            scanners=made.scanners,
            quantities=tuple(quantities),
            methods=tuple(methods),
            identifiers=made.identifiers,
            days=made.days,
            scanner_name=made.scanner_name,
            phantom=made.phantom,
            setting=made.setting,
            scanner=made.scanner,
            acquisition=place[order],
            position=whole[1, order],
            quantity=quantity[kind],
            method=method[kind],
            values=real[0, order],
            uncertainties=real[1, order],
            out=out[order],
        )


def _numbered(numbers: _Numbers[T], things: Sequence[T]) -> "NDArray[np.int64]":
    return np.array([numbers[one] for one in things], dtype=np.int64)


def _found(entry: "NDArray[np.int64]", position: "NDArray[np.int64]", wanted: Sequence[Sequence[int]]) -> "NDArray[np.bool_]":
    """Mark the rows, which are in order of entry and position, whose pair is among those wanted."""
    found = np.zeros(entry.size, dtype=bool)
    if entry.size and wanted:
        pairs = np.array(wanted, dtype=np.int64)
        places = int(max(position.max(), pairs[:, 1].max())) + 1
        key, asked = entry * places + position, pairs[:, 0] * places + pairs[:, 1]
        at = np.minimum(np.searchsorted(key, asked), key.size - 1)
        found[at[key[at] == asked]] = True
    return found


def judged_at(connection: Connection, places: Sequence[tuple[int, int]]) -> tuple[Judged, ...]:
    """Read single figures with details, regions and verdict, by acquisition and position, in the order asked for."""
    wanted = sorted({entry for entry, _ in places})
    found: dict[int, tuple[Judged, ...]] = {}
    for start in range(0, len(wanted), queries.MOST_NAMES):
        some = wanted[start : start + queries.MOST_NAMES]
        measured, judged = (queries.by_entry(connection, table, some) for table in (measurements, verdicts))
        query = select(details.c.entry, details.c.content).where(details.c.entry.in_(some))
        for entry, content in connection.execute(query):
            found[entry] = rows.judged_from_rows(measured.get(entry, ()), content, judged.get(entry, ()))
    return tuple(found[entry][position - 1] for entry, position in places)
