"""The trend chart: one quantity of one scanner over time, against its limits and its own history."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.report.chart import ForecastLine, TrendChart
from qa.report.marks import MARKS, Mark, add_marks, add_rings
from qa.report.numbers import MINUS, decimal_places, plain_number, typeset_unit, with_unit
from qa.report.plot import Plot
from qa.report.style import (
    BAND,
    CAP_HEIGHT,
    DATA,
    FAINT,
    GREY,
    HAIRLINE,
    INK,
    LIMIT,
    MISSED,
    MM,
    TEXT_SIZE,
    new_figure,
    to_svg,
)
from qa.report.timeline import days, time_ticks

__all__ = ["draw_trend", "marks_present", "pieces_of", "point_places", "value_ticks"]

_PLOT_MM = 25.0
_LEFT_MM, _RIGHT_MM, _BOTTOM_MM, _TOP_MM, _FLAGS_MM = 18.0, 25.0, 4.8, 1.2, 3.2
_ZOOM_BELOW = 1 / 8
_LEAST_DAYS = 14
_LABEL_LINE_MM = 2.6
_FUTURE_SHARE = 0.3
_DENSE = 1.9
"""Spacing of sessions in points below which unremarkable ones get no mark of their own."""


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


def _draw_limits(plot: Plot, chart: TrendChart) -> list[_Label]:
    """Draw lines where the limits lay; return the names of the latest, for the right margin."""
    low, high = plot.y_range
    labels, lines = [], []
    for words, limits in (("upper limit", [p.upper for p in chart.points]), ("lower limit", [p.lower for p in chart.points])):
        runs = _runs(chart, limits)
        lines += [plot.at([start, end], limit) for start, end, limit in runs if low <= limit <= high]
        if runs:
            limit = runs[-1][2]
            shown = low <= limit <= high
            number = _limit_number(limit, chart) if shown else plain_number(limit, 4)
            text = f"{words}\n{with_unit(number, chart.unit)}{'' if shown else ', off scale'}"
            labels.append(_Label((limit - low) / (high - low), text, LIMIT))
    plot.path(lines, edgecolor=LIMIT, linewidth=0.9, linestyle=(0, (5, 2.2)), zorder=2)
    return labels


def _limit_number(limit: float, chart: TrendChart) -> str:
    """Write a limit with one figure more than the values have, and no more than it has itself."""
    spread = chart.points[-1].expanded
    return plain_number(round(limit, decimal_places(spread) + 1) if spread > 0 else limit, 10)


def _draw_history(plot: Plot, chart: TrendChart) -> list[_Label]:
    """Draw the baseline with its band, and the control limits; return the baseline's name for the right margin."""
    low, high = plot.y_range
    spans = [(days(span.first_day), days(span.last_day) + 1, span) for span in chart.baselines]
    plot.boxes(
        [(start, end, span.value - span.half_width, span.value + span.half_width) for start, end, span in spans],
        facecolor=BAND, zorder=0.5,
    )  # fmt: skip
    shown = [plot.at([start, end], span.value) for start, end, span in spans if low <= span.value <= high]
    plot.path(shown, edgecolor=GREY, linewidth=0.6, zorder=1.5)
    steps = []
    for limits in ([p.control_lower for p in chart.points], [p.control_upper for p in chart.points]):
        steps += [plot.at([start, end], limit) for start, end, limit in _stretches(chart, limits)]
    plot.path(steps, edgecolor=INK, linewidth=0.55, linestyle=(0, (0.9, 1.6)), zorder=1.8)
    if not chart.baselines:
        return []
    return [_Label((chart.baselines[-1].value - low) / (high - low), f"baseline\n{chart.baselines[-1].words}", GREY)]


def _stretches(chart: TrendChart, limits: Sequence[float | None]) -> list[tuple[float, float, float]]:
    """Stretches over which a control limit stayed, half way to the neighbouring sessions at either end.

    Limits that move by less than a hundredth of what they enclose count as one, at their mean.
    """
    at = [days(p.at) for p in chart.points]
    edges = [at[0], *((one + other) / 2 for one, other in pairwise(at)), at[-1]]
    values = [v for v in (*limits, *(p.value for p in chart.points)) if v is not None]
    least = 0.01 * (max(values) - min(values))
    stretches: list[list[float]] = []
    first = 0.0
    for number, limit in enumerate(limits):
        if limit is None:
            continue
        if stretches and stretches[-1][1] == edges[number] and abs(limit - first) <= least:
            stretches[-1][1] = edges[number + 1]
        else:
            first = limit
            stretches.append([edges[number], edges[number + 1], limit])
    return [(start, end, limit) for start, end, limit in stretches]


def _name_lines(plot: Plot, labels: list[_Label]) -> None:
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
        plot.text(
            plot.left + plot.width + 1.8 * MM, plot.bottom + height * plot.height, label.text, TEXT_SIZE - 0.6,
            color=label.ink, va="center", ha="left", linespacing=1.15,
        )  # fmt: skip


