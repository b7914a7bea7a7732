"""Control charts as the textbooks have them: pure functions from a series to its statistics and limits.

They take centre and standard deviation as given. How these come from a scanner's own history, and what is done about
autocorrelation and uneven spacing, stands in `qa.judge.control`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats

__all__ = [
    "D2",
    "MovingRange",
    "TabularCusum",
    "cumulative_sum",
    "ewma",
    "individuals",
    "nelson",
    "tabular_cusum",
]

D2 = 1.128
"""Expected range of two normal values over their standard deviation, 2 / sqrt(pi), as handbooks print and use it."""

D4 = 3.267
"""Upper limit of the moving range over its mean, 1 + 3 d3 / d2 for two values, as handbooks print it."""


@dataclass(frozen=True, eq=False)
class MovingRange:
    """An individuals chart, and its moving-range chart: (n - 1,) ranges, their mean and their upper limit."""

    centre: float
    sigma: float
    lower: float
    upper: float
    ranges: Floats
    mean_range: float
    upper_range: float


@dataclass(frozen=True, eq=False)
class TabularCusum:
    """Both one-sided sums, (n,) each, and how many values in a row each has been above zero."""

    upper: Floats
    lower: Floats
    upper_count: NDArray[np.int64]
    lower_count: NDArray[np.int64]


def individuals(values: ArrayLike, width: float = 3.0) -> MovingRange:
    """Chart single values with limits from their mean moving range.

    Parameters
    ----------
    values : (n,) array_like
        In order of time, at least two.
    width : float
        Distance of the limits from the centre, in standard deviations.

    Returns
    -------
    MovingRange
        Centre and limits in the unit of the values.

    Raises
    ------
    ValueError
        Fewer than two values.

    Notes
    -----
    NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2.
    """
    x = np.asarray(values, dtype=float)
    if x.size < 2:
        raise ValueError(f"an individuals chart needs two values, got {x.size}")
    ranges = np.abs(np.diff(x))
    mean_range = float(ranges.mean())
    sigma, centre = mean_range / D2, float(x.mean())
    return MovingRange(centre, sigma, centre - width * sigma, centre + width * sigma, ranges, mean_range, D4 * mean_range)


def ewma(
    values: ArrayLike, start: float, sigma: float, smoothing: float = 0.3, width: float = 3.0, *, settled: bool = False
) -> tuple[Floats, Floats, Floats]:
    """Smooth a series exponentially and give the limits of the smoothed values.

    Parameters
    ----------
    values : (n,) array_like
        In order of time.
    start : float
        Centre, and the value before the first.
    sigma : float
        Standard deviation of single values.
    smoothing : float
        Weight of the newest value, lambda, above 0 and at most 1.
    width : float
        Distance of the limits in standard deviations of the smoothed value.
    settled : bool
        Use the limits that are reached in the long run from the first value on, instead of those that widen with time.

    Returns
    -------
    smoothed, lower, upper : (n,) float
        In the unit of the values.

    Notes
    -----
    NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.4; Lucas and Saccucci 1990.
    """
    from scipy.signal import lfilter

    x = np.asarray(values, dtype=float)
    smoothed = start + lfilter([smoothing], [1.0, smoothing - 1.0], x - start)
    age = np.full(x.size, np.inf) if settled else np.arange(1.0, x.size + 1.0)
    half = width * sigma * np.sqrt(smoothing / (2 - smoothing) * (1 - (1 - smoothing) ** (2 * age)))
    return smoothed, start - half, start + half


def cumulative_sum(values: ArrayLike, target: float) -> Floats:
    """Sum the deviations from a target: (n,) values in, (n,) sums out, in the same unit."""
    return np.cumsum(np.asarray(values, dtype=float) - target)


def tabular_cusum(values: ArrayLike, target: float, reference: float) -> TabularCusum:
    """Sum deviations beyond a reference value on either side, never below zero.

    Parameters
    ----------
    values : (n,) array_like
        In order of time.
    target : float
        Centre.
    reference : float
        Slack K: half the shift that is to be found, in the unit of the values.

    Returns
    -------
    TabularCusum
        Compare the sums with a decision interval H, commonly 5 standard deviations for K of half a one.

    Notes
    -----
    Montgomery, Introduction to Statistical Quality Control, the chapter on cumulative sums. The recursion
    max(0, C + d) is the running sum of d less its lowest point so far, which needs no loop.
    """
    x = np.asarray(values, dtype=float)

    def one_side(deviations: Floats) -> tuple[Floats, NDArray[np.int64]]:
        total = np.cumsum(deviations)
        sums = total - np.minimum.accumulate(np.minimum(total, 0.0))
        position = np.arange(1, x.size + 1)
        return sums, position - np.maximum.accumulate(np.where(sums > 0, 0, position))

    upper, upper_count = one_side(x - target - reference)
    lower, lower_count = one_side(target - x - reference)
    return TabularCusum(upper, lower, upper_count, lower_count)


def nelson(standardised: ArrayLike, tests: tuple[int, ...] = (1, 2, 3, 4, 5, 6, 7, 8)) -> dict[int, NDArray[np.bool_]]:
    """Apply Nelson's tests for special causes.

    Parameters
    ----------
    standardised : (n,) array_like
        Deviations from the centre in standard deviations, in order of time.
    tests : tuple of int
        Which of the eight to apply:

        1. one point more than 3 from the centre;
        2. nine in a row on one side of it;
        3. six in a row steadily rising or falling;
        4. fourteen in a row alternating up and down;
        5. two out of three in a row more than 2 from it on one side;
        6. four out of five in a row more than 1 from it on one side;
        7. fifteen in a row within 1 of it, on either side;
        8. eight in a row more than 1 from it, on either side.

    Returns
    -------
    dict of int to (n,) bool
        For each test, whether it trips at a point: the point that completes the pattern.

    Raises
    ------
    ValueError
        There is no such test.

    Notes
    -----
    L. S. Nelson, The Shewhart control chart: tests for special causes, Journal of Quality Technology 16 (1984) 237.
    In tests 5 and 6 the completing point itself lies beyond, so that a pattern is marked once and where it ends.
    """
    z = np.asarray(standardised, dtype=float)
    if unknown := [t for t in tests if t not in range(1, 9)]:
        raise ValueError(f"Nelson's tests are numbered 1 to 8, got {unknown[0]}")
    found: dict[int, NDArray[np.bool_]] = {}
    for test in tests:
        if test == 1:
            found[test] = np.abs(z) > 3
        elif test == 2:
            found[test] = _run(z > 0, 9) | _run(z < 0, 9)
        elif test in {3, 4}:
            found[test] = _steps(z, test)
        elif test in {5, 6}:
            count, of, beyond = (2, 3, 2.0) if test == 5 else (4, 5, 1.0)
            found[test] = _some(z > beyond, count, of) | _some(z < -beyond, count, of)
        elif test == 7:
            found[test] = _run(np.abs(z) < 1, 15)
        else:
            found[test] = _run(np.abs(z) > 1, 8)
    return found


def _counts(mask: NDArray[np.bool_], of: int) -> NDArray[np.int64]:
    total = np.concatenate(([0], np.cumsum(mask)))
    back = np.maximum(np.arange(1, mask.size + 1) - of, 0)
    return np.asarray(total[1:] - total[back])


def _run(mask: NDArray[np.bool_], length: int) -> NDArray[np.bool_]:
    return _counts(mask, length) >= length


def _some(mask: NDArray[np.bool_], count: int, of: int) -> NDArray[np.bool_]:
    return (_counts(mask, of) >= count) & mask


def _steps(z: Floats, test: int) -> NDArray[np.bool_]:
    tripped = np.zeros(z.size, dtype=bool)
    step = np.diff(z)
    if test == 3:
        # Six points in a row make five steps.
        tripped[1:] = _run(step > 0, 5) | _run(step < 0, 5)
    elif step.size > 1:
        # Fourteen points in a row make thirteen steps, and so twelve turns.
        tripped[2:] = _run(step[1:] * step[:-1] < 0, 12)
    return tripped
