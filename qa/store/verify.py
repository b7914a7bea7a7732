"""Prove that nothing in the record was altered, removed or reordered, or say where it was."""

import re
import sqlite3
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import ColumnElement, Connection, and_, select
from sqlalchemy.exc import DBAPIError
from sqlalchemy.sql import Select

from qa.errors import UsageError
from qa.store.chain import GENESIS, HEADER, Head, entry_hash
from qa.store.database import check_tables
from qa.store.tables import CONTENT_TABLES, entries

__all__ = ["Verification", "verify", "verify_tables"]

_BATCH = 1000
_BEFORE_ALL = -(2**31)
_HASH = re.compile("[0-9a-fA-F]{8,64}")
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


Anchor = tuple[str, Head | str]
"""Where an end of the chain is known from, and that end: number and hash, or the beginning of the hash alone."""


def verify(connection: Connection, anchors: Iterable[Anchor] = ()) -> Verification:
    """Go through the whole record and hold every value against the chain.

    Parameters
    ----------
    connection : Connection
        In a reading transaction, so that it sees one state.
    anchors : iterable of (str, Head or str)
        Heads known from elsewhere, each with where it is known from; a text is a hash, or at least its first eight digits.

    Returns
    -------
    Verification
        Where the chain breaks, if it does.

    Raises
    ------
    UsageError
        A text is no beginning of a hash.
    """
    anchors = list(anchors)
    for where, anchor in anchors:
        if isinstance(anchor, str) and not _HASH.fullmatch(anchor):
            raise UsageError(
                f"{where}: {anchor!r} is not the hash of an entry: give at least its first eight digits (0 to 9, a to f)."
            )
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


def _verify(connection: Connection, anchors: Iterable[Anchor]) -> Verification:
    walk = _Walk()
    columns = [entries.c[name] for name in (*HEADER, "hash")]
    done = _BEFORE_ALL
    while batch := _rows(connection, select(*columns).where(entries.c.number > done).order_by(entries.c.number).limit(_BATCH)):
        last = batch[-1][0]
        content = _content(connection, _between(done, last))
        for row in batch:
            walk.step(row, content.pop(row[0], []))
        walk.strays(content)
        done = last
    walk.strays(_content(connection, lambda entry: entry > done))
    problems = [*walk.problems, *(said for where, anchor in anchors if (said := walk.contradicts(where, anchor)))]
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
        if number < due:
            self.problems.append(f"{what} stands before the first entry: it was put in")
        elif number > due:
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
        if number >= due:
            self.last = Head(number, stored)

    def contradicts(self, where: str, anchor: Head | str) -> str:
        """Say how a head known from elsewhere contradicts the chain; empty where it does not."""
        if isinstance(anchor, str):
            known = any(isinstance(h, str) and h.startswith(anchor.casefold()) for h in self.hashes.values())
            return "" if known else f"{where} knows a hash that no entry has: the record was cut off or made anew"
        if anchor == Head(0, GENESIS):
            return ""
        if anchor.number not in self.hashes:
            end = self.last.number
            return f"{where} knows entry {anchor.number}, but the record ends with entry {end}: its end was cut off"
        if self.hashes[anchor.number] != anchor.hash:
            return f"{where} knows entry {anchor.number} with another hash: the record was made anew from there or before"
        return ""

    def strays(self, content: Mapping[Any, Content]) -> None:
        """Note rows that belong to no entry."""
        for entry, tables in content.items():
            names = ", ".join(name for name, _ in tables)
            self.problems.append(f"rows name entry {entry!r}, which there is not (in {names})")


def _between(after: int, last: int) -> Callable[[ColumnElement[int]], ColumnElement[bool]]:
    return lambda entry: and_(entry > after, entry <= last)


def _hash_or_none(header: Sequence[Any], content: Content) -> str | None:
    """Hash an entry read back; None where a value is of a type that was never written."""
    try:
        return entry_hash(header, content)
    except (TypeError, ValueError):
        return None


def _content(connection: Connection, chosen: Callable[[ColumnElement[int]], ColumnElement[bool]]) -> dict[Any, Content]:
    """Read the rows of the entries that a condition on their numbers chooses."""
    found: dict[Any, Content] = {}
    for table in CONTENT_TABLES:
        entry, position = table.c.entry, table.c.get("position")
        query = select(table).where(chosen(entry)).order_by(entry, *([] if position is None else [position]))
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
