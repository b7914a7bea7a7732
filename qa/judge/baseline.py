"""Baselines: what a quantity was when a person accepted it.

A baseline rests on the first sessions that a person accepted, or is set by hand. It is robust: the median, and the scaled
median absolute deviation for the scatter of single sessions. It is never renewed by itself: it ends where an event says so,
and the next begins when a person accepts sessions again.
"""

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from datetime import date
from fnmatch import fnmatchcase

import numpy as np
from numpy.typing import ArrayLike

from qa.judge.streams import Stream
from qa.records import Baseline, Event

__all__ = ["BASELINE_SESSIONS", "NoBaseline", "baseline_from", "in_force", "propose_baseline", "robust_scatter"]

BASELINE_SESSIONS = 10
"""Accepted sessions that a baseline rests on, unless site.toml says otherwise."""

_SMALL = {2: 1.196, 3: 1.495, 4: 1.363, 5: 1.206, 6: 1.200, 7: 1.140, 8: 1.129, 9: 1.107}
"""Factors that take out the bias of a scaled median absolute deviation of n values (Croux and Rousseeuw 1992 (m))."""


@dataclass(frozen=True)
class NoBaseline:
    """Why there is no baseline, and what to do."""

    reason: str


def robust_scatter(values: ArrayLike) -> float:
    """Estimate the standard deviation of (n,) values from their median absolute deviation, unbiased for normal values.

    Raises
    ------
    ValueError
        Fewer than two values.
    """
    x = np.asarray(values, dtype=float)
    if x.size < 2:
        raise ValueError(f"a scatter needs two values, got {x.size}")
    factor = _SMALL.get(x.size, x.size / (x.size - 0.8))
    return float(1.4826 * factor * np.median(np.abs(x - np.median(x))))


def baseline_from(values: ArrayLike, uncertainties: ArrayLike) -> tuple[float, float, float] | NoBaseline:
    """Take a baseline from single sessions.

    Parameters
    ----------
    values, uncertainties : (n,) array_like
        Values and their standard uncertainties, in one unit.

    Returns
    -------
    (value, standard_uncertainty, scatter) or NoBaseline
        The median; its standard error, 1.2533 scatter / sqrt(n) for normal values, or what the sessions' own uncertainties
        leave where that is more; and the scatter. One session is no baseline.
    """
    x, u = np.asarray(values, dtype=float), np.asarray(uncertainties, dtype=float)
    if x.size < 2:
        count = "no session" if x.size == 0 else "one session"
        return NoBaseline(f"a baseline cannot be taken from {count}: accept at least two, better {BASELINE_SESSIONS}")
    scatter = robust_scatter(x)
    error = math.sqrt(math.pi / 2 / x.size) * max(scatter, float(np.median(u)))
    return float(np.median(x)), error, scatter


def propose_baseline(
    stream: Stream, accepted: Collection[date], sessions: int = BASELINE_SESSIONS, since: date | None = None
) -> Baseline | NoBaseline:
    """Take the baseline of a stream's latest segment from its first accepted sessions.

    Parameters
    ----------
    stream : Stream
        The history.
    accepted : collection of datetime.date
        Days of the sessions that a person accepted.
    sessions : int
        How many the baseline rests on.
    since : datetime.date, optional
        Leave out what came before.

    Returns
    -------
    Baseline or NoBaseline
        In force from the first of its sessions on; NoBaseline says how many are still missing.
    """
    first = max(stream.starts[-1].day, since or date.min)
    wanted = {day.toordinal() for day in accepted if day >= first}
    chosen = [i for i, day in enumerate(stream.days.tolist()) if day in wanted][:sessions]
    if len(chosen) < sessions:
        return NoBaseline(
            f"{len(chosen)} of {sessions} sessions of {stream.quantity} since {first.isoformat()} are accepted: "
            f"accept {sessions - len(chosen)} more, or set the baseline by hand"
        )
    found = baseline_from(stream.values[chosen], stream.uncertainties[chosen])
    if isinstance(found, NoBaseline):
        return found
    value, error, scatter = found
    begun, ended = (date.fromordinal(int(stream.days[i])) for i in (chosen[0], chosen[-1]))
    return Baseline(
        stream.scanner_name,
        stream.quantity,
        value,
        error,
        scatter,
        len(chosen),
        begun,
        _literal(stream.phantom),
        _literal(stream.protocol),
        _literal(stream.coil),
        f"median of {len(chosen)} accepted sessions, {begun.isoformat()} to {ended.isoformat()}",
    )


def in_force(baselines: Sequence[Baseline], events: Sequence[Event], day: date) -> tuple[Baseline, ...]:
    """Leave out baselines that an event has ended by a day: those begun before it whose quantity it concerns.

    Parameters
    ----------
    baselines, events : sequence
        Of one or more scanners.
    day : datetime.date
        Events after it are left out of account.

    Returns
    -------
    tuple of Baseline
        In the order given.
    """
    ending = [event for event in events if event.restarts_baseline and event.day <= day]
    return tuple(
        b
        for b in baselines
        if not any(
            e.scanner_name == b.scanner_name and b.since < e.day and (not e.quantities or _concerned(e, b)) for e in ending
        )
    )


def _concerned(event: Event, baseline: Baseline) -> bool:
    return any(fnmatchcase(baseline.quantity, quantity) for quantity in event.quantities)


def _literal(text: str) -> str:
    """Write a name as a shell pattern that fits it alone."""
    return "".join(f"[{c}]" if c in "*?[" else c for c in text)
