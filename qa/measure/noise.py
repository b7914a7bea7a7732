"""Noise in magnitude images: its level, how many of its pixels are independent, and the distributions it follows.

Sources: Gudbjartsson and Patz 1995 (one channel), Constantinides, Atalar and McVeigh 1997 (several channels combined as root
sum of squares); the number of independent values behind a mean or a variance of correlated data is that of time-series
analysis, n over the sum of the autocorrelation or of its square (Bayley and Hammersley 1946).
"""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from qa.geometry import Floats
from qa.measure.regions import Field
from qa.records import Acquisition

__all__ = [
    "Chi",
    "Correlation",
    "Noise",
    "correlation",
    "difference_noise",
    "evaluate",
    "fit_surface",
    "ripple_noise",
    "surface_noise",
]

_LAGS = 5
_TREND = 0.5


def fit_surface(image: Floats, weights: Floats, x: Floats, y: Floats, degree: int) -> Floats:
    """Fit a polynomial surface by weighted least squares.

    Parameters
    ----------
    image, weights : (R, C) float
        Values, and how much each counts.
    x, y : (C,), (R,) float
        Places, about -1 to 1.
    degree : int
        Highest total degree.

    Returns
    -------
    (degree + 1, degree + 1) float
        Coefficient of y^i x^j at [i, j].
    """
    terms = [(i, j) for i in range(degree + 1) for j in range(degree + 1 - i)]
    i, j = np.array(terms).T
    up_x, up_y = (v[:, None] ** np.arange(2 * degree + 1) for v in (x, y))
    moments = up_y.T @ weights @ up_x
    right = up_y[:, : degree + 1].T @ (weights * image) @ up_x[:, : degree + 1]
    gram = moments[i[:, None] + i, j[:, None] + j]
    surface = np.zeros((degree + 1, degree + 1))
    surface[i, j] = np.linalg.lstsq(gram, right[i, j], rcond=None)[0]
    return surface


def evaluate(surface: Floats, x: Floats, y: Floats) -> Floats:
    """Return a surface's values, shape (R, C), at places x (C,) and y (R,)."""
    powers = np.arange(len(surface))
    values: Floats = (y[:, None] ** powers) @ surface @ (x[:, None] ** powers).T
    return values


@dataclass(frozen=True)
class Correlation:
    """Autocorrelation of noise along rows and columns at whole-pixel lags 0 to 5; that of both axes together is their product.

    Noise is coloured by windows in k-space (zero filling, filters), which act on each axis by itself.
    """

    along_x: tuple[float, ...]
    along_y: tuple[float, ...]

    @property
    def mean_factor(self) -> float:
        """How many pixels make one independent value of a mean: the sum of the autocorrelation."""
        return max(0.25, _both_sides(self.along_x)) * max(0.25, _both_sides(self.along_y))

    @property
    def variance_factor(self) -> float:
        """How many pixels make one independent value of a variance: the sum of the squared autocorrelation."""
        squared = [tuple(r * r for r in axis) for axis in (self.along_x, self.along_y)]
        return _both_sides(squared[0]) * _both_sides(squared[1])

    @property
    def trend(self) -> float:
        """Correlation at the largest lag: noise has next to none, structure has much."""
        return (self.along_x[-1] + self.along_y[-1]) / 2


def _both_sides(lags: tuple[float, ...]) -> float:
    return lags[0] + 2 * sum(lags[1:])


def correlation(residual: Floats, inside: Floats) -> Correlation:
    """Estimate the autocorrelation of noise.

    Parameters
    ----------
    residual : (R, C) float
        Values with their mean or trend taken out.
    inside : (R, C) float
        1 where they count, else 0.

    Returns
    -------
    Correlation
        What chance alone gives at a lag (two standard errors of no correlation) counts as none.
    """
    held = residual * inside
    variance = float((held * held).sum() / max(inside.sum(), 1))
    axes = []
    for values, mask in ((held, inside), (held.T, inside.T)):
        lags = [1.0]
        for lag in range(1, _LAGS + 1):
            pairs = float((mask[:, lag:] * mask[:, :-lag]).sum())
            found = float((values[:, lag:] * values[:, :-lag]).sum())
            ratio = found / pairs / variance if pairs > 1 and variance > 0 else 0.0
            lags.append(ratio if pairs > 1 and abs(ratio) > 2 / math.sqrt(pairs) else 0.0)
        axes.append(tuple(lags))
    return Correlation(axes[0], axes[1])


