"""The chain: every entry carries the hash of the one before, and covers every value of every row that belongs to it.

An entry's hash is the SHA-256 of the JSON text

    ["evenfield-record-1", number, kind, written_at, user, name, why, remark, corrects, previous, [[table, rows], ...]]

in UTF-8 without blanks, where `rows` holds the values of the table's columns in order, `entry` left out; tables without a row
are left out. Floats are written in their shortest form that reads back to the same bits, so the text can be made again from
the database alone, by any program.

What the chain shows: a changed value, a row added or removed, an entry removed from the middle, exchanged or put in.
What it cannot show by itself: that the *last* entries were cut off, or that somebody made the whole chain anew. For that the
head, the number and hash of the last entry, has to be known from elsewhere: every commit writes it to a file beside the
record (`qa.store.heads`), sign-offs and reports carry it, and `qa.store.verify` holds the chain against all of them.
"""

import hashlib
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import Connection, Table, insert, select

from qa.store.tables import CONTENT_TABLES, entries

__all__ = ["GENESIS", "HEADER", "Head", "Who", "append", "clock_remark", "entry_hash", "head"]

GENESIS = ""
"""What the first entry carries in place of a hash."""

_FORMAT = "evenfield-record-1"
HEADER = ("number", "kind", "written_at", "user", "name", "why", "remark", "corrects", "previous")
_ENCODE = json.JSONEncoder(ensure_ascii=False, separators=(",", ":"), allow_nan=False).encode

Rows = Mapping[Table, Sequence[Mapping[str, Any]]]


@dataclass(frozen=True)
class Who:
    """Who did it: the operating system's user and, where given, a person's name."""

    user: str
    name: str = ""


@dataclass(frozen=True)
class Head:
    """The end of the chain at some time: the number of its last entry and that entry's hash; 0 and "" before the first."""

    number: int
    hash: str


def entry_hash(header: Sequence[Any], content: Sequence[tuple[str, Sequence[Sequence[Any]]]]) -> str:
    """Hash one entry.

    Parameters
    ----------
    header : sequence
        number, kind, written_at, user, name, why, remark, corrects, previous.
    content : sequence of (table name, rows)
        In the order of `CONTENT_TABLES`, tables without a row left out.
    """
    return hashlib.sha256(_ENCODE([_FORMAT, *header, content]).encode("utf-8", "surrogatepass")).hexdigest()


def head(connection: Connection) -> tuple[Head, str]:
    """Give the end of the chain, and when it was written ("" before the first entry)."""
    query = select(entries.c.number, entries.c.hash, entries.c.written_at).order_by(entries.c.number.desc()).limit(1)
    row = connection.execute(query).first()
    return (Head(0, GENESIS), "") if row is None else (Head(row[0], row[1]), row[2])


def append(
    connection: Connection,
    kind: str,
    rows: Callable[[int], Rows],
    *,
    at: datetime,
    who: Who,
    why: str = "",
    corrects: int | None = None,
) -> int:
    """Write one entry with its rows; the caller's transaction makes it all or nothing.

    Parameters
    ----------
    connection : Connection
        In a writing transaction.
    kind : str
        What sort of entry it is.
    rows : callable
        Gives, for the entry's number, the rows of each table as values by column, `entry` left out.
    at : datetime
        The machine's clock; a time without zone is local. Where it lies before that of the last entry the entry is
        written all the same, with a remark.
    who, why, corrects
        Who did it, the reason given, and the number of the entry that this one takes the place of.

    Returns
    -------
    int
        The entry's number.
    """
    last, last_at = head(connection)
    number = last.number + 1
    written_at = at.astimezone(UTC).isoformat()
    clean = {table: [_clean(table, row) for row in of_table] for table, of_table in rows(number).items() if of_table}
    content = [(table.name, [list(row.values()) for row in clean[table]]) for table in CONTENT_TABLES if table in clean]
    header = [
        number, kind, written_at, _text(who.user), _text(who.name), _text(why), clock_remark(last_at, at), corrects, last.hash
    ]  # fmt: skip
    connection.execute(insert(entries).values(**dict(zip(HEADER, header, strict=True)), hash=entry_hash(header, content)))
    for table in CONTENT_TABLES:
        if table in clean:
            connection.execute(insert(table), [{"entry": number, **row} for row in clean[table]])
    return number


def clock_remark(last_at: str, now: datetime) -> str:
    """Say that the clock stands before the last entry's time; empty where it does not."""
    if not last_at:
        return ""
    behind = datetime.fromisoformat(last_at) - now.astimezone(UTC)
    if behind.total_seconds() <= 1:
        return ""
    return f"this machine's clock stands {_span(behind.total_seconds())} before the time of the last entry: check the clock"


def _span(seconds: float) -> str:
    for unit, length in (("days", 86400.0), ("hours", 3600.0), ("minutes", 60.0)):
        if seconds >= 2 * length:
            return f"{seconds / length:.0f} {unit}"
    return f"{seconds:.0f} seconds"


def _clean(table: Table, row: Mapping[str, Any]) -> dict[str, Any]:
    """Give the values of all columns but `entry` in order, each of a type that every database gives back as it was."""
    return {column.name: _value(row.get(column.name), column.type.python_type) for column in table.c if column.name != "entry"}


def _value(value: Any, kind: type) -> Any:  # noqa: ANN401 - a column's value
    if value is None:
        return None
    if kind is float:
        return float(value) + 0.0  # -0.0 becomes 0.0, as SQLite would make it
    if kind is int:
        return int(value)
    return _text(str(value))


def _text(text: str) -> str:
    """Make a text that every database can keep: no NUL, no half of a surrogate pair."""
    return text.replace("\0", "\N{REPLACEMENT CHARACTER}").encode("utf-8", "replace").decode("utf-8")
