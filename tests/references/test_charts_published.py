"""Control charts against the figures printed in handbooks and textbooks.

The series and printed figures are from memory of the sources named beside them, and were recomputed.
"""

import numpy as np
import pytest

from qa.judge.charts import D2, D4, cumulative_sum, ewma, individuals, tabular_cusum

FLOW = [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]


def test_individuals_chart():
    # NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2, flow-rate example.
    chart = individuals(FLOW)
    assert round(chart.centre, 2) == 50.81
    assert round(chart.mean_range, 4) == 1.8778
    assert (round(chart.lower, 4), round(chart.upper, 4)) == (45.8159, 55.8041)


def test_constants_of_the_range_of_two():
    # Closed forms for two normal values: d2 = 2 / sqrt(pi), d3 = sqrt(2 - 4 / pi); textbooks print 1.128 and 3.267.
    d2, d3 = 2 / np.sqrt(np.pi), np.sqrt(2 - 4 / np.pi)
    assert round(d2, 3) == D2
    assert round(1 + 3 * d3 / d2, 3) == D4


def test_ewma_chart():
    # NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.4.
    values = [52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5, *FLOW]
    printed = [
        50.60, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33,
        50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99,
    ]  # fmt: skip
    smoothed, lower, upper = ewma(values, 50.0, 2.0539, 0.3, settled=True)
    assert np.round(smoothed, 2).tolist() == printed
    # The handbook rounds sqrt(0.3 / 1.7) to 0.4201, which moves its limits by up to one in the last digit printed.
    assert (lower[0], upper[-1]) == pytest.approx((47.4115, 52.5884), abs=1e-4)


def test_ewma_limits_widen_towards_the_settled_ones():
    # Lucas and Saccucci 1990: variance lambda / (2 - lambda) (1 - (1 - lambda)^2i); the first is lambda itself.
    _, lower, upper = ewma(np.zeros(60), 0.0, 1.0, 0.3, 3.0)
    _, settled, _ = ewma(np.zeros(60), 0.0, 1.0, 0.3, 3.0, settled=True)
    assert upper[0] == pytest.approx(0.9)
    assert lower[-1] == pytest.approx(settled[-1], abs=1e-12)
    assert np.all(np.diff(upper) >= 0)


def test_cumulative_sums():
    # Montgomery and Runger, Applied Statistics and Probability for Engineers, table 16-7.
    values = [
        102.0, 94.8, 98.3, 98.4, 102.0, 98.5, 99.0, 97.7, 100.0, 98.1,
        101.3, 98.7, 101.1, 98.4, 97.0, 96.7, 100.3, 101.4, 97.2, 101.0,
    ]  # fmt: skip
    printed = [3.0, -1.2, -1.9, -2.5, 0.5, 0.0, 0.0, -1.3, -0.3, -1.2, 1.1, 0.8, 2.9, 2.3, 0.3, -2.0, -0.7, 1.7, -0.1, 1.9]
    assert np.allclose(np.round(cumulative_sum(values, 99.0), 1), printed, atol=1e-9)


def test_tabular_cusum():
    # Montgomery, Introduction to Statistical Quality Control, the chapter's first example.
    values = [
        9.45, 7.99, 9.29, 11.66, 12.16, 10.18, 8.04, 11.46, 9.20, 10.34,
        9.03, 11.47, 10.51, 9.40, 10.08, 9.37, 10.62, 10.31, 8.52, 10.84,
        10.90, 9.33, 12.29, 11.50, 10.60, 11.08, 10.38, 11.62, 11.31, 10.52,
    ]  # fmt: skip
    sums = tabular_cusum(values, 10.0, 0.5)
    first = int(np.argmax(sums.upper > 5.0))
    assert first + 1 == 29
    assert round(sums.upper[first], 2) == 5.28
    assert sums.upper_count[first] == 7  # counted from the 23rd value, the first after zero
    assert sums.lower.max() < 5.0


def test_tabular_cusum_is_the_recursion_it_stands_for():
    rng = np.random.default_rng(1)
    values = rng.normal(10, 1, 500)
    high = low = 0.0
    sums = tabular_cusum(values, 10.0, 0.5)
    for i, x in enumerate(values):
        high, low = max(0.0, high + x - 10.5), max(0.0, low + 9.5 - x)
        assert (sums.upper[i], sums.lower[i]) == pytest.approx((high, low), abs=1e-9)