def value_ticks(low: float, high: float) -> tuple[list[float], list[str]]:
    """Choose round values between two, and write them with the decimals that their step needs."""
    from matplotlib.ticker import MaxNLocator

    ticks = [float(v) for v in MaxNLocator(nbins=4, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high) if low <= v <= high]
    step = ticks[1] - ticks[0] if len(ticks) > 1 else high - low
    decimals = next((n for n in range(12) if abs(round(step, n) - step) < 1e-3 * step), 12)
    return ticks, [f"{v:.{decimals}f}".replace("-", MINUS) if abs(v) > 1e-3 * step else "0" for v in ticks]


def _draw_axes(plot: Plot, chart: TrendChart, last_shown: date) -> None:
    named, names, minor = time_ticks(chart.first_day, last_shown)
    low, high = plot.x_range
    floor = plot.bottom
    ticks = [plot.at([low, high], plot.y_range[0])]
    for length, some in ((2.5, named), (1.2, minor)):
        ticks += [np.array([(x, floor), (x, floor - length)]) for x in plot.x([days(day) for day in some])]
    plot.path(ticks, edgecolor=GREY, linewidth=HAIRLINE, zorder=2)
    for day, name in zip(named, names, strict=True):
        plot.text(float(plot.x(days(day))), floor - 4.4, name, TEXT_SIZE, ha="center", va="top")
    values, words = value_ticks(*plot.y_range)
    plot.path([plot.at([low, high], value) for value in values], edgecolor=FAINT, linewidth=0.35, zorder=0)
    for value, word in zip(values, words, strict=True):
        at = float(plot.y(value)) - CAP_HEIGHT / 2 * TEXT_SIZE
        plot.text(plot.left - 3, at, word, TEXT_SIZE, ha="right", va="baseline")
    unit = typeset_unit(chart.unit) or "ratio"
    plot.text(1.4 * MM, plot.bottom + plot.height / 2, unit, TEXT_SIZE, rotation=90, ha="center", va="center", color=GREY)


def _draw_missing(plot: Plot, chart: TrendChart) -> None:
    """Shade the stretch that belongs to each session that was due and not made."""
    half = max(chart.every_days, 1) / 2
    stretches: list[list[float]] = []
    for day in sorted(set(chart.missing)):
        start, end = days(day) + 0.5 - half, days(day) + 0.5 + half
        if stretches and start <= stretches[-1][1] + 0.01:
            stretches[-1][1] = end
        else:
            stretches.append([start, end])
    plot.boxes([(start, end, *plot.y_range) for start, end in stretches], facecolor=MISSED, zorder=-1)


def pieces_of(x: Floats, chart: TrendChart) -> list[NDArray[np.intp]]:
    """Split sessions where one is missing between two; a phantom scanned in turn with others has its own usual interval."""
    steps = np.diff(x)
    usual = max(float(chart.every_days), float(np.median(steps))) if steps.size else 0.0
    gaps = np.flatnonzero(steps > max(usual + chart.grace_days + 1, 1.4 * usual)) + 1
    return np.split(np.arange(len(x)), gaps)


def _draw_points(plot: Plot, chart: TrendChart) -> None:
    points = chart.points
    x = np.array([days(p.at) for p in points])
    y = np.array([p.value for p in points])
    half = np.array([p.expanded for p in points])
    places = plot.at(x, y)
    pieces = pieces_of(x, chart)
    plot.path([places[piece] for piece in pieces], edgecolor=DATA, linewidth=0.55, joinstyle="round", zorder=3)
    spacing = plot.width * chart.every_days / (plot.x_range[1] - plot.x_range[0])
    barred = half > 0
    if barred.any():
        # Bars that nearly touch are kept pale, or they would bury the line.
        ink, thickness = (GREY, 0.5) if spacing > _DENSE else (FAINT, min(0.5, 0.6 * spacing))
        starts, ends = plot.at(x, y - half)[barred], plot.at(x, y + half)[barred]
        plot.segments(starts, ends, edgecolor=ink, linewidth=thickness, zorder=2.5)
    scale = min(1.0, max(0.62, spacing / 4))
    lone = np.concatenate([np.full(len(piece), len(piece) == 1) for piece in pieces])
    for mark in MARKS:
        chosen = np.array([p.mark == mark for p in points])
        if mark in {"pass", "no limit"} and spacing < _DENSE:
            # Closer than this, dots would run into a thick line and hide the uncertainty behind them.
            chosen &= lone
        if chosen.any():
            add_marks(plot, places[chosen], mark, scale if mark not in {"fail", "conditional fail"} else max(scale, 0.75))
    tripped = np.array([p.tripped for p in points])
    if spacing < 2 * _DENSE:
        # A ring for the first session of each alarm, or rings would hide one another.
        tripped[1:] &= ~tripped[:-1]
    if tripped.any():
        add_rings(plot, places[tripped])


