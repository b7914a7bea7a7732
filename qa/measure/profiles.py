"""The edge of a slice profile drawn out along a slope, a box smoothed by a Gaussian; and reading functions off tables."""

import math
from dataclasses import dataclass

import numpy as np

from qa.geometry import Floats

__all__ = ["Reader", "Rise", "rise"]


@dataclass(frozen=True, eq=False)
class Rise:
    """Values of a rising edge from 0 to 1, with slopes by place, by the Gaussian's standard deviation and by the box."""

    value: Floats
    by_place: Floats
    by_soft: Floats
    by_box: Floats


def rise(place_mm: Floats, box_mm: float, soft_mm: float) -> Rise:
    """Integral of a box `box_mm` wide smoothed by a Gaussian of standard deviation `soft_mm`, one half at place 0.

    With H(a) = a Phi(a) + phi(a), the integral of the normal distribution Phi, the rise is soft / box (H(up) - H(down)).
    """
    from scipy.special import ndtr

    up, down = (place_mm + box_mm / 2) / soft_mm, (place_mm - box_mm / 2) / soft_mm
    below_up, below_down = ndtr(up), ndtr(down)
    bell_up, bell_down = (np.exp(-0.5 * a * a) / math.sqrt(2 * math.pi) for a in (up, down))
    value = soft_mm / box_mm * (up * below_up + bell_up - down * below_down - bell_down)
    return Rise(
        value,
        by_place=(below_up - below_down) / box_mm,
        by_soft=(bell_up - bell_down) / box_mm,
        by_box=((below_up + below_down) / 2 - value) / box_mm,
    )


class Reader:
    """Functions known on even steps, each with its slope and others: groups of (value, slope by place, ...).

    Values are read with the bend that their slopes tell (error of fourth order), the rest along straight lines; beyond the
    ends, the ends.

    Parameters
    ----------
    start, step : float
        Place of the first value, and the step between values.
    groups : list of list of (N,) float
        For each function its values, their slopes by place, and whatever else is to be read at the same places.
    """

    def __init__(self, start: float, step: float, groups: list[list[Floats]]) -> None:
        self._start, self._step = start, step
        self._sizes = [len(group) for group in groups]
        self._table = np.stack([column for group in groups for column in group], axis=1)

    def __call__(self, place: Floats) -> list[list[Floats]]:
        """Return the same groups at places (P,)."""
        at = np.clip((place - self._start) / self._step, 0.0, len(self._table) - 1.001)
        k = at.astype(np.intp)
        rest = at - k
        low, high = np.take(self._table, k, axis=0).T, np.take(self._table, k + 1, axis=0).T
        read = low + rest * (high - low)
        bend = rest * (1 - rest) * (self._step / 2)
        groups, first = [], 0
        for size in self._sizes:
            read[first] -= bend * (high[first + 1] - low[first + 1])
            groups.append(list(read[first : first + size]))
            first += size
        return groups
