"""The record: what the rest of the program may ask of it and add to it."""

import getpass
from collections.abc import Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from datetime import date, datetime
from hashlib import sha256 as _sha256
from pathlib import Path, PurePath
from types import TracebackType
from typing import Any, Self

from sqlalchemy import Connection, Table, func, select

from qa.errors import FaultError, UsageError
from qa.records import Outcome, Session, Verdict
from qa.store import queries, rows
from qa.store.chain import Head, Who, append, clock_remark, head
from qa.store.database import Database
from qa.store.heads import Heads
from qa.store.intake import Intake, store
from qa.store.tables import (
    entries,
    files,
    limit_sets,
    phantom_definitions,
    refusals,
    runs,
    sessions,
)
from qa.store.verify import Verification, verify, verify_tables

__all__ = ["Record", "current_user", "open_record"]

_NOWHERE: Mapping[str, str | PurePath] = {}


def current_user(name: str = "") -> Who:
    """Say who runs this program: the operating system's user, and the name given."""
    try:
        return Who(getpass.getuser(), name)
    except (KeyError, OSError, ImportError):
        return Who("unknown", name)


def open_record(place: str | Path, *, create: bool = True, heads: Path | None = None, busy_s: float = 30.0) -> "Record":
    """Open the record, make it where there is none, and bring one of an earlier version up to date.

    Parameters
    ----------
    place : str or pathlib.Path
        A database URL, or the path of an SQLite file.
    create : bool
        Whether a missing record is to be made.
    heads : pathlib.Path or None
        The heads file (`qa.store.heads`); beside the SQLite file where none is named.
    busy_s : float
        How long to wait for another program that writes.

    Returns
    -------
    Record
        To be closed, or used in a `with` statement.

    Raises
    ------
    FaultError
        It is locked, damaged, read-only where it has to be written, of another program or of a newer version, or the disk
        is full; the sentence says which.
    """
    database = Database(place, busy_s=busy_s)
    known = Heads(heads or (None if database.path is None else Path(f"{database.path}.heads")))
    last = known.last()
    if last is not None and database.path is not None and not _has_content(database.path):
        raise FaultError(
            f"{database.name}: is missing or empty, but {last.number} entries were written to it: restore it from a backup, "
            f"or move {known.path} away to begin anew."
        )
    database.prepare(create=create)
    return Record(database, known)


def _has_content(path: Path) -> bool:
    return path.exists() and path.stat().st_size > 0