def _draw_happenings(plot: Plot, chart: TrendChart) -> None:
    """Draw events as lettered lines and change-points as triangles on the time axis, with the time they may lie in."""
    top, right_of = plot.bottom + plot.height, 0.0
    lines = []
    for event in sorted(chart.events, key=lambda e: e.day):
        x = float(plot.x(days(event.day) + 0.5))
        lines.append(np.array([(x, plot.bottom), (x, top + 1.2)]))
        place = min(max(x, right_of + 3.2 * MM), plot.left + plot.width)
        right_of = place
        plot.text(place, top + 2.4, event.letter, TEXT_SIZE - 0.4, weight=600, ha="center", va="baseline")
    plot.path(lines, edgecolor=INK, linewidth=0.6, zorder=2.2)
    bars, triangles = [], []
    for earliest, day, latest in chart.changes:
        (start, middle, end), floor = plot.x([days(earliest), days(day) + 0.5, days(latest) + 1]), plot.bottom
        bars.append(np.array([(start, floor), (end, floor)]))
        triangles.append(np.array([(middle - 2.2, floor), (middle + 2.2, floor), (middle, floor + 4), (middle - 2.2, floor)]))
    plot.path(bars, edgecolor=INK, linewidth=1.8, capstyle="butt", zorder=5)
    plot.path(triangles, closed=True, facecolor=INK, zorder=5)


def _draw_forecast(plot: Plot, chart: TrendChart, line: ForecastLine) -> None:
    """Draw the course to the limit, and along the limit the time in which it is crossed."""
    end = plot.x_range[1]
    start, cross = days(line.from_day) + 0.5, days(line.crosses_on) + 0.5
    stop = min(cross, end)
    slope = (line.at_limit - line.from_value) / max(cross - start, 0.5)
    course = plot.at([start, stop], [line.from_value, line.from_value + slope * (stop - start)])
    plot.path([course], edgecolor=DATA, linewidth=1.0, linestyle=(0, (2.2, 1.5)), zorder=3.2)
    earliest = days(line.earliest) if line.earliest else days(chart.last_day) + 1
    latest = min(days(line.latest) + 1, end) if line.latest else end
    if earliest < end:
        plot.path([plot.at([earliest, latest], line.at_limit)], edgecolor=DATA, linewidth=2.4, capstyle="butt", zorder=3.1)
    if cross <= end:
        add_marks(plot, plot.at(cross, line.at_limit), "conditional pass", 1.15)
    today = plot.at(days(chart.last_day) + 1, plot.y_range)
    plot.path([today], edgecolor=GREY, linewidth=0.5, linestyle=(0, (1, 2)), zorder=1)


def _last_shown(chart: TrendChart) -> date:
    """Last day on the axis: the end of the period, or later where a forecast reaches beyond it."""
    if chart.forecast is None:
        return chart.last_day
    longest = (chart.last_day - chart.first_day) * _FUTURE_SHARE
    wanted = max(filter(None, (chart.forecast.crosses_on, chart.forecast.latest)))
    return max(chart.last_day, min(wanted, chart.last_day + longest))


def _area(chart: TrendChart, width_mm: float) -> tuple[Plot, date]:
    """Lay out the plotting area; return it, and the last day on its time axis."""
    figure = new_figure(width_mm, _PLOT_MM + _BOTTOM_MM + _TOP_MM + (_FLAGS_MM if chart.events else 0.0))
    last_shown = _last_shown(chart)
    first, last = days(chart.first_day), days(last_shown) + 1
    margin = 0.01 * (last - first) + max(0.0, _LEAST_DAYS - (last - first)) / 2
    box = (_LEFT_MM, _BOTTOM_MM, width_mm - _LEFT_MM - _RIGHT_MM, _PLOT_MM)
    return Plot(figure, box, (first - margin, last + margin), _value_range(chart)), last_shown


def point_places(chart: TrendChart, width_mm: float) -> list[tuple[float, float]]:
    """Tell where the points of a chart lie: shares of its width from the left, and of its height from the top."""
    plot, _ = _area(chart, width_mm)
    width, height = (72 * float(inches) for inches in plot.figure.get_size_inches())
    places = plot.at([days(p.at) for p in chart.points], [p.value for p in chart.points])
    return [(float(x) / width, 1 - float(y) / height) for x, y in places]


def draw_trend(chart: TrendChart, width_mm: float) -> bytes:
    """Draw one quantity over time.

    Points carry their expanded uncertainty as a bar and their verdict as a shape, with a ring where a control rule tripped;
    the line between them breaks where a session is missing. Limits are dashed, as they were at the time, control limits
    dotted; the baseline is a line in its band. Where sessions lie closer than marks can be told apart, those within limits
    are the line alone.

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
    plot, last_shown = _area(chart, width_mm)
    _draw_axes(plot, chart, last_shown)
    _draw_missing(plot, chart)
    _name_lines(plot, _draw_limits(plot, chart) + _draw_history(plot, chart))
    _draw_points(plot, chart)
    _draw_happenings(plot, chart)
    if chart.forecast is not None:
        _draw_forecast(plot, chart, chart.forecast)
    return to_svg(plot.figure)


def marks_present(charts: Sequence[TrendChart]) -> tuple[Mark, ...]:
    """List the marks that a legend has to explain, in a fixed order."""
    present = {point.mark for chart in charts for point in chart.points}
    return tuple(mark for mark in MARKS if mark in present)