@dataclass(frozen=True)
class Noise:
    """Noise of one image within M: standard deviation, correlation, and the independent pixels it was estimated from."""

    sigma: float
    correlation: Correlation
    freedom: float


def difference_noise(acquisition: Acquisition, field: Field) -> Noise | str:
    """Estimate noise from the difference of the first two repeats.

    A slow drift between the repeats is taken out with a second-order surface. The standard deviation is that of one image:
    that of the difference over the square root of 2.

    Returns
    -------
    Noise or str
        The noise, or why it cannot be told this way.
    """
    if len(acquisition.repeats) < 2:
        return "needs two repeats; this acquisition has one"
    first, second = (field.cut(r.pixels) for r in acquisition.repeats[:2])
    if not np.isfinite(second).all():
        return "the second repeat holds values that are not numbers"
    noise = surface_noise(first - second, field, 2)
    if not noise.sigma > 0:
        return "the two repeats are identical: the same images were sent twice, or noise was masked"
    if noise.correlation.trend > _TREND:
        return "the two repeats differ by more than noise and a slow drift: check that their settings and coils were the same"
    return Noise(noise.sigma / math.sqrt(2), noise.correlation, noise.freedom)


def surface_noise(image: Floats, field: Field, degree: int) -> Noise:
    """Estimate noise from what a polynomial surface leaves over in M."""
    x, y = field.grid
    residual = (image - evaluate(fit_surface(image, field.inside, x, y, degree), x, y)) * field.inside
    found = correlation(residual, field.inside)
    spent = (degree + 1) * (degree + 2) / 2
    freedom = max(float(field.inside.sum()) - spent * found.mean_factor, 1.0)
    return Noise(math.sqrt(float((residual**2).sum()) / freedom), found, freedom / found.variance_factor)


def ripple_noise(image: Floats, field: Field) -> Noise:
    """Estimate noise from one image by mixed second differences, which shading and truncation ringing hardly enter.

    The mask (1 -2 1, -2 4 -2, 1 -2 1) turns white noise into noise of 6 times its standard deviation (Immerkaer 1996).
    Correlation cannot be seen this way and is taken to be none.
    """
    along = image[:, :-2] - 2 * image[:, 1:-1] + image[:, 2:]
    ripple = (along[:-2] - 2 * along[1:-1] + along[2:]) * field.inside[1:-1, 1:-1]
    pixels = float(field.inside[1:-1, 1:-1].sum())
    none = (1.0, *(0.0,) * _LAGS)
    return Noise(math.sqrt(float((ripple**2).sum()) / pixels) / 6, Correlation(none, none), pixels / 4)


@dataclass(frozen=True)
class Chi:
    """Magnitude of signal-free air: chi with 2 n degrees of freedom, in units of the noise of a real or imaginary part.

    `channels` may be any number from 1: correlated channels act like fewer independent ones.
    """

    channels: float

    @classmethod
    def with_ratio(cls, ratio: float) -> "Chi":
        """Find the distribution whose mean over standard deviation is given; one channel (1.913) is the least there can be."""
        return cls(_channels_with_ratio(ratio))

    @property
    def mean(self) -> float:
        """Mean; 1.2533 for one channel (Rayleigh)."""
        return math.sqrt(2) * math.exp(math.lgamma(self.channels + 0.5) - math.lgamma(self.channels))

    @property
    def sd(self) -> float:
        """Standard deviation; 0.6551 for one channel (Rayleigh)."""
        return math.sqrt(2 * self.channels - self.mean**2)

    @property
    def ratio(self) -> float:
        """Mean over standard deviation; 1.913 for one channel."""
        return self.mean / self.sd

    @property
    def kurtosis(self) -> float:
        """Fourth central moment over the squared variance, on which the scatter of a standard deviation depends."""
        n, mean = self.channels, self.mean
        third = 2 * mean * (n + 0.5)
        return (4 * n * (n + 1) - 4 * mean * third + 12 * n * mean**2 - 3 * mean**4) / self.sd**4


@lru_cache(maxsize=64)
def _channels_with_ratio(ratio: float) -> float:
    low, high = 1.0, 1024.0
    for _ in range(44):
        middle = math.sqrt(low * high)
        low, high = (middle, high) if Chi(middle).ratio < ratio else (low, middle)
    return low
