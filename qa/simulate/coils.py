"""Receive sensitivities: what each channel sees of each place, fixed to the scanner and the same along the slice normal."""

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats, Plane
from qa.simulate.setup import Setup

__all__ = ["channel_share", "noise_mixing", "shading"]

_CONDUCTOR_MM = 25.0
Complexes = NDArray[np.complex128]


def _scanner_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats]:
    """In-plane place counted from the middle of the stack."""
    middle = plane.from_patient(np.asarray(setup.stack_centre_patient))
    return np.asarray(x_mm, dtype=np.float64) - middle[0], np.asarray(y_mm, dtype=np.float64) - middle[1]


def shading(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> Floats:
    """Tell the combined sensitivity of all channels in health.

    A second-order surface about the middle of the stack: linear towards `shading_direction_deg`, and the curved share
    brighter outside (or inside, where negative); over the cross-section of a centred phantom 100 (max - min) / max is
    `shading_percent`.

    Parameters
    ----------
    setup : Setup
        The scan.
    plane : Plane
        The slice.
    x_mm, y_mm : array_like
        In-plane places; they broadcast.

    Returns
    -------
    ndarray
        Sensitivity, 1 in the middle.
    """
    x, y = _scanner_place(setup, plane, x_mm, y_mm)
    reach = setup.body_diameter_mm / 2
    angle = math.radians(setup.shading_direction_deg)
    along = (x * math.cos(angle) + y * math.sin(angle)) / reach
    slope, bend = _coefficients(setup.shading_percent / 100, setup.shading_curvature)
    # far outside the phantom the surface levels off, so that it stays positive on any field of view
    square = 4 * np.tanh((x * x + y * y) / reach**2 / 4)
    sensed: Floats = 1 + slope * along + bend * square
    return np.maximum(sensed, 0.05)


def _coefficients(contrast: float, share: float) -> tuple[float, float]:
    """Find linear and curved coefficient, `share` of their sum curved, for a contrast (max - min) / max on the unit disc.

    Along the slope the surface is 1 + a t + b t^2, so its extremes are at t = -1, t = 1 or the vertex between.
    """
    low, high = 0.0, 4.0
    a = b = 0.0
    for _ in range(60):
        size = 0.5 * (low + high)
        a, b = size * (1 - abs(share)), size * share
        at = [-1.0, 1.0]
        if b and abs(a / (2 * b)) < 1:
            at.append(-a / (2 * b))
        values = [1 + a * t + b * 4 * math.tanh(t * t / 4) for t in at]
        low, high = (size, high) if 1 - min(values) / max(values) < contrast else (low, size)
    return a, b


def channel_share(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> Complexes:
    """Tell each channel's complex share of the combined sensitivity, (N, ...), with squares that sum to 1 in health.

    "loops": the field of N long rectangular loops evenly round the phantom, by Biot and Savart for their two long sides;
    "polynomial": smooth first-order maps with evenly turned directions. A failing channel's gain is applied here.
    """
    x, y = _scanner_place(setup, plane, x_mm, y_mm)
    place = x + 1j * y
    n = setup.channels
    gains = setup.channel_gains or (1.0,) * n
    if n == 1:
        return np.full((1, *np.broadcast_shapes(np.shape(x), np.shape(y))), gains[0], dtype=np.complex128)
    size = setup.body_diameter_mm / 2
    maps = []
    for k in range(n):
        angle = 2 * math.pi * (k + 0.25) / n
        if setup.coil == "loops":
            far, half = 1.35 * size + 25.0, min(0.45 * 2 * math.pi / n, 0.6)
            one, other = (far * np.exp(1j * (angle + side * half)) for side in (-1, 1))
            field = _wire(place - one) - _wire(place - other)
        else:
            turned = place * np.exp(-1j * angle) / size
            field = (1.5 + turned.real + 0.3j * turned.imag) * np.exp(1j * angle)
        maps.append(field)
    stack = np.stack(maps)
    stack /= np.sqrt(np.sum(stack.real**2 + stack.imag**2, axis=0))
    return np.asarray(stack * np.asarray(gains).reshape(-1, *(1,) * place.ndim))


def _wire(away: Complexes) -> Complexes:
    """Field of a long wire, levelled off inside the conductor's breadth."""
    return np.asarray(away.conj() / (away.real**2 + away.imag**2 + _CONDUCTOR_MM**2))


def noise_mixing(setup: Setup) -> Floats:
    """Lower triangular matrix that turns independent noise of N channels into noise of their correlation."""
    if isinstance(setup.noise_correlation, tuple):
        return np.asarray(np.linalg.cholesky(np.asarray(setup.noise_correlation, dtype=np.float64)))
    n = setup.channels
    step = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    return np.asarray(np.linalg.cholesky(setup.noise_correlation ** np.minimum(step, n - step) * 1.0))
