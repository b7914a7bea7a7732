"""What people decide: limits, baselines, service events, sign-offs; each with who, when and why."""

import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from datetime import date, datetime
from hashlib import sha256
from typing import Any, Generic, TypeVar, get_args

from sqlalchemy import ColumnElement, Connection, Row, Select, Table, func, select

from qa.errors import UsageError
from qa.quantities import QUANTITIES
from qa.records import Baseline, Event, EventKind
from qa.site.limits import did_you_mean
from qa.store import queries, rows
from qa.store.chain import Head, Who, append, head
from qa.store.ledger import Ledger, correctable, current_user, need_reason
from qa.store.tables import acquisitions, baselines, entries, events, limit_sets, sessions, sign_offs

__all__ = ["Decisions", "Kept", "SignOff"]

T = TypeVar("T")


@dataclass(frozen=True)
class Kept(Generic[T]):
    """Something that was decided, as the record keeps it: its entry's number, who decided it, when and why.

    `corrects` is the number of the earlier entry whose place it takes, None where there is none.
    """

    entry: int
    what: T
    who: Who
    when: datetime
    why: str
    corrects: int | None


@dataclass(frozen=True)
class SignOff:
    """A period of one scanner that a person signed off, both days included.

    `sessions` counts those that the record held of it, and `head` is the end of the record, when it was signed.
    """

    scanner_name: str
    first_day: date
    last_day: date
    comment: str
    sessions: int
    head: Head


