"""Error against true value, against signal-to-noise ratio and pixel size, and in units of the stated uncertainty."""

import math
from collections.abc import Sequence

import numpy as np

from qa.geometry import Floats
from qa.report.commission_content import Case, Figure, Tally
from qa.report.marks import add_marks
from qa.report.numbers import typeset_unit
from qa.report.plot import Plot
from qa.report.style import BAND, FAINT, GREY, HAIRLINE, INK, LIMIT, MM, TEXT_SIZE, new_figure, to_svg
from qa.report.trend import value_ticks

__all__ = ["PLOT_HEIGHT_MM", "draw_errors"]

PLOT_HEIGHT_MM = 37.0
_LEFT_MM, _GAP_MM, _BOTTOM_MM, _TOP_MM = 13.0, 6.0, 9.0, 1.5
_LETTERS = TEXT_SIZE - 0.5
_SCORES = 4.0
_BIN = 0.5


def draw_errors(tally: Tally, found: Sequence[tuple[Case, Figure]], width_mm: float) -> bytes:
    """Draw the errors of one line of the table.

    Four panels with one scale of error: against the true value, the signal-to-noise ratio and the pixel size, with the bar as
    dashed lines; and how the errors spread in units of the stated standard uncertainty, with the normal curve.

    Parameters
    ----------
    tally : Tally
        The line.
    found : sequence of (Case, Figure)
        Its figures, at least one.
    width_mm : float
        On paper.

    Returns
    -------
    bytes
        SVG; the same data give the same bytes.
    """
    figure = new_figure(width_mm, PLOT_HEIGHT_MM)
    errors = np.array([f.error for _, f in found])
    outside = np.array([f.allowed is not None and abs(f.error) > f.allowed for _, f in found])
    reach = _reach(errors, tally.allowed)
    stated = [f for _, f in found if f.standard_uncertainty > 0]
    true = np.array([f.true for _, f in found])
    panels: list[tuple[str, Floats, bool]] = []
    if np.ptp(true) > 0:
        unit = typeset_unit(found[0][1].unit) if tally.unit != "pixel" else "mm"
        panels.append((_named("true value", _own_unit(tally, unit)), true, False))
    panels.append(("signal-to-noise ratio", np.array([c.snr for c, _ in found]), True))
    panels.append(("pixel size (mm)", np.array([c.pixel_mm for c, _ in found]), False))
    count = len(panels) + bool(stated)
    each = (width_mm - _LEFT_MM - (count - 1) * _GAP_MM - 1.0) / count
    height = PLOT_HEIGHT_MM - _BOTTOM_MM - _TOP_MM
    for number, (name, values, logarithmic) in enumerate(panels):
        x = np.log10(values) if logarithmic else values
        box = (_LEFT_MM + number * (each + _GAP_MM), _BOTTOM_MM, each, height)
        plot = Plot(figure, box, _padded(x), (-reach, reach))
        _frame(plot, name, logarithmic=logarithmic)
        _heights(plot, _named("error", typeset_unit(tally.unit)) if number == 0 else "")
        _bars(plot, tally.allowed)
        places = plot.at(x, np.clip(errors, -reach, reach))
        if not outside.all():
            add_marks(plot, places[~outside], "pass", 0.6)
        if outside.any():
            add_marks(plot, places[outside], "fail", 0.6)
    if stated:
        box = (_LEFT_MM + len(panels) * (each + _GAP_MM), _BOTTOM_MM, each, height)
        _spread(Plot(figure, box, (-_SCORES, _SCORES), (0.0, 0.5)), stated)
    return to_svg(figure)


def _own_unit(tally: Tally, unit: str) -> str:
    """Return the unit of the true value, which is not that of the error where the bar is stated in percent of it."""
    return "" if tally.quantity in {"snr", "snr_background"} else unit


