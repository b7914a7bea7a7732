import re
from datetime import date, datetime, time, timedelta

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.report.chart import BaselineSpan, EventMark, TrendChart, TrendPoint
from qa.report.spark import draw_spark
from qa.report.timeline import days, time_ticks
from qa.report.trend import draw_trend, pieces_of, point_places, value_ticks

FIRST = date(2026, 1, 5)


def chart(values, *, lower=None, upper=None, step=7, expanded=0.5, **changes):
    points = tuple(
        TrendPoint(datetime.combine(FIRST + timedelta(days=step * n), time(7, 30)), v, expanded, "pass", lower, upper)
        for n, v in enumerate(values)
    )
    last = points[-1].at.date() if points else FIRST
    return TrendChart("A quantity", "%", points, FIRST, last, **changes)


def words_of(svg):
    return re.findall(r"<text[^>]*>([^<]*)</text>|<tspan[^>]*>([^<]*)</tspan>", svg.decode())


def said(svg):
    return [a or b for a, b in words_of(svg)]


def strokes(svg, ink):
    """Subpaths drawn in an ink."""
    paths = re.findall(r'<path d="([^"]*)" style="([^"]*)"', svg.decode())
    return [piece for d, style in paths if f"stroke: {ink}" in style for piece in re.findall(r"M[^M]*", d)]


@settings(max_examples=60, deadline=None)
@given(
    values=st.lists(st.floats(-1e6, 1e6, allow_nan=False), min_size=1, max_size=12),
    upper=st.none() | st.floats(-1e6, 1e6, allow_nan=False),
    expanded=st.floats(0, 1e3, allow_nan=False),
)
def test_every_point_lies_inside_the_plot(values, upper, expanded):
    places = point_places(chart(values, upper=upper, expanded=expanded), 178.0)
    assert len(places) == len(values)
    assert all(0 <= x <= 1 and 0 <= y <= 1 for x, y in places)
    assert [x for x, _ in places] == sorted(x for x, _ in places)


def test_higher_values_stand_higher_and_equal_steps_are_equally_far():
    places = point_places(chart([1.0, 2.0, 3.0]), 178.0)
    heights = [y for _, y in places]
    assert heights[0] - heights[1] == pytest.approx(heights[1] - heights[2])
    assert heights[0] > heights[2]
    widths = np.diff([x for x, _ in places])
    assert widths[0] == pytest.approx(widths[1])


def test_a_limit_in_reach_is_drawn_and_one_far_away_is_named_at_the_edge():
    near = draw_trend(chart([1.0, 1.5, 2.0], upper=2.5), 178.0)
    assert len(strokes(near, "#a3231b")) == 1
    assert {"upper limit", "2.5\u2009%"} <= set(said(near))
    far = draw_trend(chart([1.0, 1.01, 1.02], upper=250.0, expanded=0.01), 178.0)
    assert strokes(far, "#a3231b") == []
    assert "250\u2009%, off scale" in said(far)


def test_a_limit_that_changed_is_drawn_as_it_was():
    points = tuple(
        TrendPoint(datetime.combine(FIRST + timedelta(days=7 * n), time()), 1.0, 0.1, "pass", None, 2.5 if n < 5 else 2.0)
        for n in range(10)
    )
    svg = draw_trend(TrendChart("A quantity", "%", points, FIRST, points[-1].at.date()), 178.0)
    assert len(strokes(svg, "#a3231b")) == 2


def test_the_line_breaks_where_a_session_is_missing():
    whole = chart([1.0] * 9)
    assert [len(piece) for piece in pieces_of(np.array([days(p.at) for p in whole.points]), whole)] == [9]
    x = np.array([0.0, 7, 14, 28, 35])
    assert [len(piece) for piece in pieces_of(x, whole)] == [3, 2]
    monthly = np.array([0.0, 28, 56, 84, 140, 168])
    assert [len(piece) for piece in pieces_of(monthly, whole)] == [4, 2]
    assert [len(piece) for piece in pieces_of(np.array([3.0]), whole)] == [1]


def test_names_of_lines_do_not_cover_each_other():
    baseline = (BaselineSpan(FIRST, FIRST + timedelta(days=70), 2.46, 0.1, "2.46\u2009%"),)
    svg = draw_trend(chart([2.3, 2.4] * 5, lower=2.44, upper=2.5, baselines=baseline), 178.0).decode()
    lines = [float(y) for y in re.findall(r'transform="translate\(43\d[\d.]* ([\d.]+)\)"', svg)]
    assert len(lines) == 6
    assert lines == sorted(lines)
    assert min(np.diff(lines)) > 6.4


def test_events_are_lettered_and_kept_apart():
    events = (EventMark("A", FIRST + timedelta(days=30)), EventMark("B", FIRST + timedelta(days=31)))
    svg = draw_trend(chart([1.0] * 12, events=events), 178.0)
    assert {"A", "B"} <= set(said(svg))
    xs = [float(x) for x, w in re.findall(r'x="([\d.]+)"[^>]*>([AB])</text>', svg.decode())]
    assert abs(xs[1] - xs[0]) > 8


def test_same_chart_same_bytes():
    assert draw_trend(chart([1.0, 2.0]), 178.0) == draw_trend(chart([1.0, 2.0]), 178.0)


def test_no_point_is_an_error_that_says_so():
    with pytest.raises(ValueError, match="at least one point, got none"):
        draw_trend(TrendChart("A quantity", "%", (), FIRST, FIRST), 178.0)


@settings(max_examples=80, deadline=None)
@given(first=st.dates(date(1990, 1, 1), date(2060, 1, 1)), span=st.integers(0, 8000))
def test_the_time_axis_names_days_inside_it_and_never_too_many(first, span):
    last = first + timedelta(days=span)
    named, names, minor = time_ticks(first, last)
    assert len(named) == len(names) <= 16
    assert all(first <= day <= last for day in (*named, *minor))
    assert named == sorted(set(named))


@pytest.mark.parametrize(
    ("low", "high", "written"),
    [
        (0.0, 2.6, ["0", "1", "2"]),
        (169.7, 170.3, ["169.8", "170.0", "170.2"]),
        (-0.06, 0.11, ["\u22120.05", "0", "0.05", "0.10"]),
        (127.72808, 127.72822, ["127.72810", "127.72815", "127.72820"]),
    ],
)
def test_values_on_the_axis_are_round_and_fully_written(low, high, written):
    assert value_ticks(low, high)[1] == written


def test_a_sparkline_of_ten_years_keeps_its_peaks_and_stays_light():
    values = [10.0 + 0.1 * (n % 3) for n in range(520)]
    values[333] = 14.0
    svg = draw_spark(chart(values))
    line = max(strokes(svg, "#17466b"), key=len)
    ys = [float(y) for y in re.findall(r"[ML] [\d.]+ ([\d.]+)", line)]
    assert len(ys) < 200
    assert min(ys) < 0.2 * max(ys)
