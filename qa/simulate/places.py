"""What a true value is, and the geometry that it needs, point by point."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats, Plane
from qa.simulate.setup import Setup
from qa.simulate.warp import image_place, object_place

__all__ = ["Truth", "meant_slice", "on_plane", "outline_mm", "phantom_place", "seen_centre"]


@dataclass(frozen=True)
class Truth:
    """The true value of one quantity.

    Attributes
    ----------
    value : float
        In the slice that the quantity is read in, or over all.
    by_slice : mapping
        From slice number, counted from 1 along the normal, to value; empty where no one slice is meant.
    details : mapping
        What a comparison may need besides: named in `true_values`.
    """

    value: float
    by_slice: Mapping[int, float] = field(default_factory=dict)
    details: Mapping[str, Any] = field(default_factory=dict)


def phantom_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike, *, seen: bool = True) -> Floats:
    """Phantom coordinates (..., 3) of an in-plane place: of the image where `seen`, else of the object."""
    x, y = object_place(setup, plane, x_mm, y_mm) if seen else (x_mm, y_mm)
    at: Floats = (plane.to_patient(x, y) - np.asarray(setup.centre_patient)) @ setup.orientation
    return at


def on_plane(setup: Setup, plane: Plane, X: ArrayLike, Y: ArrayLike) -> Floats:
    """Object place, in-plane mm (..., 2), where lines parallel to the phantom's axis cross a slice."""
    X, Y = np.broadcast_arrays(np.asarray(X, dtype=np.float64), np.asarray(Y, dtype=np.float64))
    start = np.asarray(setup.centre_patient) + np.stack([X, Y, np.zeros_like(X)], axis=-1) @ setup.orientation.T
    local = plane.from_patient(start)
    axis = plane.axes.T @ setup.orientation[:, 2]
    crossed: Floats = local - axis * (local[..., 2:] / axis[2])
    return crossed[..., :2]


def seen_centre(setup: Setup, plane: Plane) -> tuple[float, float]:
    """Where a slice shows the phantom's axis, or a sphere's centre projected on it: in-plane mm of the image."""
    if setup.phantom.body.shape == "cylinder" and not setup.lengthwise:
        at = on_plane(setup, plane, 0.0, 0.0)
    else:
        at = plane.from_patient(np.asarray(setup.centre_patient))
    x, y = image_place(setup, plane, at[0], at[1])
    return float(x), float(y)


def meant_slice(setup: Setup, z_mm: float) -> int:
    """Choose the slice, by number, that is meant for a section: by the definition's own stack, else the nearest one."""
    stack = setup.phantom.slices
    if stack is not None and stack.count == setup.slices:
        index = round((z_mm - stack.first_z_mm) / stack.spacing_mm)
        if 0 <= index < stack.count:
            return index + 1
    place = np.asarray(setup.centre_patient) + setup.orientation[:, 2] * z_mm
    return 1 + min(range(setup.slices), key=lambda k: abs(float(setup.planes[k].from_patient(place)[2])))


def outline_mm(setup: Setup, plane: Plane, centre: tuple[float, float], directions: ArrayLike) -> Floats:
    """Distance in the image from a place inside to the body's outline at half height, along unit directions (N, 2).

    A cylinder's outline is where the slice's middle plane leaves it (its ends, where it is cut lengthwise); a sphere's where
    half the slice profile still lies in it.
    """
    radius, half_length = setup.body_diameter_mm / 2, (setup.phantom.extent_mm or 0.0) / 2
    height = float(plane.from_patient(np.asarray(setup.centre_patient))[2])
    along = np.asarray(directions, dtype=np.float64)

    def filled(distance: Floats) -> NDArray[np.bool_]:
        at = phantom_place(setup, plane, centre[0] + distance * along[:, 0], centre[1] + distance * along[:, 1])
        if setup.lengthwise:
            return np.asarray(np.abs(at[:, 2]) < half_length)
        if setup.phantom.body.shape == "cylinder":
            return np.asarray(np.hypot(at[:, 0], at[:, 1]) < radius)
        half = np.sqrt(np.maximum(radius**2 - (np.sum(at * at, axis=1) - height**2), 0.0))
        return np.asarray(setup.profile.cumulative(height + half) - setup.profile.cumulative(height - half) > 0.5)

    low, high = np.zeros(len(along)), np.full(len(along), 2.5 * max(radius, half_length))
    for _ in range(60):
        middle = 0.5 * (low + high)
        inside = filled(middle)
        low, high = np.where(inside, middle, low), np.where(inside, high, middle)
    return low
