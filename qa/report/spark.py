"""The sparkline: the course of a quantity in the height of a table's row."""

import numpy as np

from qa.geometry import Floats
from qa.report.chart import TrendChart
from qa.report.marks import add_marks
from qa.report.plot import Plot
from qa.report.style import DATA, FAINT, LIMIT, new_figure, to_svg
from qa.report.timeline import days
from qa.report.trend import pieces_of

__all__ = ["SPARK_MM", "draw_spark"]

SPARK_MM = (26.0, 4.6)
_BINS = 90


def _thinned(x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Keep the least and the greatest value of each of many short stretches, in order of time: no peak is lost."""
    if len(x) <= 2 * _BINS:
        return x, y
    kept: set[int] = {0, len(x) - 1}
    for part in np.array_split(np.arange(len(x)), _BINS):
        kept |= {int(part[np.argmin(y[part])]), int(part[np.argmax(y[part])])}
    chosen = np.array(sorted(kept))
    return x[chosen], y[chosen]


def draw_spark(chart: TrendChart) -> bytes:
    """Draw a chart's points as a bare line with its last value as a dot and what is out of limits as diamonds.

    A limit is drawn where it lies within reach of the values; there is no axis: the figures stand beside it.
    """
    width, height = SPARK_MM
    x = np.array([days(p.at) for p in chart.points])
    y = np.array([p.value for p in chart.points])
    low, high = float(y.min()), float(y.max())
    span = (high - low) or max(abs(high) * 1e-6, 1e-12)
    limits = [v for v in (chart.points[-1].lower, chart.points[-1].upper) if v is not None]
    near = [v for v in limits if low - 2 * span <= v <= high + 2 * span]
    low, high = min([low, *near]), max([high, *near])
    span = (high - low) or span
    times = (days(chart.first_day), days(chart.last_day) + 1)
    plot = Plot(new_figure(width, height), (0.6, 0.6, width - 2, height - 1.2), times, (low - 0.02 * span, high + 0.02 * span))
    plot.path([plot.at(times, limit) for limit in near], edgecolor=LIMIT, linewidth=0.5, linestyle=(0, (4, 2)))
    if not near:
        plot.path([plot.at(times, plot.y_range[0])], edgecolor=FAINT, linewidth=0.35)
    line = [plot.at(*_thinned(x[piece], y[piece])) for piece in pieces_of(x, chart)]
    plot.path(line, edgecolor=DATA, linewidth=0.6, joinstyle="round")
    out = np.array([p.mark in {"fail", "conditional fail"} for p in chart.points])
    if out.any():
        add_marks(plot, plot.at(x, y)[out][-12:], "fail", 0.45)
    if not out[-1]:
        add_marks(plot, plot.at(x, y)[-1:], "pass", 0.9)
    return to_svg(plot.figure)
