"""What is read from the record; each function works on an open connection and sees one state."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime
from itertools import groupby
from operator import attrgetter, itemgetter
from typing import Any

from sqlalchemy import Column, Connection, Row, Select, Table, select

from qa.records import RecordedAcquisition, Session
from qa.store import rows
from qa.store.chain import Who
from qa.store.tables import (
    acquisitions,
    details,
    entries,
    files,
    limit_sets,
    measurements,
    not_measured,
    refusals,
    series,
    sessions,
    software,
    verdicts,
)

__all__ = [
    "MOST_NAMES",
    "LimitSet",
    "Refusal",
    "acquisition_of",
    "acquisition_rows",
    "by_entry",
    "grouped",
    "known",
    "latest_limits",
    "limit_versions",
    "refusals_since",
    "same",
    "sessions_between",
    "standing_acquisitions",
]


MOST_NAMES = 500
"""Values in one IN list; SQLite takes more, but not in every build."""


@dataclass(frozen=True)
class LimitSet:
    """One version of the limits: its content as canonical JSON, and who wrote it, when and why."""

    version: int
    sha256: str
    content: str
    who: Who
    when: datetime
    why: str


@dataclass(frozen=True)
class Refusal:
    """One file that was not taken in."""

    entry: int
    path: str
    reason: str
    sha256: str
    when: datetime


@dataclass(frozen=True)
class Earlier:
    """The latest entry of one acquisition, and how often it was corrected."""

    entry: int
    revision: int


def known(connection: Connection, column: Column[str], values: Iterable[str]) -> set[str]:
    """Tell which of these values the column holds."""
    wanted = sorted(set(values) - {""})
    found: set[str] = set()
    for start in range(0, len(wanted), MOST_NAMES):
        found.update(connection.execute(select(column).where(column.in_(wanted[start : start + MOST_NAMES]))).scalars())
    return found


def same(connection: Connection, table: Table, row: Mapping[str, Any]) -> int | None:
    """Give the entry of a row with these values, None where there is none."""
    query = select(table.c.entry).where(*(table.c[name] == value for name, value in row.items())).limit(1)
    return connection.execute(query).scalar()


def acquisition_of(connection: Connection, content_sha256: str) -> Earlier | None:
    """Find the latest entry of an acquisition by the hash of what was measured."""
    query = (
        select(acquisitions.c.entry, acquisitions.c.revision)
        .where(acquisitions.c.content_sha256 == content_sha256)
        .order_by(acquisitions.c.revision.desc())
        .limit(1)
    )
    row = connection.execute(query).first()
    return None if row is None else Earlier(row.entry, row.revision)


def _limit_sets(connection: Connection, query: Select[Any]) -> tuple[LimitSet, ...]:
    return tuple(
        LimitSet(
            row.version, row.sha256, row.content, Who(row.user, row.name), datetime.fromisoformat(row.written_at), row.why
        )
        for row in connection.execute(query)
    )


_LIMITS = select(limit_sets, entries.c.user, entries.c.name, entries.c.written_at, entries.c.why).join(
    entries, entries.c.number == limit_sets.c.entry
)


def limit_versions(connection: Connection) -> tuple[LimitSet, ...]:
    """Give every version of the limits in order."""
    return _limit_sets(connection, _LIMITS.order_by(limit_sets.c.version))


def latest_limits(connection: Connection) -> LimitSet | None:
    """Give the limits in force, None before the first."""
    return next(iter(_limit_sets(connection, _LIMITS.order_by(limit_sets.c.version.desc()).limit(1))), None)


def refusals_since(connection: Connection, since: datetime | None) -> tuple[Refusal, ...]:
    """Give what was refused at or after a time, the earliest first."""
    query = select(refusals, entries.c.written_at).join(entries, entries.c.number == refusals.c.entry)
    if since is not None:
        query = query.where(entries.c.written_at >= since.astimezone(UTC).isoformat())
    return tuple(
        Refusal(row.entry, row.path, row.reason, row.sha256, datetime.fromisoformat(row.written_at))
        for row in connection.execute(query.order_by(refusals.c.entry))
    )


def standing_acquisitions(scanner_name: str | None, from_day: date | None, to_day: date | None) -> Select[tuple[int]]:
    """Select the numbers of the acquisitions of a period that no later entry has taken the place of."""
    # Above 0 means not null, and lets the index be used.
    corrected = select(entries.c.corrects).where(entries.c.corrects > 0)
    query = select(acquisitions.c.entry).join(sessions, sessions.c.entry == acquisitions.c.session)
    query = query.where(acquisitions.c.entry.not_in(corrected))
    if scanner_name is not None:
        query = query.where(sessions.c.scanner_name == scanner_name)
    if from_day is not None:
        query = query.where(sessions.c.day >= from_day.isoformat())
    if to_day is not None:
        query = query.where(sessions.c.day <= to_day.isoformat())
    return query


def acquisition_rows(
    connection: Connection, scanner_name: str | None, from_day: date | None, to_day: date | None
) -> Sequence[Row[Any]]:
    """Give the acquisitions of a period, with what the tables beside say of them, in order of scanner, day and time."""
    query = (
        select(
            acquisitions,
            sessions.c.scanner_name,
            sessions.c.day,
            software.c.version.label("software_version"),
            limit_sets.c.sha256.label("limits_sha256"),
        )
        .join(sessions, sessions.c.entry == acquisitions.c.session)
        .join(software, software.c.entry == acquisitions.c.software)
        .join(limit_sets, limit_sets.c.version == acquisitions.c.limits_version)
        .where(acquisitions.c.entry.in_(standing_acquisitions(scanner_name, from_day, to_day)))
        .order_by(sessions.c.scanner_name, sessions.c.day, acquisitions.c.acquired_at, acquisitions.c.entry)
    )
    return connection.execute(query).all()


def sessions_between(
    connection: Connection, scanner_name: str | None, from_day: date | None, to_day: date | None
) -> tuple[Session, ...]:
    """Give the sessions of a period in order of scanner and day, with all that was recorded of them."""
    wanted = standing_acquisitions(scanner_name, from_day, to_day)
    parts = {table: by_entry(connection, table, wanted) for table in (series, files, measurements, not_measured, verdicts)}
    texts = {
        row.entry: row.content
        for row in connection.execute(select(details.c.entry, details.c.content).where(details.c.entry.in_(wanted)))
    }
    build = rows.Builder()
    found: list[tuple[tuple[str, str], RecordedAcquisition]] = []
    for row in acquisition_rows(connection, scanner_name, from_day, to_day):
        of = {table: rows_of.get(row.entry, ()) for table, rows_of in parts.items()}
        judged = rows.judged_from_rows(of[measurements], texts[row.entry], of[verdicts])
        acquisition = build.acquisition(row, series=of[series], files=of[files], judged=judged, not_measured=of[not_measured])
        found.append(((row.scanner_name, row.day), acquisition))
    return grouped(found)


def grouped(found: Iterable[tuple[tuple[str, str], RecordedAcquisition]]) -> tuple[Session, ...]:
    """Put acquisitions that stand in order of scanner and day into sessions."""
    return tuple(
        Session(name, date.fromisoformat(day), tuple(acquisition for _, acquisition in group))
        for (name, day), group in groupby(found, key=itemgetter(0))
    )


def by_entry(
    connection: Connection, table: Table, wanted: Select[tuple[int]] | Sequence[int]
) -> dict[int, Sequence[Row[Any]]]:
    """Give the rows of a table for these entries, each entry's in order."""
    query = select(table).where(table.c.entry.in_(wanted)).order_by(table.c.entry, table.c.position)
    return {entry: list(group) for entry, group in groupby(connection.execute(query), key=attrgetter("entry"))}
