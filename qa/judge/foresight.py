"""Where a quantity is heading, and when what is seen began."""

import math
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats
from qa.judge.course import JUMP, STEP, Course, fit_course
from qa.judge.trend import corrected_line, inflation, mann_kendall

__all__ = ["CONFIDENCE", "WINDOW", "Forecast", "Onset", "OnsetKind", "Trend", "forecast", "onset", "pettitt", "trend"]

OnsetKind = Literal["step", "ramp", "step and ramp"]
WINDOW = 52
"""Sessions that trend and forecast look back on: a year of weeks."""
_ONSET_WINDOW = 104
_AT_LEAST = 10
_LEVEL = 0.01
CONFIDENCE = 0.9
"""Of all intervals given here."""
HORIZON_DAYS = 730
"""A limit that is reached later than this is not foretold."""


@dataclass(frozen=True)
class Trend:
    """Movement over the last sessions, in the quantity's unit a year of 365.25 days, with its interval.

    `real` says that a Mann-Kendall test, with autocorrelation allowed for, tells it from chance at the 1 % level.
    """

    per_year: float
    lower: float
    upper: float
    probability: float
    correlation: float
    sessions: int
    real: bool


@dataclass(frozen=True)
class Forecast:
    """When the mean would cross a limit if it goes on as it does.

    `earliest` to `latest` hold the date with a probability of `CONFIDENCE`; `earliest` is never before the last session.
    `from_day` and `from_value` are the last session's day and the mean on it, where a line to the crossing starts.
    """

    limit: float
    rising: bool
    crossing: date
    earliest: date
    latest: date
    from_day: date
    from_value: float


@dataclass(frozen=True)
class Onset:
    """When a change began: the likeliest session and an interval that holds it with a probability of `CONFIDENCE`.

    `kind` is the likeliest, with its `probability`: "step", "ramp", or "step and ramp" for a jump that goes on as a drift.
    Of a step, `begun` is the first session after it. `before_history` says that a ramp may have begun before the first
    session looked at. `change` is from before to the last session, in the quantity's unit.
    """

    kind: OnsetKind
    begun: date
    earliest: date
    latest: date
    change: float
    probability: float
    before_history: bool = False


def trend(days: ArrayLike, values: ArrayLike) -> Trend | None:
    """Fit the robust trend of the last `WINDOW` sessions.

    Parameters
    ----------
    days : (n,) array_like
        Proleptic ordinals of the sessions' days (`date.toordinal`), in order.
    values : (n,) array_like
        Values.

    Returns
    -------
    Trend or None
        None with fewer than ten sessions. Real dates are used, so uneven spacing needs no correction.
    """
    t, x = _window(days, values, WINDOW)
    if x.size < _AT_LEAST or t[0] == t[-1]:
        return None
    line, correlation = corrected_line(t, x, CONFIDENCE)
    test = mann_kendall(x, inflation(correlation))
    year = 365.25
    return Trend(
        line.slope * year,
        line.lower * year,
        line.upper * year,
        test.probability,
        correlation,
        x.size,
        test.probability < _LEVEL and line.slope != 0,
    )


def forecast(
    days: ArrayLike, values: ArrayLike, lower: float | None, upper: float | None, horizon_days: int = HORIZON_DAYS
) -> Forecast | None:
    """Foretell when a limit would be crossed.

    Parameters
    ----------
    days, values : (n,) array_like
        As for `trend`.
    lower, upper : float or None
        Limits; None where open.
    horizon_days : int
        How far ahead a crossing is foretold at most.

    Returns
    -------
    Forecast or None
        None unless the evidence supports one: the trend is real, it leads to a limit that the mean has not crossed yet,
        and the whole interval lies within the horizon, which it does not where a jump explains the history as well.
    """
    t, x = _window(days, values, WINDOW)
    moving = trend(t, x)
    if moving is None or not moving.real:
        return None
    rising = moving.per_year > 0
    limit = upper if rising else lower
    if limit is None:
        return None
    course = fit_course(t, x, straight=True)
    ahead = np.concatenate((np.arange(0.0, 28.0), np.geomspace(28.0, max(horizon_days, 29), 60)))
    chance = np.maximum.accumulate(course.beyond(limit, rising=rising, days=t[-1] + ahead))
    tail = (1 - CONFIDENCE) / 2
    if chance[0] > 0.5 or chance[-1] < 1 - tail:
        return None
    early, middle, late = np.interp((tail, 0.5, 1 - tail), chance, ahead)
    mean = float(course.weight @ (course.level + course.change))
    return Forecast(limit, rising, _day(t[-1] + middle), _day(t[-1] + early), _day(t[-1] + late), _day(t[-1]), mean)


