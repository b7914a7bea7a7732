"""Robust trend: Theil-Sen slope with its interval, and the Mann-Kendall test that says whether there is one."""

import math
from dataclasses import dataclass
from functools import lru_cache
from statistics import NormalDist

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats

__all__ = ["MannKendall", "TheilSen", "corrected_line", "correlation_left", "inflation", "mann_kendall", "theil_sen"]

_CORRELATION_AT_MOST = 0.5


@dataclass(frozen=True)
class TheilSen:
    """A line `intercept + slope * x`, and the interval of its slope at the confidence asked for."""

    slope: float
    intercept: float
    lower: float
    upper: float
    confidence: float


@dataclass(frozen=True)
class MannKendall:
    """Kendall's score S, its tau-b, standard normal value (corrected for continuity) and two-sided probability."""

    score: int
    tau: float
    z: float
    probability: float


def theil_sen(x: ArrayLike, y: ArrayLike, confidence: float = 0.9, inflated: float = 1.0) -> TheilSen:
    """Fit a line through the median of all pairwise slopes.

    Parameters
    ----------
    x, y : (n,) array_like
        At least two values; x not all equal.
    confidence : float
        Of the slope's interval.
    inflated : float
        Factor on the variance of the rank score that autocorrelation asks for (`inflation`).

    Returns
    -------
    TheilSen
        The intercept is median(y) - slope * median(x).

    Raises
    ------
    ValueError
        No two x differ.

    Notes
    -----
    P. K. Sen, Estimates of the regression coefficient based on Kendall's tau, JASA 63 (1968) 1379.
    """
    u, v = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    return _line(_slopes(u, v), u, v, confidence, inflated)


def corrected_line(x: ArrayLike, y: ArrayLike, confidence: float = 0.9) -> tuple[TheilSen, float]:
    """Fit as `theil_sen`, with the autocorrelation of the residuals allowed for; gives that autocorrelation too."""
    u, v = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    slopes = _slopes(u, v)
    line = _line(slopes, u, v, confidence, 1.0)
    correlation = correlation_left(v - line.intercept - line.slope * u)
    if correlation > 0:
        line = _line(slopes, u, v, confidence, inflation(correlation))
    return line, correlation


def _slopes(u: Floats, v: Floats) -> Floats:
    """Give all pairwise slopes in order of size."""
    first, second = _pairs(v.size)
    run = u[second] - u[first]
    moved = run != 0
    if not moved.any():
        raise ValueError("a trend needs values at two different times")
    return np.sort((v[second] - v[first])[moved] / run[moved])


def _line(slopes: Floats, u: Floats, v: Floats, confidence: float, inflated: float) -> TheilSen:
    slope = float(np.median(slopes))
    half = NormalDist().inv_cdf(0.5 + confidence / 2) * math.sqrt(inflated * _score_variance(v, u))
    low = max(round((slopes.size - half) / 2) - 1, 0)
    high = min(round((slopes.size + half) / 2), slopes.size - 1)
    intercept = float(np.median(v) - slope * np.median(u))
    return TheilSen(slope, intercept, float(slopes[low]), float(slopes[high]), confidence)


def mann_kendall(y: ArrayLike, inflated: float = 1.0) -> MannKendall:
    """Test for a monotonic trend in (n,) values in order of time.

    Notes
    -----
    H. B. Mann, Econometrica 13 (1945) 245, with ties; `inflated` is the factor on the variance of the score that
    autocorrelation asks for, as in Hamed and Rao 1998 for the first lag (m).
    """
    v = np.asarray(y, dtype=float)
    first, second = _pairs(v.size)
    score = int(np.sign(v[second] - v[first]).sum())
    pairs = first.size
    tied = _ties(v)
    untied = math.sqrt(pairs * (pairs - float((tied * (tied - 1)).sum()) / 2))
    variance = inflated * _score_variance(v)
    z = (score - math.copysign(min(1, abs(score)), score)) / math.sqrt(variance) if variance > 0 else 0.0
    return MannKendall(score, score / untied if untied else 0.0, z, math.erfc(abs(z) / math.sqrt(2)))


def correlation_left(residuals: Floats) -> float:
    """Lag-one autocorrelation of (n,) residuals about a line, on the safe side.

    The bias that fitting a line brings is taken out and half a standard error added, because too small a value makes
    intervals too narrow; kept between 0 and 0.5.
    """
    n = residuals.size
    power = float(residuals @ residuals)
    if n < 4 or power <= 0:
        return 0.0
    raw = float(residuals[1:] @ residuals[:-1]) / power
    return min(max(raw + (2 + 4 * raw) / n + 0.5 / math.sqrt(n), 0.0), _CORRELATION_AT_MOST)


def inflation(correlation: float) -> float:
    """Factor by which autocorrelation at lag one widens the variance of a mean or a slope: (1 + r) / (1 - r)."""
    return (1 + correlation) / (1 - correlation)


def _score_variance(y: Floats, x: Floats | None = None) -> float:
    n = y.size
    variance = n * (n - 1) * (2 * n + 5) / 18
    for values in (y, x):
        tied = None if values is None else _ties(values)
        if tied is not None and tied.size < n:
            variance -= float((tied * (tied - 1) * (2 * tied + 5)).sum()) / 18
    return max(variance, 0.0)


def _ties(values: Floats) -> NDArray[np.int64]:
    ordered = np.sort(values)
    ends = np.flatnonzero(np.concatenate((ordered[1:] != ordered[:-1], [True]))) + 1
    return np.diff(ends, prepend=0)


@lru_cache(maxsize=128)
def _pairs(n: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    first, second = np.triu_indices(n, 1)
    first.setflags(write=False)
    second.setflags(write=False)
    return first, second
