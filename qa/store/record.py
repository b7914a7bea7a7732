"""The record: what the rest of the program may ask of it and add to it."""

from collections.abc import Iterable, Mapping, Sequence
from datetime import date, datetime
from hashlib import sha256 as _sha256
from pathlib import Path, PurePath
from typing import Any

from sqlalchemy import func, select

from qa.errors import FaultError
from qa.records import History, Judged, Outcome, Session, Verdict
from qa.store import queries, rows
from qa.store.chain import Who, append
from qa.store.database import Database
from qa.store.decisions import Decisions
from qa.store.heads import Heads
from qa.store.history import history_between, judged_at, light_sessions
from qa.store.intake import Intake, store
from qa.store.ledger import correctable, current_user, need_reason
from qa.store.tables import files, phantom_definitions, refusals, runs, sessions

__all__ = ["Record", "open_record"]

_NOWHERE: Mapping[str, str | PurePath] = {}


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
    if database.path is not None and not _has_content(database.path) and (last := known.last()) is not None:
        raise FaultError(
            f"{database.name}: is missing or empty, but {last.number} entries were written to it: restore it from a backup, "
            f"or move {known.path} away to begin anew."
        )
    try:
        database.prepare(create=create)
    except BaseException:
        database.close()
        raise
    return Record(database, known)


def _has_content(path: Path) -> bool:
    return path.exists() and path.stat().st_size > 0


class Record(Decisions):
    """An open record. Every method that adds is one transaction: all of it is kept, or nothing.

    All methods raise `FaultError` where the database or the disk fails.
    """

    def known_files(self, sha256s: Iterable[str]) -> set[str]:
        """Tell which of these files have been taken in; a file counts once all that it holds has been stored."""
        with self._database.reading() as connection:
            return queries.known(connection, files.c.sha256, sha256s)

    def kept_at(self, sha256: str) -> PurePath | None:
        """Give where a file that was taken in is kept, from the department folder; None where it was never taken in."""
        with self._database.reading() as connection:
            path = connection.execute(select(files.c.path).where(files.c.sha256 == sha256)).scalar()
        return None if path is None else PurePath(path)

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
        if not intakes:
            return ()
        with self._adding(intakes[-1].taken_in_at) as connection:
            return tuple(store(connection, intake, who or current_user()) for intake in intakes)

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
        need_reason(why, "a correction")
        with self._adding(intake.taken_in_at) as connection:
            correctable(connection, number, {"acquisition"})
            return store(connection, intake, who or current_user(), corrects=number, why=why)

    def refuse(self, path: Path | str, reason: str, sha256: str, when: datetime, *, who: Who | None = None) -> int:
        """Record that a file was not taken in; the reason holds nothing of a person. The same twice is recorded once."""
        row = {"path": PurePath(path).as_posix(), "reason": reason, "sha256": sha256}
        with self._adding(when) as connection:
            found = queries.same(connection, refusals, row)
            if found is not None:
                return found
            return append(connection, "refusal", lambda _: {refusals: [row]}, at=when, who=who or current_user())

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
        with self._adding(when) as connection:
            return append(connection, "run", lambda _: {runs: [row]}, at=when, who=who or current_user())

    def keep_phantom(self, name: str, content: str, when: datetime, *, who: Who | None = None) -> str:
        """Keep a phantom's definition file where it is not kept yet, and give its SHA-256."""
        digest = _sha256(content.encode("utf-8")).hexdigest()
        row = {"sha256": digest, "name": name, "content": content}
        with self._adding(when) as connection:
            if not queries.known(connection, phantom_definitions.c.sha256, [digest]):
                append(connection, "phantom", lambda _: {phantom_definitions: [row]}, at=when, who=who or current_user())
        return digest

    def phantom(self, sha256: str) -> str | None:
        """Give the definition file of that hash, None where it was never kept."""
        with self._database.reading() as connection:
            query = select(phantom_definitions.c.content).where(phantom_definitions.c.sha256 == sha256)
            return connection.execute(query).scalar()

    def sessions(
        self,
        scanner_name: str | None = None,
        from_day: date | None = None,
        to_day: date | None = None,
        *,
        details: bool = True,
    ) -> tuple[Session, ...]:
        """Give the sessions of a scanner, or of all, over a period with both days in it, in order of name and day.

        Without `details` every figure and verdict is there, but not what a picture or a trace needs: details and regions,
        files, series, what was not measured. It takes a tenth of the time.
        """
        period = scanner_name, from_day, to_day
        with self._database.reading() as connection:
            return queries.sessions_between(connection, *period) if details else light_sessions(connection, period)

    def history(self, scanner_name: str | None = None, from_day: date | None = None, to_day: date | None = None) -> History:
        """Give the figures of the same sessions as columns, without details: ten years of fifty scanners in a second."""
        with self._database.reading() as connection:
            return history_between(connection, (scanner_name, from_day, to_day))

    def judged(self, places: Sequence[tuple[int, int]]) -> tuple[Judged, ...]:
        """Give single figures in full, by acquisition and position as `history` names them.

        Raises
        ------
        KeyError
            There is no such acquisition.
        """
        with self._database.reading() as connection:
            return judged_at(connection, places)

    def last_days(self) -> dict[str, date]:
        """Give the day of the latest session of every scanner that has one."""
        with self._database.reading() as connection:
            query = select(sessions.c.scanner_name, func.max(sessions.c.day)).group_by(sessions.c.scanner_name)
            return {name: date.fromisoformat(day) for name, day in connection.execute(query)}

    def refusals(self, since: datetime | None = None) -> tuple[queries.Refusal, ...]:
        """Give what was refused, the earliest first."""
        with self._database.reading() as connection:
            return queries.refusals_since(connection, since)