def onset(days: ArrayLike, values: ArrayLike, *, alarmed: bool = False) -> Onset | None:
    """Date the change that a history shows.

    Parameters
    ----------
    days, values : (n,) array_like
        As for `trend`; the last 104 sessions are looked at.
    alarmed : bool
        Something else has shown already that there is a change: a control chart, a trend.

    Returns
    -------
    Onset or None
        None with fewer than ten sessions and, unless `alarmed`, where Pettitt's test finds no change at the 1 % level with
        autocorrelation allowed for.
    """
    t, x = _window(days, values, _ONSET_WINDOW)
    if x.size < _AT_LEAST or t[0] == t[-1] or (not alarmed and pettitt(x)[1] > _LEVEL):
        return None
    course = fit_course(t, x, straight=False)
    if not alarmed and pettitt(x, inflation(course.correlation))[1] > _LEVEL:
        return None
    chances: dict[OnsetKind, float] = {"step": course.probability(STEP), "step and ramp": course.probability(JUMP)}
    chances["ramp"] = 1.0 - chances["step"] - chances["step and ramp"]
    kind = max(chances, key=lambda k: chances[k])
    among = np.where(_of(course, kind), course.weight, 0.0)
    order = np.argsort(course.begins, kind="stable")
    share, begins = np.cumsum(course.weight[order]), course.begins[order]
    tail = (1 - CONFIDENCE) / 2
    early, late = (float(begins[min(int(np.searchsorted(share, q)), share.size - 1)]) for q in (tail, 1 - tail))
    return Onset(
        kind,
        _day(course.begins[int(np.argmax(among))]),
        _day(early),
        _day(late),
        float(among @ (course.level + course.change - course.before) / among.sum()),
        chances[kind],
        kind == "ramp" and early == float(t[0]),
    )


def _of(course: Course, kind: OnsetKind) -> NDArray[np.bool_]:
    if kind == "step":
        return np.asarray(course.kind == STEP)
    return np.asarray(course.kind == JUMP if kind == "step and ramp" else course.kind < STEP)


def pettitt(values: ArrayLike, inflated: float = 1.0) -> tuple[int, float]:
    """Test (n,) values for one change of level.

    Returns
    -------
    position : int
        Number of values before the likeliest change.
    probability : float
        Approximate two-sided probability of no change.

    Notes
    -----
    A. N. Pettitt, A non-parametric approach to the change-point problem, Applied Statistics 28 (1979) 126; ties share
    their rank. `inflated` is the factor on the variance that autocorrelation asks for.
    """
    x = np.asarray(values, dtype=float)
    n = x.size
    ordered = np.sort(x)
    rank = (np.searchsorted(ordered, x, "left") + np.searchsorted(ordered, x, "right") + 1) / 2
    u = 2 * np.cumsum(rank) - np.arange(1, n + 1) * (n + 1)
    position = int(np.argmax(np.abs(u[:-1]))) + 1 if n > 1 else 0
    largest = float(abs(u[position - 1])) if n > 1 else 0.0
    return position, min(1.0, 2 * math.exp(-6 * largest**2 / inflated / (n**3 + n**2)))


def _window(days: ArrayLike, values: ArrayLike, length: int) -> tuple[Floats, Floats]:
    return np.asarray(days, dtype=float)[-length:], np.asarray(values, dtype=float)[-length:]


def _day(ordinal: float) -> date:
    return date.fromordinal(1) + timedelta(days=int(np.ceil(ordinal)) - 1)