class Record:
    """An open record. Every method that adds is one transaction: all of it is kept, or nothing.

    All methods raise `FaultError` where the database or the disk fails.
    """

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

    def known_files(self, sha256s: Iterable[str]) -> set[str]:
        """Tell which of these files have been taken in; a file counts once all that it holds has been stored."""
        with self._database.reading() as connection:
            return queries.known(connection, files.c.sha256, sha256s)

    def kept_at(self, sha256: str) -> PurePath | None:
        """Give where a file that was taken in is kept, from the department folder; None where it was never taken in."""
        with self._database.reading() as connection:
            path = connection.execute(select(files.c.path).where(files.c.sha256 == sha256)).scalar()
        return None if path is None else PurePath(path)

    def known_refusals(self, sha256s: Iterable[str]) -> set[str]:
        """Tell which of these files have been refused before."""
        with self._database.reading() as connection:
            return queries.known(connection, refusals.c.sha256, sha256s)

    def store(
        self,
        outcome: Outcome,
        verdicts: Sequence[Verdict | None],
        *,
        scanner_name: str,
        phantom_sha256: str,
        limits_version: int,
        taken_in_at: datetime,
        software_version: str,
        kept_at: Mapping[str, str | PurePath] = _NOWHERE,
        who: Who | None = None,
    ) -> int:
        """Store one acquisition; the parameters are those of `Intake`.

        Returns
        -------
        int
            Its number. An acquisition that was stored before is not stored again: its number is given.
        """
        intake = Intake(
            outcome, verdicts, scanner_name, phantom_sha256, limits_version, taken_in_at, software_version, kept_at
        )
        return self.store_all([intake], who=who)[0]

    def store_all(self, intakes: Sequence[Intake], *, who: Who | None = None) -> tuple[int, ...]:
        """Store several acquisitions in one transaction: those that share a file belong together.

        Parameters
        ----------
        intakes : sequence of Intake
            What was measured.
        who : Who or None
            Who did it; the user that runs the program where none is named.

        Returns
        -------
        tuple of int
            The number of each. One that was stored before is not stored again.

        Raises
        ------
        UsageError
            An acquisition has no date, so that it belongs to no session.
        """
        with self._database.writing() as connection:
            numbers = tuple(store(connection, intake, who or current_user()) for intake in intakes)
            end, _ = head(connection)
        if intakes:
            self._heads.add(end, intakes[-1].taken_in_at)
        return numbers

    def replace(self, number: int, intake: Intake, *, why: str, who: Who | None = None) -> int:
        """Store an acquisition anew, as a correction of an earlier entry that stays where it is.

        Returns
        -------
        int
            The new entry's number.

        Raises
        ------
        UsageError
            There is no such acquisition, it was corrected before, or no reason is given.
        """
        _need(why, "a correction")
        with self._database.writing() as connection:
            _correctable(connection, number, {"acquisition"})
            made = store(connection, intake, who or current_user(), corrects=number, why=why)
            end, _ = head(connection)
        self._heads.add(end, intake.taken_in_at)
        return made

    def withdraw(self, number: int, *, why: str, when: datetime, who: Who | None = None) -> int:
        """Withdraw an entry: it stays in the record and counts no longer.

        Raises
        ------
        UsageError
            There is no such entry, it cannot be withdrawn, it was corrected before, or no reason is given.
        """
        _need(why, "a withdrawal")
        with self._database.writing() as connection:
            _correctable(connection, number, {"acquisition", *_WITHDRAWN_TOO})
            made = append(connection, "withdrawal", lambda _: {}, at=when, who=who or current_user(), why=why, corrects=number)
            end, _ = head(connection)
        self._heads.add(end, when)
        return made

    def refuse(self, path: Path | str, reason: str, sha256: str, when: datetime, *, who: Who | None = None) -> int:
        """Record that a file was not taken in; the reason holds nothing of a person. The same twice is recorded once."""
        with self._database.writing() as connection:
            row = {"path": PurePath(path).as_posix(), "reason": reason, "sha256": sha256}
            found = queries.same(connection, refusals, row)
            if found is not None:
                return found
            made = append(connection, "refusal", lambda _: {refusals: [row]}, at=when, who=who or current_user())
            end, _ = head(connection)
        self._heads.add(end, when)
        return made

    def note_run(
        self,
        command: str,
        started_at: datetime,
        when: datetime,
        exit_status: int,
        summary: Mapping[str, Any],
        *,
        who: Who | None = None,
    ) -> int:
        """Record that a run ended, and how."""
        row = {
            "command": command,
            "started_at": started_at.isoformat(),
            "exit_status": int(exit_status),
            "summary": rows.dump(summary),
        }
        return self._add("run", runs, row, when=when, who=who)

    def limits_version(self, limits_json: str, who: Who, when: datetime, why: str, *, based_on: int | None = None) -> int:
        """Give the version of these limits, and keep them as a new one where they differ from the latest.

        Parameters
        ----------
        limits_json : str
            The limits in force, as `qa.site.limits_json` writes them.
        who, when, why
            Who changed them, when, and the reason given.
        based_on : int or None
            The version that the change was made from; None where the file itself is what counts.

        Raises
        ------
        UsageError
            Somebody else has changed the limits since `based_on`.
        """
        digest = _sha256(limits_json.encode("utf-8")).hexdigest()
        with self._database.writing() as connection:
            latest = queries.latest_limits(connection)
            if based_on is not None and latest is not None and latest.version != based_on:
                raise UsageError(
                    f"The limits were changed meanwhile: version {latest.version} was written at {latest.when} by "
                    f"{latest.who.name or latest.who.user}, and your change was made from version {based_on}: "
                    "look at the new version and make your change again."
                )
            if latest is not None and latest.sha256 == digest:
                return latest.version
            number = 1 if latest is None else latest.version + 1
            row = {"version": number, "sha256": digest, "content": limits_json}
            append(connection, "limits", lambda _: {limit_sets: [row]}, at=when, who=who, why=why)
            end, _ = head(connection)
        self._heads.add(end, when)
        return number

    def limit_sets(self) -> tuple[queries.LimitSet, ...]:
        """Give every version of the limits, the first one first."""
        with self._database.reading() as connection:
            return queries.limit_versions(connection)

    def keep_phantom(self, name: str, content: str, when: datetime, *, who: Who | None = None) -> str:
        """Keep a phantom's definition file where it is not kept yet, and give its SHA-256."""
        digest = _sha256(content.encode("utf-8")).hexdigest()
        with self._database.writing() as connection:
            if queries.known(connection, phantom_definitions.c.sha256, [digest]):
                return digest
            row = {"sha256": digest, "name": name, "content": content}
            append(connection, "phantom", lambda _: {phantom_definitions: [row]}, at=when, who=who or current_user())
            end, _ = head(connection)
        self._heads.add(end, when)
        return digest

    def phantom(self, sha256: str) -> str | None:
        """Give the definition file of that hash, None where it was never kept."""
        with self._database.reading() as connection:
            query = select(phantom_definitions.c.content).where(phantom_definitions.c.sha256 == sha256)
            return connection.execute(query).scalar()

    def sessions(
        self, scanner_name: str | None = None, from_day: date | None = None, to_day: date | None = None
    ) -> tuple[Session, ...]:
        """Give the sessions of a scanner, or of all, over a period with both days in it, in order of name and day."""
        with self._database.reading() as connection:
            return queries.sessions_between(connection, scanner_name, from_day, to_day)

    def last_days(self) -> dict[str, date]:
        """Give the day of the latest session of every scanner that has one."""
        with self._database.reading() as connection:
            query = select(sessions.c.scanner_name, func.max(sessions.c.day)).group_by(sessions.c.scanner_name)
            return {name: date.fromisoformat(day) for name, day in connection.execute(query)}

    def refusals(self, since: datetime | None = None) -> tuple[queries.Refusal, ...]:
        """Give what was refused, the earliest first."""
        with self._database.reading() as connection:
            return queries.refusals_since(connection, since)

    def head(self) -> Head:
        """Give the number and hash of the last entry, for a report to print."""
        with self._database.reading() as connection:
            return head(connection)[0]

    def clock_remark(self, now: datetime) -> str | None:
        """Say that this machine's clock stands before the last entry's time, None where it does not."""
        with self._database.reading() as connection:
            return clock_remark(head(connection)[1], now) or None

    def verify(self, anchors: Iterable[tuple[str, Head]] = ()) -> Verification:
        """Prove that nothing in the record was altered, removed or reordered, or say where it was.

        Parameters
        ----------
        anchors : iterable of (str, Head)
            Heads known from elsewhere, such as a printed report, each with a name for it; the heads file is read anyway.
        """
        with ThreadPoolExecutor(max_workers=1) as beside, self._database.reading() as connection:
            tables = beside.submit(self._verify_tables)
            found = verify(connection, [*anchors, *self._heads.read()])
            return replace(found, problems=tuple(dict.fromkeys((*found.problems, *tables.result()))))

    def _verify_tables(self) -> tuple[str, ...]:
        with self._database.reading() as connection:
            return verify_tables(connection)

    def _add(self, kind: str, table: Table, row: Mapping[str, Any], *, when: datetime, who: Who | None, why: str = "") -> int:
        with self._database.writing() as connection:
            made = append(connection, kind, lambda _: {table: [row]}, at=when, who=who or current_user(), why=why)
            end, _ = head(connection)
        self._heads.add(end, when)
        return made


_WITHDRAWN_TOO: frozenset[str] = frozenset()


def _need(why: str, what: str) -> None:
    if not why.strip():
        raise UsageError(f"No reason was given: {what} needs one.")


def _correctable(connection: Connection, number: int, kinds: set[str]) -> None:
    kind = connection.execute(select(entries.c.kind).where(entries.c.number == number)).scalar()
    if kind not in kinds:
        found = "there is none of that number" if kind is None else f"entry {number} is of the kind {kind!r}"
        raise UsageError(f"Entry {number} cannot be corrected: {found}; it must be of the kind {' or '.join(sorted(kinds))}.")
    later = connection.execute(select(entries.c.number).where(entries.c.corrects == number)).scalar()
    if later is not None:
        raise UsageError(f"Entry {number} was corrected by entry {later}: correct that one.")
