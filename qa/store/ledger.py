"""What every entry has in common: one transaction, a place in the chain, a line in the heads file, and the proof of it all."""

import getpass
from collections.abc import Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import replace
from datetime import datetime
from types import TracebackType
from typing import Self

from sqlalchemy import Connection, select

from qa.errors import UsageError
from qa.store.chain import Head, Who, append, clock_remark, head
from qa.store.database import Database
from qa.store.heads import Heads
from qa.store.tables import entries
from qa.store.verify import Anchor, Verification, verify, verify_tables

__all__ = ["Ledger", "correctable", "current_user", "need_reason"]


def current_user(name: str = "") -> Who:
    """Say who runs this program: the operating system's user, and the name given."""
    try:
        return Who(getpass.getuser(), name)
    except (KeyError, OSError, ImportError):
        return Who("unknown", name)


class Ledger:
    """The chain of entries in an open database."""

    def __init__(self, database: Database, heads: Heads) -> None:
        self._database = database
        self._heads = heads

    def __enter__(self) -> Self:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the database."""
        self._database.close()

    @contextmanager
    def _adding(self, when: datetime) -> Iterator[Connection]:
        """Open one transaction; what it added to the chain is noted in the heads file once it is kept."""
        with self._database.writing() as connection:
            before, _ = head(connection)
            yield connection
            after, _ = head(connection)
        if after != before:
            self._heads.add(after, when)

    def withdraw(self, number: int, *, why: str, when: datetime, who: Who | None = None) -> int:
        """Withdraw an acquisition, event, baseline or sign-off: it stays in the record and counts no longer.

        Returns
        -------
        int
            The number of the entry that says so.

        Raises
        ------
        UsageError
            There is no such entry, it cannot be withdrawn, it was corrected before, or no reason is given.
        """
        need_reason(why, "a withdrawal")
        with self._adding(when) as connection:
            correctable(connection, number, {"acquisition", "event", "baseline", "sign-off"})
            return append(connection, "withdrawal", lambda _: {}, at=when, who=who or current_user(), why=why, corrects=number)

    def head(self) -> Head:
        """Give the number and hash of the last entry, for a report to print."""
        with self._database.reading() as connection:
            return head(connection)[0]

    def began(self) -> datetime | None:
        """Give the time of the first entry, None while there is none."""
        with self._database.reading() as connection:
            written_at = connection.execute(select(entries.c.written_at).where(entries.c.number == 1)).scalar()
            return None if written_at is None else datetime.fromisoformat(written_at)

    def clock_remark(self, now: datetime) -> str | None:
        """Say that this machine's clock stands before the last entry's time, None where it does not."""
        with self._database.reading() as connection:
            return clock_remark(head(connection)[1], now) or None

    def verify(self, anchors: Iterable[Anchor] = ()) -> Verification:
        """Prove that nothing in the record was altered, removed or reordered, or say where it was.

        Parameters
        ----------
        anchors : iterable of (str, Head or str)
            Heads known from elsewhere, such as a printed report, each with a name for it; a text is a hash, or at least its
            first eight digits. The heads file is read anyway.

        Raises
        ------
        UsageError
            A text is no beginning of a hash.
        """
        with ThreadPoolExecutor(max_workers=1) as beside, self._database.reading() as connection:
            tables = beside.submit(self._verify_tables)
            found = verify(connection, [*anchors, *self._heads.read()])
            return replace(found, problems=tuple(dict.fromkeys((*found.problems, *tables.result()))))

    def _verify_tables(self) -> tuple[str, ...]:
        with self._database.reading() as connection:
            return verify_tables(connection)


def need_reason(why: str, what: str) -> None:
    """Ask for a reason.

    Raises
    ------
    UsageError
        None was given.
    """
    if not why.strip():
        raise UsageError(f"No reason was given: {what} needs one.")


def correctable(connection: Connection, number: int, kinds: set[str]) -> None:
    """Check that an entry can be corrected or withdrawn.

    Raises
    ------
    UsageError
        There is none of that number, it is of another kind, or it was corrected before.
    """
    kind = connection.execute(select(entries.c.kind).where(entries.c.number == number)).scalar()
    if kind not in kinds:
        found = "there is none of that number" if kind is None else f"it is of the kind {kind!r}"
        raise UsageError(f"Entry {number} cannot be corrected: {found}; it must be of the kind {' or '.join(sorted(kinds))}.")
    later = connection.execute(select(entries.c.number).where(entries.c.corrects == number)).scalar()
    if later is not None:
        raise UsageError(f"Entry {number} was corrected by entry {later}: correct that one.")
