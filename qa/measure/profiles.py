"""The edge of a slice profile drawn out along a slope: a box smoothed by a Gaussian."""

import math
from dataclasses import dataclass

import numpy as np

from qa.geometry import Floats

__all__ = ["Rise", "rise"]


@dataclass(frozen=True, eq=False)
class Rise:
    """Values of a rising edge from 0 to 1, and how they change with place and with the Gaussian's standard deviation."""

    value: Floats
    by_place: Floats
    by_soft: Floats


def rise(place_mm: Floats, box_mm: float, soft_mm: float) -> Rise:
    """Integral of a box `box_mm` wide smoothed by a Gaussian of standard deviation `soft_mm`, one half at place 0.

    With H(a) = a Phi(a) + phi(a), the integral of the normal distribution Phi, the rise is soft / box (H(up) - H(down)).
    """
    from scipy.special import ndtr

    up, down = (place_mm + box_mm / 2) / soft_mm, (place_mm - box_mm / 2) / soft_mm
    below_up, below_down = ndtr(up), ndtr(down)
    bell_up, bell_down = (np.exp(-0.5 * a * a) / math.sqrt(2 * math.pi) for a in (up, down))
    value = soft_mm / box_mm * (up * below_up + bell_up - down * below_down - bell_down)
    return Rise(value, (below_up - below_down) / box_mm, (bell_up - bell_down) / box_mm)
