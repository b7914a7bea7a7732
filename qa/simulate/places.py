"""Places in object, image and phantom, and the body's outline: the geometry that truth needs, point by point."""

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats, Plane
from qa.simulate.objects import Profile, object_place
from qa.simulate.setup import Setup

__all__ = ["image_place", "outline_mm", "phantom_place"]


def image_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike) -> tuple[Floats, Floats]:
    """Tell where in the image an in-plane place of the object appears: the inverse of `object_place`, by iteration."""
    x, y = np.asarray(x_mm, dtype=np.float64), np.asarray(y_mm, dtype=np.float64)
    at_x, at_y = x.copy(), y.copy()
    for _ in range(60):
        was_x, was_y = object_place(setup, plane, at_x, at_y)
        at_x, at_y = at_x + (x - was_x), at_y + (y - was_y)
    return at_x, at_y


def phantom_place(setup: Setup, plane: Plane, x_mm: ArrayLike, y_mm: ArrayLike, *, seen: bool = True) -> Floats:
    """Phantom coordinates (..., 3) of an in-plane place: of the image where `seen`, else of the object."""
    x, y = object_place(setup, plane, x_mm, y_mm) if seen else (x_mm, y_mm)
    patient = plane.to_patient(x, y)
    at: Floats = (patient - np.asarray(setup.centre_patient)) @ setup.orientation
    return at


def outline_mm(setup: Setup, plane: Plane, centre: tuple[float, float], direction: tuple[float, float]) -> float:
    """Distance in the image from a place to the body's outline at half height.

    A cylinder's outline is where the slice's middle plane leaves it; a sphere's where half the slice profile still lies in it.
    """
    radius = setup.body_diameter_mm / 2
    profile = Profile(setup.thickness_mm, setup.profile_edge_mm)
    sphere = setup.phantom.body.shape == "sphere"
    height = float(plane.from_patient(np.asarray(setup.centre_patient))[2])

    def filled(distance: float) -> bool:
        at = phantom_place(setup, plane, centre[0] + distance * direction[0], centre[1] + distance * direction[1])
        if not sphere:
            return bool(np.hypot(at[0], at[1]) < radius)
        across = float(at @ at) - height**2
        half = np.sqrt(max(radius**2 - across, 0.0))
        return bool(profile.cumulative(height + half) - profile.cumulative(height - half) > 0.5)

    low, high = 0.0, 2.5 * radius
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if filled(middle) else (low, middle)
    return low
