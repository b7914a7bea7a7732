"""The time axis of every chart: days as numbers, and which of them are named."""

from collections.abc import Sequence
from datetime import date, datetime, timedelta

from qa.report.numbers import long_date, short_date

__all__ = ["days", "time_ticks"]

_EPOCH = date(1970, 1, 1)


def days(when: date | datetime) -> float:
    """Days since 1970, with the fraction of the day."""
    if isinstance(when, datetime):
        return (when.date() - _EPOCH).days + (when.hour + when.minute / 60 + when.second / 3600) / 24
    return float((when - _EPOCH).days)


def time_ticks(first: date, last: date) -> tuple[list[date], list[str], list[date]]:
    """Days that are named on the time axis, their names, and days that only get a tick."""
    span = (last - first).days
    if span <= 100:
        step = 7 if span <= 56 else 14
        start = first + timedelta(days=-first.weekday() % 7)
        named = [start + timedelta(days=n) for n in range(0, max(1, (last - start).days + 1), step)]
        named = [day for day in named if first <= day <= last] or [first]
        return (
            named,
            [_day_name(day, number == 0 or day.year != named[number - 1].year) for number, day in enumerate(named)],
            [],
        )
    months = [date(year, month, 1) for year in range(first.year, last.year + 1) for month in range(1, 13)]
    months = [month for month in months if first <= month <= last]
    if span <= 500:
        named = months if span <= 250 else [month for month in months if month.month % 2]
        return named, _month_names(named), months
    if span <= 3 * 366:
        named = [month for month in months if month.month in {1, 4, 7, 10}]
        return named, _month_names(named), months
    step = -(-span // (12 * 366))
    named = [month for month in months if month.month == 1 and month.year % step == 0]
    return named, [str(month.year) for month in named], [month for month in months if month.month in {1, 4, 7, 10}]


def _day_name(day: date, with_year: bool) -> str:
    return long_date(day) if with_year else short_date(day)


def _month_names(months: Sequence[date]) -> list[str]:
    """Name months; the year stands at each January, and at the first month where no January is near."""
    names = [short_date(month).split()[1] for month in months]
    for number, month in enumerate(months):
        if month.month == 1 or (number == 0 and all(later.month != 1 for later in months[1:3])):
            names[number] += f" {month.year}"
    return names
