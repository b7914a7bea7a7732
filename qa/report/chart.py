"""What a trend chart shows: finished values in order of time, and what they are held against."""

from dataclasses import dataclass
from datetime import date, datetime

from qa.report.marks import Mark

__all__ = ["BaselineSpan", "EventMark", "ForecastLine", "TrendChart", "TrendPoint"]


@dataclass(frozen=True)
class TrendPoint:
    """One measured value: when, how much, its expanded uncertainty, and what it was held against (None: nothing).

    `lower` and `upper` are the limits, `control_lower` and `control_upper` the control limits; `tripped` tells that a rule of
    the control chart tripped.
    """

    at: datetime
    value: float
    expanded: float
    mark: Mark
    lower: float | None = None
    upper: float | None = None
    control_lower: float | None = None
    control_upper: float | None = None
    tripped: bool = False


@dataclass(frozen=True)
class BaselineSpan:
    """A baseline over the time in which it holds; `half_width` is the half of its band, zero for none; `words` its value."""

    first_day: date
    last_day: date
    value: float
    half_width: float
    words: str


@dataclass(frozen=True)
class EventMark:
    """A service event: its letter in the list of events, and its day."""

    letter: str
    day: date


@dataclass(frozen=True)
class ForecastLine:
    """A straight course to a limit, and the days between which it is crossed (None: open)."""

    from_day: date
    from_value: float
    crosses_on: date
    at_limit: float
    earliest: date | None
    latest: date | None


@dataclass(frozen=True)
class TrendChart:
    """All that one chart shows, in order of time.

    `missing` are the days on which a session was due and not made; `changes` are change-points as earliest, likeliest and
    latest day.
    """

    label: str
    unit: str
    points: tuple[TrendPoint, ...]
    first_day: date
    last_day: date
    missing: tuple[date, ...] = ()
    every_days: int = 7
    grace_days: int = 2
    baselines: tuple[BaselineSpan, ...] = ()
    events: tuple[EventMark, ...] = ()
    changes: tuple[tuple[date, date, date], ...] = ()
    forecast: ForecastLine | None = None
