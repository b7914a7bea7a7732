"""The slice profile: how much each height above and below the slice's middle counts."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats

__all__ = ["Profile"]


@dataclass(frozen=True)
class Profile:
    """A rectangle `width_mm` wide, blurred by a Gaussian of standard deviation `edge_mm`; its integral is 1.

    Its full width at half maximum is `width_mm` as long as the edge is below a third of it.
    """

    width_mm: float
    edge_mm: float = 0.0

    @property
    def reach_mm(self) -> float:
        """Distance from the middle beyond which the profile is nothing."""
        return self.width_mm / 2 + 5 * self.edge_mm

    def cumulative(self, height_mm: ArrayLike, extra_mm: ArrayLike = 0.0) -> Floats:
        """Integrate the profile up to a height, the profile blurred by a further Gaussian of `extra_mm`."""
        from scipy.special import ndtr

        height, extra = np.asarray(height_mm, dtype=np.float64), np.asarray(extra_mm, dtype=np.float64)
        half = self.width_mm / 2
        edge = np.maximum(np.hypot(self.edge_mm, extra), 1e-9)
        # heights far off are brought near, or the difference of two large numbers would lose its digits
        near = np.clip(height, -half - 8 * edge, half + 8 * edge)

        def integral(a: Floats) -> Floats:
            grown: Floats = a * ndtr(a) + np.exp(-0.5 * np.minimum(a * a, 1e3)) / math.sqrt(2 * math.pi)
            return grown

        rising: Floats = edge / self.width_mm * (integral((near + half) / edge) - integral((near - half) / edge))
        return np.clip(rising, 0.0, 1.0)

    def density(self, height_mm: ArrayLike) -> Floats:
        """Value of the profile at a height, per mm."""
        from scipy.special import ndtr

        height, half = np.asarray(height_mm, dtype=np.float64), self.width_mm / 2
        if self.edge_mm == 0:
            return np.asarray((np.abs(height) < half) / self.width_mm)
        shape: Floats = (ndtr((height + half) / self.edge_mm) - ndtr((height - half) / self.edge_mm)) / self.width_mm
        return shape

    def nodes(self, count: int) -> tuple[Floats, Floats]:
        """Give heights and weights (sum 1) of a Gauss-Legendre quadrature over the profile."""
        if count == 1:
            return np.zeros(1), np.ones(1)
        points, weights = np.polynomial.legendre.leggauss(count)
        heights = points * self.reach_mm
        weights = weights * self.density(heights * (1 - 1e-12))
        return heights, weights / weights.sum()
