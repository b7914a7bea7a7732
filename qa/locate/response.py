"""How a sharp edge looks in an image: the step response of an acquisition with a limited k-space.

The image of a step is the sine integral when k-space is cut off sharply at the Nyquist frequency of the spacing: it rises
through one half at the edge and rings on both sides. Averaging over a pixel, a filter in k-space or any other mild blur is
told, to the second order that matters here, by a box. So two numbers serve: the spacing that k-space resolves and the width of
the box, both found from the image.

Source: Fourier transform of a step cut off at a band limit (Bracewell, The Fourier Transform and Its Applications, Gibbs
phenomenon; from memory).
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from qa.geometry import Floats

__all__ = ["Response", "Step"]

_REACH = 48
_FINE = 128


@lru_cache(maxsize=1)
def _tables() -> tuple[Floats, Floats]:
    """Step response for unit spacing and its integral, at steps of 1 / 128 from -48 to 48."""
    from scipy.special import sici

    x = np.arange(-_REACH * _FINE, _REACH * _FINE + 1) / _FINE
    whole = np.asarray(sici(np.pi * x)[0])
    step = 0.5 + whole / np.pi
    integral = x / 2 + (x * whole + np.cos(np.pi * x) / np.pi) / np.pi
    return step, integral


def _look_up(x: Floats) -> tuple[Floats, Floats]:
    """Step response and its integral at x, in spacings; the flat ends beyond the tables."""
    step, integral = _tables()
    place = np.clip(x, -_REACH, _REACH - 1e-9)
    at = (place + _REACH) * _FINE
    k = at.astype(np.intp)
    rest = at - k
    beyond = np.clip(x - place, 0, None)
    return step[k] + rest * (step[k + 1] - step[k]), integral[k] + rest * (integral[k + 1] - integral[k]) + beyond


@dataclass(frozen=True, eq=False)
class Step:
    """Values of a step response, and how they change with place, spacing and box; all of the shape of the places."""

    value: Floats
    by_place: Floats
    by_spacing: Floats
    by_box: Floats


@dataclass(frozen=True)
class Response:
    """Step response told by the spacing that k-space resolves and the width of a box, both mm and above 0.

    A box below a tenth of the spacing changes nothing that can be seen, and would cost digits.
    """

    spacing_mm: float
    box_mm: float

    def step(self, distance_mm: Floats) -> Floats:
        """Image of a unit step at a distance beyond it."""
        half = self.box_mm / 2
        _, above = _look_up((distance_mm + half) / self.spacing_mm)
        _, below = _look_up((distance_mm - half) / self.spacing_mm)
        rising: Floats = (above - below) * (self.spacing_mm / self.box_mm)
        return rising

    def slopes(self, distance_mm: Floats) -> Step:
        """Image of a unit step, with its derivatives."""
        spacing, box = self.spacing_mm, self.box_mm
        up, down = (distance_mm + box / 2) / spacing, (distance_mm - box / 2) / spacing
        step_up, integral_up = _look_up(up)
        step_down, integral_down = _look_up(down)
        value = (integral_up - integral_down) * (spacing / box)
        return Step(
            value=value,
            by_place=(step_up - step_down) / box,
            by_spacing=(integral_up - up * step_up - integral_down + down * step_down) / box,
            by_box=((step_up + step_down) / 2 - value) / box,
        )
