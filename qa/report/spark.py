"""The sparkline: the course of a quantity in the height of a table's row."""

import numpy as np

from qa.report.style import DATA, FAINT, LIMIT, new_figure, to_svg
from qa.report.timeline import days
from qa.report.trend import TrendChart

__all__ = ["SPARK_MM", "draw_spark"]

SPARK_MM = (34.0, 4.6)


def draw_spark(chart: TrendChart) -> bytes:
    """Draw a chart's points as a bare line with its last value as a dot and what is out of limits as diamonds.

    A limit is drawn where it lies within reach of the values; there is no axis: the figures stand beside it.
    """
    from matplotlib.lines import Line2D

    width, height = SPARK_MM
    figure = new_figure(width, height)
    at = np.array([days(p.at) for p in chart.points])
    values = np.array([p.value for p in chart.points])
    low, high = float(values.min()), float(values.max())
    span = (high - low) or max(abs(high) * 1e-6, 1e-12)
    first, last = days(chart.first_day), days(chart.last_day) + 1
    x = 0.02 + 0.94 * (at - first) / max(last - first, 1.0)
    limits = [v for v in (chart.points[-1].lower, chart.points[-1].upper) if v is not None]
    near = [v for v in limits if low - 2 * span <= v <= high + 2 * span]
    low, high = min([low, *near]), max([high, *near])
    span = (high - low) or span
    y = 0.14 + 0.72 * (values - low) / span
    for limit in near:
        level = 0.14 + 0.72 * (limit - low) / span
        figure.add_artist(Line2D([0.02, 0.96], [level, level], color=LIMIT, linewidth=0.5, dashes=(4, 2)))
    if not near:
        figure.add_artist(Line2D([0.02, 0.96], [0.06, 0.06], color=FAINT, linewidth=0.35))
    step = chart.every_days + chart.grace_days + 1
    for piece in np.split(np.arange(len(x)), np.flatnonzero(np.diff(at) > step) + 1):
        if len(piece) > 1:
            figure.add_artist(Line2D(x[piece], y[piece], color=DATA, linewidth=0.6, solid_joinstyle="round"))
    out = np.array([p.mark in {"fail", "conditional fail"} for p in chart.points])
    if out.any():
        figure.add_artist(
            Line2D(x[out][-12:], y[out][-12:], linestyle="none", marker="D", markersize=2, color=LIMIT, markeredgewidth=0)
        )
    if not out[-1]:
        figure.add_artist(Line2D(x[-1:], y[-1:], linestyle="none", marker="o", markersize=2.4, color=DATA, markeredgewidth=0))
    return to_svg(figure)
