"""The trend chart: one quantity of one scanner over time, against its limits and its own history."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime
from typing import TYPE_CHECKING

import numpy as np

from qa.report.marks import MARKS, Mark, add_marks, add_rings, add_segments
from qa.report.numbers import MINUS, plain_number, typeset_unit, with_unit
from qa.report.style import (
    BAND,
    DATA,
    FAINT,
    GREY,
    HAIRLINE,
    INK,
    LIMIT,
    MISSED,
    TEXT_SIZE,
    letters,
    mm_axes,
    new_figure,
    to_svg,
)
from qa.report.timeline import days, time_ticks

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["BaselineSpan", "EventMark", "ForecastLine", "TrendChart", "TrendPoint", "draw_trend", "marks_present"]

_PLOT_MM = 25.0
_LEFT_MM, _RIGHT_MM, _BOTTOM_MM, _TOP_MM, _FLAGS_MM = 18.0, 25.0, 4.8, 1.2, 3.2
_ZOOM_BELOW = 1 / 8
_LEAST_DAYS = 14
_LABEL_LINE_MM = 2.6
_FUTURE_SHARE = 0.3


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

    @property
    def height_mm(self) -> float:
        """Height on paper."""
        return _PLOT_MM + _BOTTOM_MM + _TOP_MM + (_FLAGS_MM if self.events else 0.0)


def _value_range(chart: TrendChart) -> tuple[float, float]:
    """Range of the value axis.

    The limits are part of it, unless the points would then shrink to less than an eighth of the height: a drift would be
    lost to the eye, so the axis goes by the points alone and the limit is named at its edge.
    """
    seen = [v for p in chart.points for v in (p.value - p.expanded, p.value + p.expanded)]
    seen += [v for p in chart.points for v in (p.control_lower, p.control_upper) if v is not None]
    if chart.forecast is not None:
        seen.append(chart.forecast.at_limit)
    low, high = min(seen), max(seen)
    limits = [v for p in chart.points for v in (p.lower, p.upper) if v is not None]
    if not limits:
        span = (high - low) or max(abs(high) * 1e-6, 1e-12)
        return low - 0.35 * span, high + 0.35 * span
    whole_low, whole_high = min([low, *limits]), max([high, *limits])
    if high - low < _ZOOM_BELOW * (whole_high - whole_low):
        # What the limits allow sets the least that is shown, so that a steady quantity looks steady.
        pad = max(0.5 * (high - low), 0.02 * (whole_high - whole_low))
        return low - pad, high + pad
    span = (whole_high - whole_low) or max(abs(whole_high) * 1e-3, 1e-9)
    return whole_low - 0.1 * span, whole_high + 0.1 * span


def _runs(chart: TrendChart, limits: Sequence[float | None]) -> list[tuple[float, float, float]]:
    """Stretches of time over which one limit held: from, to (days) and the limit; the first reaches back to the start."""
    runs: list[tuple[float, float, float]] = []
    start, current = days(chart.first_day), None
    for point, limit in zip(chart.points, limits, strict=True):
        if limit == current:
            continue
        at = days(point.at)
        if current is not None:
            runs.append((start, at, current))
        if current is not None or runs:
            start = at
        current = limit
    if current is not None:
        runs.append((start, days(chart.last_day) + 1, current))
    return runs


@dataclass
class _Label:
    height: float
    text: str
    ink: str


def _draw_limits(axes: "Axes", chart: TrendChart) -> list[_Label]:
    """Draw lines where the limits lay; return the names of the latest, for the right margin."""
    low, high = (float(v) for v in axes.get_ylim())
    labels = []
    for words, limits in (("upper limit", [p.upper for p in chart.points]), ("lower limit", [p.lower for p in chart.points])):
        runs = _runs(chart, limits)
        for start, end, limit in runs:
            if low <= limit <= high:
                axes.plot([start, end], [limit, limit], color=LIMIT, linewidth=0.9, dashes=(5, 2.2), zorder=2)
        if runs:
            limit = runs[-1][2]
            beyond = "" if low <= limit <= high else ", off scale"
            text = f"{words}\n{with_unit(plain_number(limit), chart.unit)}{beyond}"
            labels.append(_Label((limit - low) / (high - low), text, LIMIT))
    return labels


def _draw_history(axes: "Axes", chart: TrendChart) -> list[_Label]:
    """Draw the baseline with its band, and the control limits; return the baseline's name for the right margin."""
    for span in chart.baselines:
        start, end = days(span.first_day), days(span.last_day) + 1
        if span.half_width > 0:
            axes.fill_between(
                [start, end], span.value - span.half_width, span.value + span.half_width, color=BAND, linewidth=0, zorder=0.5
            )
        axes.plot([start, end], [span.value, span.value], color=GREY, linewidth=0.6, zorder=1.5)
    x = np.array([days(p.at) for p in chart.points])
    for side in ("control_lower", "control_upper"):
        y = np.array([np.nan if (v := getattr(p, side)) is None else v for p in chart.points])
        known = np.isfinite(y)
        if known.any():
            axes.plot(x, y, color=INK, linewidth=0.55, linestyle=(0, (0.9, 1.6)), drawstyle="steps-mid", zorder=1.8)
    if not chart.baselines:
        return []
    low, high = (float(v) for v in axes.get_ylim())
    value = chart.baselines[-1].value
    return [_Label((value - low) / (high - low), f"baseline\n{chart.baselines[-1].words}", GREY)]


