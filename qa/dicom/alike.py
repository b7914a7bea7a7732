"""When two images, or two series, count as made alike: the one place where tolerances for that stand."""

import math

import numpy as np

from qa.geometry import Plane
from qa.records import Settings

__all__ = ["SAME_PLACE_MM", "same_directions", "same_grid", "same_plane", "same_settings", "same_settings_but_coil"]

SAME_PLACE_MM = 0.05
"""Images closer than this along the normal lie at the same place."""

_RELATIVE = 1e-3
_DIRECTION = 1e-3
_PLACE_MM = 0.1
_NUMBERS = ("slice_thickness_mm", "repetition_ms", "echo_ms", "flip_deg", "averages", "bandwidth_hz_per_pixel")
_WORDS = ("sequence", "phase_encode", "parallel_imaging", "filtered")


def _close(first: float | None, second: float | None) -> bool:
    if first is None or second is None:
        return first is second
    return math.isclose(first, second, rel_tol=_RELATIVE)


def same_settings(first: Settings, second: Settings) -> bool:
    """Tell whether two images were made with the same settings; protocol name and frequency may differ."""
    return first is second or (first.receive_coil == second.receive_coil and same_settings_but_coil(first, second))


def same_settings_but_coil(first: Settings, second: Settings) -> bool:
    """Tell whether settings agree in all but the receive coil."""
    return (
        first.matrix == second.matrix
        and all(_close(a, b) for a, b in zip(first.pixel_mm, second.pixel_mm, strict=True))
        and all(getattr(first, name) == getattr(second, name) for name in _WORDS)
        and all(_close(getattr(first, name), getattr(second, name)) for name in _NUMBERS)
    )


def same_directions(first: Plane, second: Plane) -> bool:
    """Tell whether two images lie parallel with the same row and column directions."""
    if first.row_direction == second.row_direction and first.column_direction == second.column_direction:
        return True
    return bool(np.max(np.abs(first.axes - second.axes)) < _DIRECTION)


def same_grid(first: Plane, second: Plane) -> bool:
    """Tell whether two images have the same matrix, pixel size and directions, wherever they lie."""
    return (
        first.shape == second.shape
        and all(_close(a, b) for a, b in zip(first.pixel_mm, second.pixel_mm, strict=True))
        and same_directions(first, second)
    )


def same_plane(first: Plane, second: Plane) -> bool:
    """Tell whether two images lie at the same place."""
    return math.dist(first.position_patient, second.position_patient) < _PLACE_MM and same_grid(first, second)
