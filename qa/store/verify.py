"""Prove that nothing in the record was altered, removed or reordered, or say where it was."""

import sqlite3
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, or_, select
from sqlalchemy.exc import DBAPIError
from sqlalchemy.sql import Select

from qa.store.chain import GENESIS, HEADER, Head, entry_hash
from qa.store.database import check_tables
from qa.store.tables import CONTENT_TABLES, entries

__all__ = ["Verification", "verify", "verify_tables"]

_BATCH = 1000
_MOST_PROBLEMS = 20
Content = list[tuple[str, list[Sequence[Any]]]]
_UNREADABLE = "Could not decode to UTF-8"


@dataclass(frozen=True)
class Verification:
    """What came of checking the chain.

    Attributes
    ----------
    head : Head
        The end of the chain as the database has it.
    problems : tuple of str
        Where the record was altered, in plain sentences; empty where it is whole.
    remarks : tuple of str
        What a person should know but what is no proof of an alteration.
    """

    head: Head
    problems: tuple[str, ...]
    remarks: tuple[str, ...]

    @property
    def whole(self) -> bool:
        """Tell whether nothing was found altered, removed or reordered."""
        return not self.problems


def verify(connection: Connection, anchors: Iterable[tuple[str, Head]] = ()) -> Verification:
    """Go through the whole record and hold every value against the chain.

    Parameters
    ----------
    connection : Connection
        In a reading transaction, so that it sees one state.
    anchors : iterable of (str, Head)
        Heads known from elsewhere, each with where it is known from.

    Returns
    -------
    Verification
        Where the chain breaks, if it does.
    """
    anchors = list(anchors)
    try:
        return _verify(connection, anchors)
    except (sqlite3.DatabaseError, DBAPIError) as error:
        if _UNREADABLE not in str(error):
            return Verification(Head(0, GENESIS), (_damaged(error),), ())
    # A text that is not UTF-8 any more: read it byte by byte, so that the walk can say which entry it belongs to.
    driver = connection.connection.dbapi_connection
    setattr(driver, "text_factory", lambda raw: raw.decode("utf-8", "surrogateescape"))  # noqa: B010 - of any driver
    try:
        return _verify(connection, anchors)
    except (sqlite3.DatabaseError, DBAPIError) as error:
        return Verification(Head(0, GENESIS), (_damaged(error),), ())
    finally:
        setattr(driver, "text_factory", str)  # noqa: B010 - the same


def verify_tables(connection: Connection) -> tuple[str, ...]:
    """Say what is wrong with the tables, triggers and indexes themselves; it may run beside `verify`."""
    try:
        return tuple(check_tables(connection))
    except (sqlite3.DatabaseError, DBAPIError) as error:
        return (_damaged(error),)


def _damaged(error: Exception) -> str:
    """Say that the database file cannot be read through; any other fault goes on its way."""
    if not any(sign in str(error) for sign in ("malformed", "not a database", _UNREADABLE)):
        raise error
    return "the database file itself is damaged: restore it from a backup"


def _verify(connection: Connection, anchors: Iterable[tuple[str, Head]]) -> Verification:
    walk = _Walk()
    columns = [entries.c[name] for name in (*HEADER, "hash")]
    done = 0
    while batch := _rows(connection, select(*columns).where(entries.c.number > done).order_by(entries.c.number).limit(_BATCH)):
        last = batch[-1][0]
        content = _content(connection, done, last)
        for row in batch:
            walk.step(row, content.pop(row[0], []))
        walk.strays(content)
        done = last
    walk.strays(_content(connection, done, None))
    problems = walk.problems
    for where, anchor in anchors:
        if anchor.number > walk.last.number or (anchor.number != 0 and anchor.number not in walk.hashes):
            problems.append(
                f"{where} knows entry {anchor.number}, but the record ends with entry {walk.last.number}: its end was cut off"
            )
        elif anchor.number != 0 and walk.hashes[anchor.number] != anchor.hash:
            problems.append(
                f"{where} knows entry {anchor.number} with another hash: the record was made anew from there or before"
            )
    if len(problems) > _MOST_PROBLEMS:
        problems[_MOST_PROBLEMS:] = [f"and {len(problems) - _MOST_PROBLEMS} more"]
    return Verification(walk.last, tuple(problems), tuple(walk.remarks))


class _Walk:
    """Goes from entry to entry and notes where the chain breaks."""

    def __init__(self) -> None:
        self.last = Head(0, GENESIS)
        self.hashes: dict[int, str] = {}
        self.problems: list[str] = []
        self.remarks: list[str] = []

    def step(self, row: Sequence[Any], content: Content) -> None:
        """Check one entry with all its rows."""
        number, kind, written_at, remark, previous, stored = row[0], row[1], row[2], row[6], row[8], row[9]
        what = f"entry {number} ({kind}, written {written_at})"
        due = self.last.number + 1
        if number != due:
            gone = f"entry {due} is" if number == due + 1 else f"entries {due} to {number - 1} are"
            self.problems.append(f"{gone} missing before {what}")
        elif previous != self.last.hash:
            self.problems.append(
                f"{what} does not carry the hash of the entry before it: one of the two was altered or put in"
            )
        if _hash_or_none(row[:9], content) != stored:
            self.problems.append(f"{what} was altered: what it holds is not what its hash was made from")
        if remark:
            self.remarks.append(f"{what}: {remark}")
        self.hashes[number] = stored
        self.last = Head(number, stored)

    def strays(self, content: Mapping[Any, Content]) -> None:
        """Note rows that belong to no entry."""
        for entry, tables in content.items():
            names = ", ".join(name for name, _ in tables)
            self.problems.append(f"rows name entry {entry!r}, which there is not (in {names})")


def _hash_or_none(header: Sequence[Any], content: Content) -> str | None:
    """Hash an entry read back; None where a value is of a type that was never written."""
    try:
        return entry_hash(header, content)
    except (TypeError, ValueError):
        return None


def _content(connection: Connection, after: int, to: int | None) -> dict[Any, Content]:
    """Read the rows of entries after one number, up to another; with none, all rows that lie outside 1 to `after`."""
    found: dict[Any, Content] = {}
    for table in CONTENT_TABLES:
        entry, position = table.c.entry, table.c.get("position")
        where = entry.between(after + 1, to) if to is not None else or_(entry < 1, entry > after)
        query = select(table).where(where).order_by(entry, *([] if position is None else [position]))
        rows: list[Sequence[Any]] = []
        number: Any = None
        for row in _rows(connection, query):
            if row[0] != number or not rows:
                number, rows = row[0], []
                found.setdefault(number, []).append((table.name, rows))
            rows.append(row[1:])
    return found


def _rows(connection: Connection, query: Select[Any]) -> Sequence[Sequence[Any]]:
    """Read as the driver's own tuples: a record of ten years has over a million rows."""
    cursor = connection.connection.cursor()
    try:
        cursor.execute(str(query.compile(dialect=connection.dialect, compile_kwargs={"literal_binds": True})))
        rows: Sequence[Sequence[Any]] = cursor.fetchall()
        return rows
    finally:
        cursor.close()