def _named(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def _reach(errors: Floats, allowed: tuple[float, float] | None) -> float:
    """Half the height of the panels: all errors, and the bar where it is not so far away that the errors would be lost."""
    most = float(np.abs(errors).max()) or 1e-9
    if allowed is not None and allowed[0] < 6 * most:
        most = max(most, allowed[0])
    return 1.12 * most


def _padded(values: Floats) -> tuple[float, float]:
    low, high = float(values.min()), float(values.max())
    pad = 0.05 * (high - low) or max(0.05 * abs(high), 1e-6)
    return low - pad, high + pad


def _frame(plot: Plot, name: str, *, logarithmic: bool) -> None:
    """Draw the zero line, the axis along x with its ticks, and its name."""
    low, high = plot.x_range
    plot.path([plot.at([low, high], 0.0)], edgecolor=FAINT, linewidth=HAIRLINE, zorder=1)
    plot.path([plot.at([low, high], plot.y_range[0])], edgecolor=INK, linewidth=HAIRLINE, zorder=3)
    if logarithmic:
        steps = [v for v in (20, 30, 50, 100, 200, 300, 500, 1000) if low <= math.log10(v) <= high]
        at, names = [math.log10(v) for v in steps], [str(v) for v in steps]
        at, names = at[:: max(1, len(at) // 4)], names[:: max(1, len(names) // 4)]
    else:
        at, names = value_ticks(low, high)
    places = plot.at(at, plot.y_range[0])
    plot.segments(places, places - np.array([0.0, 2.0]), edgecolor=INK, linewidth=HAIRLINE)
    for (x, y), words in zip(places, names, strict=True):
        plot.text(x, y - 3.0, words, _LETTERS, ha="center", va="top", color=GREY)
    plot.text(plot.left + plot.width / 2, plot.bottom - 12.5, name, _LETTERS, ha="center", va="top", color=GREY)


def _heights(plot: Plot, name: str) -> None:
    """Draw the axis along y; named where a name is given, which the other panels share."""
    low, high = plot.y_range
    plot.path([plot.at(plot.x_range[0], [low, high])], edgecolor=INK, linewidth=HAIRLINE, zorder=3)
    at, names = value_ticks(low, high)
    places = plot.at(plot.x_range[0], at)
    plot.segments(places, places - np.array([2.0, 0.0]), edgecolor=INK, linewidth=HAIRLINE)
    if not name:
        return
    for (x, y), words in zip(places, names, strict=True):
        plot.text(x - 3.0, y, words, _LETTERS, ha="right", va="center_baseline", color=GREY)
    plot.text(
        plot.left - (_LEFT_MM - 1.0) * MM, plot.bottom + plot.height / 2, name, _LETTERS, rotation=90, ha="center",
        va="center", color=GREY,
    )  # fmt: skip


def _bars(plot: Plot, allowed: tuple[float, float] | None) -> None:
    """Draw the bar on either side; where it differs from case to case, the least of it."""
    if allowed is None or allowed[0] > plot.y_range[1]:
        return
    lines = [plot.at(plot.x_range, side * allowed[0]) for side in (-1, 1)]
    plot.path(lines, edgecolor=LIMIT, linewidth=0.8, linestyle=(0, (5, 2.2)), zorder=2)


def _spread(plot: Plot, figures: Sequence[Figure]) -> None:
    """Draw the distribution of error over standard uncertainty, with the normal one, and k = 2 to either side."""
    scores = np.clip([f.score for f in figures], -_SCORES + 1e-9, _SCORES - 1e-9)
    edges = np.arange(-_SCORES, _SCORES + _BIN / 2, _BIN)
    shares = np.histogram(scores, edges)[0] / len(figures) / _BIN
    plot.y_range = (0.0, 1.08 * max(float(shares.max()), 0.4))
    plot.boxes(
        [(x, x + _BIN, 0.0, share) for x, share in zip(edges[:-1], shares, strict=True) if share > 0],
        facecolor=BAND,
        zorder=0.5,
    )
    x = np.linspace(-_SCORES, _SCORES, 97)
    plot.path([plot.at(x, np.exp(-x * x / 2) / math.sqrt(2 * math.pi))], edgecolor=GREY, linewidth=0.8, zorder=2)
    marks = [plot.at([side, side], plot.y_range) for side in (-2.0, 2.0)]
    plot.path(marks, edgecolor=INK, linewidth=0.55, linestyle=(0, (0.9, 1.6)), zorder=1.8)
    _frame(plot, "error / standard uncertainty", logarithmic=False)
