"""Ten years of a fleet as columns: what judgement needs of every figure, read in one pass."""

from collections.abc import Iterator, Sequence
from datetime import date
from typing import TYPE_CHECKING, Any

import numpy as np
from sqlalchemy import Connection, select

from qa.records import CONFORMITIES, History, Judged, Measurement, Session
from qa.store import queries, rows
from qa.store.tables import details, measurements, verdicts

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from qa.geometry import Floats

__all__ = ["history_between", "judged_at", "light_sessions"]

_BATCH = 20_000
_CODES = {word: code for code, word in enumerate(CONFORMITIES)}


Period = tuple[str | None, date | None, date | None]
"""Scanner, first and last day; None where open."""


def history_between(connection: Connection, period: Period) -> History:
    """Read all figures of a period that no later entry has taken the place of."""
    build = rows.Builder()
    found = tuple(build.acquisition(row) for row in queries.acquisition_rows(connection, *period))
    columns = _Columns()
    m, v = measurements.c, verdicts.c
    for batch in _figures(
        connection,
        period,
        (m.entry, m.position, m.quantity, m.value, m.standard_uncertainty, m.method, m.method_version),
        (v.conformity, v.lower, v.upper),
    ):
        columns.add(batch)
    return columns.history(found)


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
    cursor = connection.connection.cursor()
    try:
        cursor.execute(str(query.compile(dialect=connection.dialect, compile_kwargs={"literal_binds": True})))
        while batch := cursor.fetchmany(_BATCH):
            yield batch
    finally:
        cursor.close()


class _Columns:
    """Gathers batches of rows into arrays; words become numbers in the order in which they are met."""

    def __init__(self) -> None:
        self._quantities: dict[str, int] = {}
        self._methods: dict[tuple[str, int], int] = {}
        self._whole: list[NDArray[np.int64]] = []
        self._real: list[Floats] = []

    def add(self, batch: Sequence[Sequence[Any]]) -> None:
        """Take (entry, position, quantity, value, uncertainty, method, version, conformity, lower, upper) rows in."""
        entry, position, quantity, value, uncertainty, method, version, conformity, lower, upper = zip(*batch, strict=True)
        quantities, methods = self._quantities, self._methods
        whole = (
            entry,
            position,
            [quantities.setdefault(name, len(quantities)) for name in quantity],
            [methods.setdefault(pair, len(methods)) for pair in zip(method, version, strict=True)],
            [_CODES.get(word, -1) for word in conformity],
        )
        self._whole.append(np.array(whole, dtype=np.int64))
        self._real.append(np.array((value, uncertainty, lower, upper), dtype=np.float64))

    def history(self, found: tuple[Any, ...]) -> History:
        """Put the rows in order of the acquisitions; those of acquisitions that are not among them are left out."""
        whole = np.concatenate(self._whole, axis=1) if self._whole else np.zeros((5, 0), np.int64)
        real = np.concatenate(self._real, axis=1) if self._real else np.zeros((4, 0))
        entries = np.array([one.identifier for one in found], dtype=np.int64)
        rank = np.full(max(entries.max(initial=0), whole[0].max(initial=0)) + 1, -1)
        rank[entries] = np.arange(entries.size)
        place = rank[whole[0]]
        order = np.argsort(place, kind="stable")
        order = order[place[order] >= 0]
        whole, real = whole[:, order], real[:, order]
        return History(
            acquisitions=found,
            quantities=tuple(self._quantities),
            methods=tuple(self._methods),
            acquisition=place[order],
            position=whole[1],
            quantity=whole[2],
            method=whole[3],
            values=real[0],
            uncertainties=real[1],
            conformity=whole[4],
            lower=real[2],
            upper=real[3],
        )


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