class Decisions(Ledger):
    """What people add to the record, and what it says of that.

    A person's clock may be wrong: whatever lies after `today` is refused in a sentence, and an entry written while the clock
    stood before the last one is kept with a remark.
    """

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
        digest = sha256(limits_json.encode("utf-8")).hexdigest()
        with self._adding(when) as connection:
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
            return number

    def limit_sets(self) -> tuple[queries.LimitSet, ...]:
        """Give every version of the limits, the first one first."""
        with self._database.reading() as connection:
            return queries.limit_versions(connection)

    def add_event(
        self, event: Event, *, today: date, when: datetime, who: Who | None = None, why: str = "", corrects: int | None = None
    ) -> int:
        """Record a service event, or planned downtime.

        Parameters
        ----------
        event : Event
            What was done, to which scanner, on which day.
        today : datetime.date
            By the department's clock.
        when, who, why
            Of the entry itself.
        corrects : int or None
            The number of an earlier event whose place this one takes; it then needs a reason.

        Returns
        -------
        int
            The entry's number.

        Raises
        ------
        UsageError
            The event lies in the future, its text is empty, its last day lies before its first, or it names a quantity or
            kind that there is not.
        """
        _check_event(event, today)
        row = {
            "scanner_name": event.scanner_name,
            "day": event.day.isoformat(),
            "until": None if event.until is None else event.until.isoformat(),
            "kind": event.kind,
            "text": event.text,
            "quantities": rows.dump(event.quantities),
            "restarts_baseline": event.restarts_baseline,
        }
        return self._decide("event", events, row, when=when, who=who, why=why, corrects=corrects)

    def events(self, scanner_name: str | None = None, *, withdrawn: bool = False) -> tuple[Kept[Event], ...]:
        """Give the events of a scanner, or of all, in order of their days; those corrected or withdrawn only where asked."""
        return self._kept(events, scanner_name, withdrawn, _event, events.c.day, events.c.entry)

    def set_baseline(
        self,
        baseline: Baseline,
        *,
        today: date,
        when: datetime,
        why: str,
        rests_on: tuple[int, ...] = (),
        who: Who | None = None,
        corrects: int | None = None,
    ) -> int:
        """Keep a baseline that a person accepted; those before it stay in force for the days before its own.

        Parameters
        ----------
        baseline : Baseline
            Its value, and since when it counts.
        rests_on : tuple of int
            The numbers of the acquisitions that it was taken from; empty where it was set by hand.
        today, when, who, why, corrects
            As for `add_event`; a reason is needed.

        Returns
        -------
        int
            The entry's number.

        Raises
        ------
        UsageError
            It rests on one session, begins in the future, has no finite value, or no reason is given.
        """
        _check_baseline(baseline, today)
        need_reason(why, "a baseline")
        row = {
            "scanner_name": baseline.scanner_name,
            "quantity": baseline.quantity,
            "value": baseline.value,
            "standard_uncertainty": baseline.standard_uncertainty,
            "scatter": baseline.scatter,
            "sessions": baseline.sessions,
            "since": baseline.since.isoformat(),
            "phantom": baseline.phantom,
            "protocol": baseline.protocol,
            "coil": baseline.coil,
            "method": baseline.method,
            "rests_on": rows.dump(rests_on),
        }
        return self._decide("baseline", baselines, row, when=when, who=who, why=why, corrects=corrects)

    def baselines(self, scanner_name: str | None = None, *, withdrawn: bool = False) -> tuple[Kept[Baseline], ...]:
        """Give the baselines of a scanner, or of all, in order of the days they count from, later entries last."""
        return self._kept(baselines, scanner_name, withdrawn, _baseline, baselines.c.since, baselines.c.entry)

    def sign(
        self,
        scanner_name: str,
        first_day: date,
        last_day: date,
        *,
        comment: str,
        who: Who,
        today: date,
        when: datetime,
    ) -> int:
        """Sign a period of one scanner off, by name.

        Returns
        -------
        int
            The entry's number.

        Raises
        ------
        UsageError
            No name is given, the period has no session or is not over, or the same person has signed it before.
        """
        if not who.name.strip():
            raise UsageError("A sign-off needs the name of the person who signs.")
        if last_day < first_day:
            raise UsageError(f"The period to sign ends on {last_day}, before it begins on {first_day}: exchange the two.")
        if last_day > today:
            raise UsageError(f"The period to sign ends on {last_day}, in the future (today is {today}): sign up to today.")
        with self._adding(when) as connection:
            count = _sessions_held(connection, scanner_name, first_day, last_day)
            if count == 0:
                raise UsageError(f"There is nothing to sign: {scanner_name} has no session from {first_day} to {last_day}.")
            row: dict[str, Any] = {
                "scanner_name": scanner_name,
                "first_day": first_day.isoformat(),
                "last_day": last_day.isoformat(),
            }
            before = connection.execute(_standing(sign_offs).where(*(sign_offs.c[k] == v for k, v in row.items()))).all()
            same = next((one for one in before if one.name.strip().casefold() == who.name.strip().casefold()), None)
            if same is not None:
                raise UsageError(
                    f"{same.name} has signed {scanner_name} from {first_day} to {last_day} before, as entry {same.entry}."
                )
            end, _ = head(connection)
            row |= {"comment": comment, "sessions": count, "head_number": end.number, "head_hash": end.hash}
            return append(connection, "sign-off", lambda _: {sign_offs: [row]}, at=when, who=who)

    def sign_offs(self, scanner_name: str | None = None, *, withdrawn: bool = False) -> tuple[Kept[SignOff], ...]:
        """Give the sign-offs of a scanner, or of all, in order of their periods."""
        return self._kept(sign_offs, scanner_name, withdrawn, _sign_off, sign_offs.c.first_day, sign_offs.c.entry)

    def added_since(self, signed: Kept[SignOff]) -> tuple[int, ...]:
        """Give the acquisitions of a signed period that were taken in, corrected or withdrawn after it was signed."""
        query = _SIGNED.where(sign_offs.c.entry == signed.entry, sign_offs.c.entry < _CHANGED)
        with self._database.reading() as connection:
            return tuple(entry for _, entry in connection.execute(query.order_by(acquisitions.c.entry)))

    def added_to_signed(self) -> dict[int, tuple[int, ...]]:
        """Give all acquisitions that were taken in, corrected or withdrawn after the last signature on their day.

        Returns
        -------
        dict of int to tuple of int
            Numbers of the acquisitions by the number of that signature; those without any are left out.
        """
        withdrawn = select(entries.c.corrects).where(entries.c.corrects > 0)
        last = func.max(sign_offs.c.entry)
        query = (
            _SIGNED.with_only_columns(last, acquisitions.c.entry)
            .where(sign_offs.c.entry.not_in(withdrawn))
            .group_by(acquisitions.c.entry)
            .having(func.max(_CHANGED) > last)
        )
        found: dict[int, list[int]] = {}
        with self._database.reading() as connection:
            for signed, entry in connection.execute(query.order_by(last, acquisitions.c.entry)):
                found.setdefault(signed, []).append(entry)
        return {signed: tuple(added) for signed, added in found.items()}

    def _decide(
        self,
        kind: str,
        table: Table,
        row: dict[str, Any],
        *,
        when: datetime,
        who: Who | None,
        why: str,
        corrects: int | None,
    ) -> int:
        with self._adding(when) as connection:
            if corrects is not None:
                need_reason(why, "a correction")
                correctable(connection, corrects, {kind})
            return append(
                connection, kind, lambda _: {table: [row]}, at=when, who=who or current_user(), why=why, corrects=corrects
            )

    def _kept(
        self,
        table: Table,
        scanner_name: str | None,
        withdrawn: bool,
        read: Callable[[Row[Any]], T],
        *order: ColumnElement[Any],
    ) -> tuple[Kept[T], ...]:
        query = _standing(table, withdrawn=withdrawn).order_by(*order)
        if scanner_name is not None:
            query = query.where(table.c.scanner_name == scanner_name)
        with self._database.reading() as connection:
            return tuple(_kept(row, read(row)) for row in connection.execute(query))


