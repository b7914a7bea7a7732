"""Moments of magnitude images: Rician for one channel, noncentral chi for several combined as root sum of squares.

Sources: Gudbjartsson and Patz 1995 (one channel); Constantinides, Atalar and McVeigh 1997 (several).
"""

import math

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats

__all__ = ["magnitude_mean", "magnitude_variance", "root_mean", "unsigned_mean"]


def magnitude_mean(amplitude: ArrayLike, sigma: ArrayLike, channels: int) -> Floats:
    """Mean of the root sum of squares of `channels` complex channels with noise `sigma` in each part, none correlated.

    Parameters
    ----------
    amplitude : array_like
        Noise-free root sum of squares.
    sigma : array_like
        Standard deviation of the noise of a real or imaginary part, above 0.
    channels : int
        How many.

    Returns
    -------
    ndarray
        The closed form, with the confluent hypergeometric function 1F1(-1/2; channels; -amplitude^2 / (2 sigma^2)), and for
        strong signals its asymptotic series (Abramowitz and Stegun 13.5.1).
    """
    from scipy.special import gammaln, hyp1f1

    a, s = np.broadcast_arrays(np.asarray(amplitude, dtype=np.float64), np.asarray(sigma, dtype=np.float64))
    ratio = a / s
    strong = 12 + 4 * math.sqrt(channels)
    front = math.sqrt(2.0) * math.exp(gammaln(channels + 0.5) - gammaln(channels))
    weak = ratio < strong
    large = np.maximum(ratio, strong)
    term, series = np.ones_like(large), np.ones_like(large)
    for k in range(10):
        term = term * (k - 0.5) * (k + 0.5 - channels) / (k + 1) * 2 / large**2
        series = series + term
    mean: Floats = np.asarray(large * series)
    mean[weak] = front * hyp1f1(-0.5, channels, -0.5 * ratio[weak] ** 2)
    return np.asarray(mean * s)


def magnitude_variance(amplitude: ArrayLike, sigma: ArrayLike, channels: int) -> Floats:
    """Variance that belongs to `magnitude_mean`: the mean square is amplitude^2 + 2 channels sigma^2."""
    a, s = np.broadcast_arrays(np.asarray(amplitude, dtype=np.float64), np.asarray(sigma, dtype=np.float64))
    variance: Floats = a**2 + 2 * channels * s**2 - magnitude_mean(a, s, channels) ** 2
    return variance


def root_mean(eigenvalues: ArrayLike) -> float:
    """Mean of the root sum of squares in signal-free air, the channels' noise correlated with these eigenvalues.

    The square Q is a sum of independent exponential variables of mean twice each eigenvalue, and
    E sqrt(Q) = (1 / (2 sqrt pi)) times the integral of (1 - L(t)) t^(-3/2), L the Laplace transform of Q.
    """
    from scipy.integrate import quad

    values = np.asarray(eigenvalues, dtype=np.float64)

    def integrand(root: float) -> float:  # t = root^2 takes the singularity out
        return float((1 - np.prod(1 / (1 + 2 * values * root * root))) / (root * root))

    part, _ = quad(integrand, 0, 1, limit=200, epsabs=1e-12)
    rest, _ = quad(lambda w: integrand(1 / w) / (w * w), 0, 1, limit=200, epsabs=1e-12)
    return (part + rest) / math.sqrt(math.pi)


def unsigned_mean(mean: ArrayLike, sd: ArrayLike) -> Floats:
    """Mean of the absolute value of a normal variable."""
    from scipy.special import ndtr

    m, s = np.asarray(mean, dtype=np.float64), np.maximum(np.asarray(sd, dtype=np.float64), 1e-300)
    folded: Floats = s * math.sqrt(2 / math.pi) * np.exp(-0.5 * (m / s) ** 2) + m * (1 - 2 * ndtr(-m / s))
    return folded