def _name_lines(axes: "Axes", labels: list[_Label]) -> None:
    """Write names into the right margin, each as near its line as its neighbours allow."""
    gap = 2.15 * _LABEL_LINE_MM / _PLOT_MM
    half = _LABEL_LINE_MM / _PLOT_MM
    labels = sorted(labels, key=lambda label: -label.height)
    heights = [min(max(label.height, half), 1 - half) for label in labels]
    for i in range(1, len(heights)):
        heights[i] = min(heights[i], heights[i - 1] - gap)
    if heights and heights[-1] < half:
        heights[-1] = half
        for i in range(len(heights) - 2, -1, -1):
            heights[i] = max(heights[i], heights[i + 1] + gap)
    for label, height in zip(labels, heights, strict=True):
        axes.text(
            1.012, height, label.text, transform=axes.transAxes, color=label.ink, va="center", ha="left",
            fontproperties=letters(TEXT_SIZE - 0.6), linespacing=1.15, parse_math=False,
        )  # fmt: skip


def _value_ticks(low: float, high: float) -> tuple[list[float], list[str]]:
    from matplotlib.ticker import MaxNLocator

    ticks = [float(v) for v in MaxNLocator(nbins=4, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high) if low <= v <= high]
    step = ticks[1] - ticks[0] if len(ticks) > 1 else high - low
    decimals = next((n for n in range(12) if abs(round(step, n) - step) < 1e-3 * step), 12)
    return ticks, [f"{v:.{decimals}f}".replace("-", MINUS) if abs(v) > 1e-3 * step else "0" for v in ticks]


def _draw_axes(axes: "Axes", chart: TrendChart, last_shown: date) -> None:
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
    axes.spines["bottom"].set(color=GREY, linewidth=HAIRLINE)
    axes.set_facecolor("none")
    named, names, minor = time_ticks(chart.first_day, last_shown)
    axes.set_xticks([days(day) for day in named], names, fontproperties=letters())
    axes.set_xticks([days(day) for day in minor], minor=True)
    ticks, words = _value_ticks(*axes.get_ylim())
    axes.set_yticks(ticks, words, fontproperties=letters())
    axes.tick_params(axis="x", which="both", color=GREY, labelcolor=INK, width=HAIRLINE, length=2.5, pad=2)
    axes.tick_params(axis="x", which="minor", length=1.2)
    axes.tick_params(axis="y", length=0, labelcolor=INK, pad=3)
    axes.grid(visible=True, axis="y", color=FAINT, linewidth=0.35, zorder=0)
    axes.set_axisbelow(True)
    axes.annotate(
        typeset_unit(chart.unit) or "ratio", (0, 0.5), (1.4 / 25.4 * 72, 0), xycoords=("figure fraction", "axes fraction"),
        textcoords="offset points", rotation=90, ha="center", va="center", color=GREY, parse_math=False,
        fontproperties=letters(),
    )  # fmt: skip


def _draw_missing(axes: "Axes", chart: TrendChart) -> None:
    """Shade the stretch that belongs to each session that was due and not made."""
    half = max(chart.every_days, 1) / 2
    stretches: list[list[float]] = []
    for day in sorted(set(chart.missing)):
        start, end = days(day) + 0.5 - half, days(day) + 0.5 + half
        if stretches and start <= stretches[-1][1] + 0.01:
            stretches[-1][1] = end
        else:
            stretches.append([start, end])
    for start, end in stretches:
        axes.axvspan(start, end, color=MISSED, linewidth=0, zorder=-1)


def _draw_points(axes: "Axes", chart: TrendChart) -> None:
    points = chart.points
    x = np.array([days(p.at) for p in points])
    y = np.array([p.value for p in points])
    half = np.array([p.expanded for p in points])
    gaps = np.flatnonzero(np.diff(x) > chart.every_days + chart.grace_days + 1) + 1
    for piece in np.split(np.arange(len(x)), gaps):
        if len(piece) > 1:
            axes.plot(x[piece], y[piece], color=DATA, linewidth=0.55, zorder=3, solid_joinstyle="round")
    barred = half > 0
    if barred.any():
        add_segments(
            axes, np.column_stack([x, y - half])[barred], np.column_stack([x, y + half])[barred],
            edgecolor=GREY, linewidth=0.5, zorder=2.5,
        )  # fmt: skip
    span = days(chart.last_day) - days(chart.first_day)
    scale = 1.0 if span < 550 else 0.8 if span < 1500 else 0.62
    for mark in MARKS:
        chosen = np.array([p.mark == mark for p in points])
        if chosen.any():
            add_marks(
                axes, x[chosen], y[chosen], mark, scale if mark not in {"fail", "conditional fail"} else max(scale, 0.75)
            )
    tripped = np.array([p.tripped for p in points])
    if tripped.any():
        add_rings(axes, x[tripped], y[tripped])