_LATER = entries.alias()
_CHANGED = func.coalesce(_LATER.c.number, acquisitions.c.entry)
"""The entry that an acquisition was taken in with, or corrected or withdrawn by."""
_SIGNED = (
    select(sign_offs.c.entry, acquisitions.c.entry)
    .join(
        sessions,
        (sessions.c.scanner_name == sign_offs.c.scanner_name)
        & sessions.c.day.between(sign_offs.c.first_day, sign_offs.c.last_day),
    )
    .join(acquisitions, acquisitions.c.session == sessions.c.entry)
    .outerjoin(_LATER, _LATER.c.corrects == acquisitions.c.entry)
)
"""Sign-offs, each with every acquisition of its period."""


def _standing(table: Table, *, withdrawn: bool = False) -> Select[Any]:
    """Select the rows of a table that no later entry has taken the place of, each with its entry's header."""
    query = select(table, entries.c.user, entries.c.name, entries.c.written_at, entries.c.why, entries.c.corrects).join(
        entries, entries.c.number == table.c.entry
    )
    if withdrawn:
        return query
    later = entries.alias()
    return query.where(~select(later.c.number).where(later.c.corrects == table.c.entry).exists())


def _kept(row: Row[Any], what: T) -> Kept[T]:
    return Kept(row.entry, what, Who(row.user, row.name), datetime.fromisoformat(row.written_at), row.why, row.corrects)


def _event(row: Row[Any]) -> Event:
    return Event(
        scanner_name=row.scanner_name,
        day=date.fromisoformat(row.day),
        kind=row.kind,
        text=row.text,
        quantities=tuple(json.loads(row.quantities)),
        restarts_baseline=bool(row.restarts_baseline),
        until=None if row.until is None else date.fromisoformat(row.until),
    )


def _baseline(row: Row[Any]) -> Baseline:
    return Baseline(
        scanner_name=row.scanner_name,
        quantity=row.quantity,
        value=row.value,
        standard_uncertainty=row.standard_uncertainty,
        scatter=row.scatter,
        sessions=row.sessions,
        since=date.fromisoformat(row.since),
        phantom=row.phantom,
        protocol=row.protocol,
        coil=row.coil,
        method=row.method,
    )


def _sign_off(row: Row[Any]) -> SignOff:
    return SignOff(
        row.scanner_name,
        date.fromisoformat(row.first_day),
        date.fromisoformat(row.last_day),
        row.comment,
        row.sessions,
        Head(row.head_number, row.head_hash),
    )


def _sessions_held(connection: Connection, scanner_name: str, first_day: date, last_day: date) -> int:
    standing = queries.standing_acquisitions(scanner_name, first_day, last_day).subquery()
    query = select(func.count(acquisitions.c.session.distinct())).where(acquisitions.c.entry.in_(select(standing.c.entry)))
    return int(connection.execute(query).scalar_one())


def _check_event(event: Event, today: date) -> None:
    kinds = get_args(EventKind)
    if event.kind not in kinds:
        raise UsageError(f"There is no kind of event {event.kind!r}: {did_you_mean(event.kind, kinds)}.")
    if not event.text.strip():
        raise UsageError("The event has no text: say in a few words what was done.")
    if event.day > today and event.kind != "downtime":
        raise UsageError(
            f"The event lies in the future ({event.day}; today is {today}): record it when it has happened; "
            "what is planned is of the kind 'downtime'."
        )
    if event.until is not None and event.until < event.day:
        raise UsageError(f"The event ends on {event.until}, before it begins on {event.day}: exchange the two.")
    _check_quantities(event.quantities)


def _check_baseline(baseline: Baseline, today: date) -> None:
    _check_quantities((baseline.quantity,))
    if baseline.sessions == 1:
        raise UsageError(
            f"A baseline of {baseline.quantity} from one session says nothing of its scatter: "
            "accept at least two sessions, or set the value by hand."
        )
    numbers = (baseline.value, baseline.standard_uncertainty, 0.0 if baseline.scatter is None else baseline.scatter)
    if not all(math.isfinite(n) for n in numbers) or min(numbers[1:]) < 0:
        raise UsageError(
            f"A baseline of {baseline.quantity} needs a finite value and uncertainty, not {baseline.value:g} and "
            f"{baseline.standard_uncertainty:g}."
        )
    if baseline.since > today:
        raise UsageError(f"The baseline begins in the future ({baseline.since}; today is {today}): give today or earlier.")


def _check_quantities(names: tuple[str, ...]) -> None:
    for name in names:
        if name not in QUANTITIES:
            raise UsageError(f"There is no quantity {name!r}: {did_you_mean(name, QUANTITIES)}.")
