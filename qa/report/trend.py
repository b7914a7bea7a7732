"""The trend chart: one quantity of one scanner over time, against its limits."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from qa.geometry import Floats
from qa.report.numbers import MINUS, long_date, plain_number, short_date, typeset_unit, with_unit
from qa.report.style import DATA, FAINT, GREY, HAIRLINE, INK, LIMIT, MISSED, TEXT_SIZE, letters, mm_axes, new_figure, to_svg

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["MARKS", "Mark", "TrendChart", "TrendPoint", "draw_trend"]

Mark = Literal["pass", "conditional pass", "conditional fail", "fail", "no limit"]
MARKS: tuple[Mark, ...] = ("pass", "conditional pass", "conditional fail", "fail", "no limit")

_HEIGHT_MM = 33.5
_LEFT_MM, _RIGHT_MM, _BOTTOM_MM, _TOP_MM = 18.0, 25.0, 7.0, 1.5
_ZOOM_BELOW = 1 / 8
_LEAST_DAYS = 14
_EPOCH = date(1970, 1, 1)


@dataclass(frozen=True)
class TrendPoint:
    """One measured value: when, how much, its expanded uncertainty, and the limits it was held against (None: open)."""

    at: datetime
    value: float
    expanded: float
    mark: Mark
    lower: float | None = None
    upper: float | None = None


@dataclass(frozen=True)
class TrendChart:
    """All that one chart shows, in order of time; `missing` are the days on which a session was due and not made."""

    label: str
    unit: str
    points: tuple[TrendPoint, ...]
    first_day: date
    last_day: date
    missing: tuple[date, ...] = ()
    every_days: int = 7
    grace_days: int = 2


def _days(when: date | datetime) -> float:
    """Days since 1970, with the fraction of the day."""
    if isinstance(when, datetime):
        return (when.date() - _EPOCH).days + (when.hour + when.minute / 60 + when.second / 3600) / 24
    return float((when - _EPOCH).days)


_DIAMOND = np.array([(0, 1), (1, 0), (0, -1), (-1, 0), (0, 1)], dtype=np.float64)
_OCTAGON = np.array([(math.cos(turn), math.sin(turn)) for turn in np.linspace(0, 2 * math.pi, 17)])


def _add_marks(axes: "Axes", x: Floats, y: Floats, mark: Mark, scale: float) -> None:
    """Draw all marks of a kind as one path: a page of many points stays light.

    The two common marks are ends of lines without length, a dot by a round cap and a square by a square one; the rarer ones
    are outlines.
    """
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as MarkPath
    from matplotlib.transforms import IdentityTransform

    centres = axes.transData.transform(np.column_stack([x, y]))
    ink = LIMIT if mark in {"fail", "conditional fail"} else DATA
    if mark in {"pass", "no limit"}:
        _segments(
            axes, centres, centres + np.array([0.01, 0.0]), transform=IdentityTransform(), edgecolor=ink, zorder=4,
            linewidth=scale * (2.7 if mark == "pass" else 2.2), capstyle="round" if mark == "pass" else "projecting",
        )  # fmt: skip
        return
    outline, radius = (_OCTAGON, 1.75) if mark == "conditional pass" else (_DIAMOND, 3.0 if mark == "fail" else 2.7)
    vertices = (centres[:, None] + radius * scale * outline).reshape(-1, 2)
    codes = np.tile([MarkPath.MOVETO, *[MarkPath.LINETO] * (len(outline) - 2), MarkPath.CLOSEPOLY], len(centres))
    axes.add_artist(
        PathPatch(
            MarkPath(vertices, codes),
            transform=IdentityTransform(),
            facecolor=ink if mark == "fail" else "white",
            edgecolor=ink,
            linewidth=0.0 if mark == "fail" else 0.8,
            zorder=4 if mark == "conditional pass" else 5,
        )
    )


def _segments(axes: "Axes", starts: Floats, ends: Floats, **options: Any) -> None:  # noqa: ANN401 - matplotlib's own
    """Draw separate lines as one path, in data coordinates."""
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as MarkPath

    vertices = np.stack([starts, ends], axis=1).reshape(-1, 2)
    codes = np.tile([MarkPath.MOVETO, MarkPath.LINETO], len(starts))
    # An artist, not a patch: the axes' limits are set already and need no look at every point.
    axes.add_artist(PathPatch(MarkPath(vertices, codes), fill=False, **options))


def _value_range(chart: TrendChart) -> tuple[float, float]:
    """Range of the value axis.

    The limits are part of it, unless the points would then shrink to less than an eighth of the height: a drift would be
    lost to the eye, so the axis goes by the points alone and the limit is named at its edge.
    """
    low = min(p.value - p.expanded for p in chart.points)
    high = max(p.value + p.expanded for p in chart.points)
    limits = [v for p in chart.points for v in (p.lower, p.upper) if v is not None]
    whole_low, whole_high = min([low, *limits]), max([high, *limits])
    span = high - low
    if span <= 0:
        span = max(abs(high) * 1e-6, 1e-12) if not limits else 0.0
    if limits and span < _ZOOM_BELOW * (whole_high - whole_low):
        # What the limits allow sets the least that is shown, so that a steady quantity looks steady.
        pad = max(0.5 * span, 0.02 * (whole_high - whole_low))
        return low - pad, high + pad
    if limits:
        low, high, span = whole_low, whole_high, whole_high - whole_low
        if span <= 0:
            span = max(abs(high) * 1e-3, 1e-9)
        return low - 0.1 * span, high + 0.1 * span
    return low - 0.35 * span, high + 0.35 * span


def _runs(chart: TrendChart, side: Literal["lower", "upper"]) -> list[tuple[float, float, float]]:
    """Stretches of time over which one limit held: from, to (days) and the limit."""
    runs: list[tuple[float, float, float]] = []
    start, current = _days(chart.first_day), None
    for point in chart.points:
        limit = point.lower if side == "lower" else point.upper
        if limit != current:
            at = _days(point.at)
            if current is not None:
                runs.append((start, at, current))
                start = at
            elif runs:
                start = at
            current = limit
    if current is not None:
        runs.append((start, _days(chart.last_day) + 1, current))
    return runs


def _draw_limits(axes: "Axes", chart: TrendChart) -> None:
    """Lines where the limits lay, each named in the right margin; one off the scale is named at the edge it lies beyond."""
    low, high = (float(v) for v in axes.get_ylim())
    placed: list[float] = []
    least_gap = 3.1 / (_HEIGHT_MM - _BOTTOM_MM - _TOP_MM)
    for words, runs in (("upper limit", _runs(chart, "upper")), ("lower limit", _runs(chart, "lower"))):
        for start, end, limit in runs:
            if low <= limit <= high:
                axes.plot([start, end], [limit, limit], color=LIMIT, linewidth=0.9, dashes=(5, 2.2), zorder=2)
        if not runs:
            continue
        limit = runs[-1][2]
        beyond = not low <= limit <= high
        height = min(max((limit - low) / (high - low), 0.10), 0.90)
        while any(abs(height - other) < 2 * least_gap for other in placed):
            height -= 0.02
        placed.append(height)
        text = f"{words}\n{with_unit(plain_number(limit), chart.unit)}" + (", off scale" if beyond else "")
        axes.text(
            1.012, height, text, transform=axes.transAxes, color=LIMIT, va="center", ha="left",
            fontproperties=letters(TEXT_SIZE - 0.6), linespacing=1.15, parse_math=False,
        )  # fmt: skip


def _time_ticks(first: date, last: date) -> tuple[list[date], list[str], list[date]]:
    """Days that are named on the time axis, their names, and days that only get a tick."""
    days = (last - first).days
    if days <= 100:
        step = 7 if days <= 56 else 14
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
    if days <= 500:
        named = months if days <= 430 else months[::2]
        return named, _month_names(named), []
    if days <= 3 * 366:
        named = [month for month in months if month.month in {1, 4, 7, 10}]
        return named, _month_names(named), months
    step = max(1, round(days / 365 / 12))
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


def _value_ticks(low: float, high: float) -> tuple[list[float], list[str]]:
    from matplotlib.ticker import MaxNLocator

    ticks = [float(v) for v in MaxNLocator(nbins=4, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high) if low <= v <= high]
    step = ticks[1] - ticks[0] if len(ticks) > 1 else high - low
    decimals = next((n for n in range(12) if abs(round(step, n) - step) < 1e-3 * step), 12)
    return ticks, [f"{v:.{decimals}f}".replace("-", MINUS) if abs(v) > 1e-3 * step else "0" for v in ticks]


def _draw_axes(axes: "Axes", chart: TrendChart) -> None:
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
    axes.spines["bottom"].set(color=GREY, linewidth=HAIRLINE)
    axes.set_facecolor("none")
    days, names, minor = _time_ticks(chart.first_day, chart.last_day)
    axes.set_xticks([_days(day) for day in days], names, fontproperties=letters())
    axes.set_xticks([_days(day) for day in minor], minor=True)
    ticks, words = _value_ticks(*axes.get_ylim())
    axes.set_yticks(ticks, words, fontproperties=letters())
    axes.tick_params(axis="x", which="both", color=GREY, labelcolor=INK, width=HAIRLINE, length=2.5, pad=2)
    axes.tick_params(axis="x", which="minor", length=1.2)
    axes.tick_params(axis="y", length=0, labelcolor=INK, pad=3)
    axes.grid(visible=True, axis="y", color=FAINT, linewidth=0.35, zorder=0)
    axes.set_axisbelow(True)
    unit = typeset_unit(chart.unit) or "ratio"
    axes.annotate(
        unit, (0, 0.5), (1.4 / 25.4 * 72, 0), xycoords=("figure fraction", "axes fraction"), textcoords="offset points",
        rotation=90, ha="center", va="center", color=GREY, fontproperties=letters(), parse_math=False,
    )  # fmt: skip


def _draw_missing(axes: "Axes", chart: TrendChart) -> None:
    """Shade the stretch that belongs to each session that was due and not made."""
    half = max(chart.every_days, 1) / 2
    stretches: list[list[float]] = []
    for day in sorted(set(chart.missing)):
        start, end = _days(day) + 0.5 - half, _days(day) + 0.5 + half
        if stretches and start <= stretches[-1][1] + 0.01:
            stretches[-1][1] = end
        else:
            stretches.append([start, end])
    for start, end in stretches:
        axes.axvspan(start, end, color=MISSED, linewidth=0, zorder=-1)


def _draw_points(axes: "Axes", chart: TrendChart) -> None:
    points = chart.points
    x = np.array([_days(p.at) for p in points])
    y = np.array([p.value for p in points])
    half = np.array([p.expanded for p in points])
    gaps = np.flatnonzero(np.diff(x) > chart.every_days + chart.grace_days + 1) + 1
    for piece in np.split(np.arange(len(x)), gaps):
        if len(piece) > 1:
            axes.plot(x[piece], y[piece], color=DATA, linewidth=0.55, alpha=1, zorder=3, solid_joinstyle="round")
    barred = half > 0
    if barred.any():
        _segments(
            axes, np.column_stack([x, y - half])[barred], np.column_stack([x, y + half])[barred],
            edgecolor=GREY, linewidth=0.5, zorder=2.5,
        )  # fmt: skip
    days = max(1.0, _days(chart.last_day) - _days(chart.first_day))
    scale = 1.0 if days < 550 else 0.8 if days < 1500 else 0.62
    for mark in MARKS:
        chosen = np.array([p.mark == mark for p in points])
        if chosen.any():
            _add_marks(
                axes, x[chosen], y[chosen], mark, scale if mark not in {"fail", "conditional fail"} else max(scale, 0.75)
            )


def draw_trend(chart: TrendChart, width_mm: float) -> bytes:
    """Draw one quantity over time.

    Points carry their expanded uncertainty as a bar and their verdict as a shape; the line between them breaks where a
    session is missing; limits are dashed, as they were at the time, and named in the right margin.

    Parameters
    ----------
    chart : TrendChart
        At least one point.
    width_mm : float
        Width on paper.

    Returns
    -------
    bytes
        SVG.

    Raises
    ------
    ValueError
        There is no point.
    """
    if not chart.points:
        raise ValueError("a trend chart needs at least one point, got none")
    figure = new_figure(width_mm, _HEIGHT_MM)
    axes = mm_axes(figure, _LEFT_MM, _BOTTOM_MM, width_mm - _LEFT_MM - _RIGHT_MM, _HEIGHT_MM - _BOTTOM_MM - _TOP_MM)
    first, last = _days(chart.first_day), _days(chart.last_day) + 1
    lack = max(0.0, _LEAST_DAYS - (last - first)) / 2
    first, last = first - lack, last + lack
    margin = 0.01 * (last - first)
    axes.set_xlim(first - margin, last + margin)
    axes.set_ylim(*_value_range(chart))
    _draw_axes(axes, chart)
    _draw_missing(axes, chart)
    _draw_limits(axes, chart)
    _draw_points(axes, chart)
    return to_svg(figure)


def marks_present(charts: Sequence[TrendChart]) -> tuple[Mark, ...]:
    """List the marks that a legend has to explain, in a fixed order."""
    present = {point.mark for chart in charts for point in chart.points}
    return tuple(mark for mark in MARKS if mark in present)