def _draw_happenings(axes: "Axes", chart: TrendChart, width_mm: float) -> None:
    """Draw events as lettered lines and change-points as triangles on the time axis, with the time they may lie in."""
    low, high = (float(v) for v in axes.get_xlim())
    room = 3.2 * (high - low) / (width_mm - _LEFT_MM - _RIGHT_MM)
    right_of = low - room
    for event in sorted(chart.events, key=lambda e: e.day):
        at = days(event.day) + 0.5
        axes.plot(
            [at, at], [0, 1.02], transform=axes.get_xaxis_transform(), color=INK, linewidth=0.6, clip_on=False, zorder=2.2
        )
        place = min(max(at, right_of + room), high)
        right_of = place
        axes.annotate(
            event.letter, (place, 1), (0, 2.2), xycoords=axes.get_xaxis_transform(), textcoords="offset points",
            ha="center", va="bottom", color=INK, fontproperties=letters(TEXT_SIZE - 0.4, 600), parse_math=False,
        )  # fmt: skip
    for earliest, day, latest in chart.changes:
        axes.plot(
            [days(earliest), days(latest) + 1], [0, 0], transform=axes.get_xaxis_transform(), color=INK, linewidth=1.8,
            solid_capstyle="butt", clip_on=False, zorder=5,
        )  # fmt: skip
        axes.plot(
            [days(day) + 0.5], [0.035], transform=axes.get_xaxis_transform(), marker="^", markersize=4.2, color=INK,
            markeredgewidth=0, clip_on=False, zorder=5,
        )  # fmt: skip


def _draw_forecast(axes: "Axes", chart: TrendChart, line: ForecastLine) -> None:
    """Draw the course to the limit, and along the limit the time in which it is crossed."""
    end = float(axes.get_xlim()[1])
    start, cross = days(line.from_day) + 0.5, days(line.crosses_on) + 0.5
    stop = min(cross, end)
    slope = (line.at_limit - line.from_value) / max(cross - start, 0.5)
    axes.plot([start, stop], [line.from_value, line.from_value + slope * (stop - start)], color=DATA, linewidth=1.0,
              dashes=(2.2, 1.5), zorder=3.2)  # fmt: skip
    earliest = days(line.earliest) if line.earliest else days(chart.last_day) + 1
    latest = min(days(line.latest) + 1, end) if line.latest else end
    if earliest < end:
        axes.plot(
            [earliest, latest], [line.at_limit, line.at_limit], color=DATA, linewidth=2.4, solid_capstyle="butt", zorder=3.1
        )
    if cross <= end:
        axes.plot([cross], [line.at_limit], marker="o", markersize=4, markerfacecolor="white", markeredgecolor=DATA,
                  markeredgewidth=0.9, zorder=5)  # fmt: skip
    today = days(chart.last_day) + 1
    axes.plot([today, today], [0, 1], transform=axes.get_xaxis_transform(), color=GREY, linewidth=0.5, dashes=(1, 2), zorder=1)


def _last_shown(chart: TrendChart) -> date:
    """Last day on the axis: the end of the period, or later where a forecast reaches beyond it."""
    if chart.forecast is None:
        return chart.last_day
    longest = max((chart.last_day - chart.first_day) * _FUTURE_SHARE, (chart.last_day - chart.last_day))
    wanted = max(filter(None, (chart.forecast.crosses_on, chart.forecast.latest)))
    return max(chart.last_day, min(wanted, chart.last_day + longest))


def draw_trend(chart: TrendChart, width_mm: float) -> bytes:
    """Draw one quantity over time.

    Points carry their expanded uncertainty as a bar and their verdict as a shape, with a ring where a control rule tripped;
    the line between them breaks where a session is missing. Limits are dashed, as they were at the time, control limits
    dotted; the baseline is a line in its band.

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
    figure = new_figure(width_mm, chart.height_mm)
    axes = mm_axes(figure, _LEFT_MM, _BOTTOM_MM, width_mm - _LEFT_MM - _RIGHT_MM, _PLOT_MM)
    last_shown = _last_shown(chart)
    first, last = days(chart.first_day), days(last_shown) + 1
    lack = max(0.0, _LEAST_DAYS - (last - first)) / 2
    margin = 0.01 * (last - first) + lack
    axes.set_xlim(first - margin, last + margin)
    axes.set_ylim(*_value_range(chart))
    _draw_axes(axes, chart, last_shown)
    _draw_missing(axes, chart)
    _name_lines(axes, _draw_limits(axes, chart) + _draw_history(axes, chart))
    _draw_points(axes, chart)
    _draw_happenings(axes, chart, width_mm)
    if chart.forecast is not None:
        _draw_forecast(axes, chart, chart.forecast)
    return to_svg(figure)


def marks_present(charts: Sequence[TrendChart]) -> tuple[Mark, ...]:
    """List the marks that a legend has to explain, in a fixed order."""
    present = {point.mark for chart in charts for point in chart.points}
    return tuple(mark for mark in MARKS if mark in present)
