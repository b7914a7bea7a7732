"""Likely causes: patterns across quantities, held against a table in `causes.toml`."""

import tomllib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date, timedelta
from fnmatch import fnmatchcase
from functools import cache
from importlib.resources import files
from typing import Any, Literal

from qa.judge.records import Cause
from qa.quantities import QUANTITIES
from qa.records import Event

__all__ = ["Movement", "Pattern", "likely_causes", "patterns"]

Direction = Literal["up", "down"]
_MOST = 3


@dataclass(frozen=True)
class Movement:
    """A quantity that has moved.

    Which way; between which days that began; the sentence that says so; details of its latest measurement; and whether a
    person is called for it, because it is out of limits or drifting.
    """

    quantity: str
    direction: Direction
    earliest: date
    latest: date
    sentence: str
    details: Mapping[str, Any]
    called: bool = True


@dataclass(frozen=True)
class Pattern:
    """One row of the table; see the head of `causes.toml`."""

    name: str
    look: str
    source: str
    moved: Mapping[str, str] = field(default_factory=dict)
    any: Mapping[str, str] = field(default_factory=dict)
    steady: tuple[str, ...] = ()
    latest: Mapping[str, Any] = field(default_factory=dict)
    after: tuple[str, ...] = ()
    days: int = 28
    only: bool = False
    changed: bool = False

    @property
    def weight(self) -> int:
        """How much the pattern asks for."""
        return (
            2 * len(self.moved)
            + bool(self.any)
            + bool(self.steady)
            + len(self.latest)
            + 2 * (bool(self.after) + self.only + self.changed)
        )


@cache
def patterns() -> tuple[Pattern, ...]:
    """Read the table that travels with the program."""
    rows = tomllib.loads(files("qa.judge").joinpath("causes.toml").read_text("utf-8"))["cause"]
    return tuple(_pattern(row) for row in rows)


def _pattern(row: dict[str, Any]) -> Pattern:
    held: dict[str, Any] = {key: tuple(value) if isinstance(value, list) else value for key, value in row.items()}
    return Pattern(**held)


def likely_causes(
    movements: Sequence[Movement],
    events: Iterable[Event] = (),
    changes: Sequence[str] = (),
    table: Sequence[Pattern] | None = None,
) -> tuple[Cause, ...]:
    """Suggest what to look at first.

    Parameters
    ----------
    movements : sequence of Movement
        What has moved on a scanner.
    events : iterable of Event
        What was done to it.
    changes : sequence of str
        Recent changes of settings, one sentence each.
    table : sequence of Pattern, optional
        The table; that of the program otherwise.

    Returns
    -------
    tuple of Cause
        Those first that explain most of what a person is called for, and of these the most telling; three at most. What moved
        and calls nobody is evidence, but is not explained for its own sake, the set-up excepted.
    """
    events = tuple(events)
    fitting = []
    for pattern in patterns() if table is None else table:
        used = _movements(pattern, movements)
        around = None if used is None else _circumstances(pattern, used, events, changes)
        if used is None or around is None:
            continue
        called = {m.quantity for m in used if m.called}
        if called or pattern.only or pattern.changed:
            evidence = tuple(dict.fromkeys([*(m.sentence for m in used), *around]))
            cause = Cause(pattern.name, pattern.look, evidence, pattern.source)
            fitting.append(((-len(called), -pattern.weight), cause))
    # Sorting keeps the order of the table among equals.
    return tuple(cause for _, cause in sorted(fitting, key=lambda f: f[0])[:_MOST])


def _movements(pattern: Pattern, movements: Sequence[Movement]) -> list[Movement] | None:
    """Gather the movements that a pattern asks for; None where one is missing or one is too many."""
    needed = [_moving(movements, names, way) for names, way in pattern.moved.items()]
    either = [m for names, way in pattern.any.items() for m in _moving(movements, names, way)]
    used = [m for found in needed for m in found] + either
    held = (
        all(needed)
        and (bool(either) or not pattern.any)
        and not any(_moving(movements, names, "away") for names in pattern.steady)
        and not (pattern.only and any(m not in used for m in movements))
    )
    return used if held else None


def _circumstances(
    pattern: Pattern, used: Sequence[Movement], events: Sequence[Event], changes: Sequence[str]
) -> list[str] | None:
    """Say what else speaks for a pattern; None where something that it asks for is missing."""
    said: list[str] = []
    for name, wanted in pattern.latest.items():
        quantity, _, detail = name.partition(".")
        if not any(m.quantity == quantity and m.details.get(detail) == wanted for m in used):
            return None
        said.append(f"{_title(quantity)}: {detail.replace('_', ' ')}")
    if pattern.after:
        visit = _before(events, pattern, used)
        if visit is None:
            return None
        said.append(f"{visit.kind} on {visit.day.isoformat()}: {visit.text}")
    if pattern.changed:
        return [*said, *changes] if changes else None
    return said


def _moving(movements: Iterable[Movement], names: str, way: str) -> list[Movement]:
    wanted = names.split("|")
    return [
        m for m in movements if way in (m.direction, "away") and any(fnmatchcase(m.quantity, pattern) for pattern in wanted)
    ]


def _before(events: Iterable[Event], pattern: Pattern, used: Sequence[Movement]) -> Event | None:
    """Find the latest event that can have set off what moved: a movement may have begun on its day or soon after."""
    fitting = [
        e
        for e in events
        if e.kind in pattern.after
        and any(
            m.latest >= e.day
            and m.earliest <= e.day + timedelta(days=pattern.days)
            and (not e.quantities or m.quantity in e.quantities)
            for m in used
        )
    ]
    return max(fitting, key=lambda e: e.day, default=None)


def _title(quantity: str) -> str:
    return QUANTITIES[quantity].title if quantity in QUANTITIES else quantity
