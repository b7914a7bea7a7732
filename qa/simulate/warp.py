"""Where the scanner puts what: gradients off scale, gradients not linear, off-resonance; image to object and back.

Gradients act about the isocentre, the origin of patient coordinates; off-resonance shifts along the readout. All arguments are
in-plane mm of one image.
"""

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats, Plane
from qa.simulate.setup import Setup

__all__ = ["image_place", "jacobian", "object_place"]


def _from_isocentre(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats, Floats]:
    iso = plane.from_patient(np.zeros(3))
    shift_x, shift_y = setup.off_resonance_shift_mm
    x = np.asarray(x_mm, dtype=np.float64) - shift_x - iso[0]
    y = np.asarray(y_mm, dtype=np.float64) - shift_y - iso[1]
    return x, y, iso


def object_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats]:
    """Tell which place of the object appears at a place of the image."""
    x, y, iso = _from_isocentre(setup, plane, x_mm, y_mm)
    across, down = x / (1 + setup.scale_x_percent / 100), y / (1 + setup.scale_y_percent / 100)
    if setup.bent:
        square = (x * x + y * y) * 1e-6
        across = across - setup.nonlinearity_x_mm * x * square
        down = down - setup.nonlinearity_y_mm * y * square
    return across + iso[0], down + iso[1]


def jacobian(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> Floats:
    """Give the derivative of `object_place`: (2, 2) where it is the same everywhere, else (2, 2, ...) over the places."""
    scale = np.diag([1 / (1 + setup.scale_x_percent / 100), 1 / (1 + setup.scale_y_percent / 100)])
    if not setup.bent:
        return scale
    x, y, _ = _from_isocentre(setup, plane, x_mm, y_mm)
    x, y = np.broadcast_arrays(x, y)
    a, b = setup.nonlinearity_x_mm * 1e-6, setup.nonlinearity_y_mm * 1e-6
    first = np.stack([scale[0, 0] - a * (3 * x * x + y * y), -2 * a * x * y])
    second = np.stack([-2 * b * x * y, scale[1, 1] - b * (x * x + 3 * y * y)])
    return np.stack([first, second])


def image_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats]:
    """Tell where in the image a place of the object appears: the inverse of `object_place`, by iteration."""
    x, y = np.asarray(x_mm, dtype=np.float64), np.asarray(y_mm, dtype=np.float64)
    at_x, at_y = x.copy(), y.copy()
    for _ in range(100):
        was_x, was_y = object_place(setup, plane, at_x, at_y)
        step_x, step_y = x - was_x, y - was_y
        at_x, at_y = at_x + step_x, at_y + step_y
        if max(float(np.abs(step_x).max()), float(np.abs(step_y).max())) < 1e-11:
            break
    return at_x, at_y
