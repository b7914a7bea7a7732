"""Random scans over the ranges in which the measurements promise their accuracy."""

import math
from typing import Any

import numpy as np

from qa.phantoms import Phantom
from qa.simulate.setup import PLANES, Setup, default_setup

__all__ = ["random_setup"]


def random_setup(
    rng: np.random.Generator,
    phantom: Phantom,
    *,
    planes: tuple[str, ...] = ("axial", "axial", "coronal", "sagittal", "oblique"),
    **changes: Any,  # noqa: ANN401 - any field of Setup
) -> Setup:
    """Draw a scan from the ranges in which the measurements promise their accuracy.

    Rotation +-10 degrees, tilt +-2 degrees, off-centre +-15 mm, SNR 30 to 500 (evenly in its logarithm), pixels 0.7 to 1.5 mm,
    spacing in x and y up to 20 % apart, one to sixteen channels, shading 5 to 40 %, and half the scans with a ghost.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where chance comes from.
    phantom : Phantom
        What is scanned.
    planes : tuple of str
        Drawn from with equal chance: "axial", "coronal", "sagittal", "oblique".
    **changes
        Fields of `Setup` to hold fixed, or to add.

    Returns
    -------
    Setup
        The scan; the field of view leaves a margin of at least 18 mm on every side for ghosting.
    """
    settings: dict[str, Any] = {}
    row, column = _axes(rng, str(rng.choice(list(planes))))
    settings["row_direction"], settings["column_direction"] = row, column
    normal = np.cross(row, column)
    if phantom.body.diameter_mm is None:
        settings["diameter_mm"] = float(rng.uniform(150, 200))
    diameter = phantom.body.diameter_mm or float(settings["diameter_mm"])
    small = float(rng.uniform(0.7, 1.5 / 1.2))
    pixels = [small, min(1.5, small * float(rng.uniform(1.0, 1.2)))]
    rng.shuffle(pixels)
    settings["pixel_mm"] = (round(pixels[0], 4), round(pixels[1], 4))
    margin = float(rng.uniform(35, 50))
    settings["matrix"] = tuple(2 * math.ceil((diameter + 2 * margin) / p / 2) for p in settings["pixel_mm"])
    across, down = rng.uniform(-15, 15, 2)
    along = float(rng.uniform(-5, 5)) if phantom.slices is not None else float(rng.uniform(-1, 1))
    centre = across * np.asarray(row) + down * np.asarray(column) + along * normal
    settings["centre_patient"] = tuple(float(v) for v in np.round(centre, 3))
    tilt, towards = math.sqrt(rng.uniform()) * 2.0, rng.uniform(0, 2 * math.pi)
    settings["tilt_x_deg"], settings["tilt_y_deg"] = tilt * math.cos(towards), tilt * math.sin(towards)
    settings["rotation_deg"] = float(rng.uniform(-10, 10))
    settings["snr"] = float(np.exp(rng.uniform(math.log(30), math.log(500))))
    settings["channels"] = int(rng.choice([1, 1, 2, 4, 8, 16]))
    settings["shading_percent"] = float(rng.uniform(5, 40))
    settings["shading_direction_deg"] = float(rng.uniform(0, 360))
    settings["shading_curvature"] = float(rng.uniform(-1, 1))
    settings["ghost_percent"] = float(rng.choice([0.0, rng.uniform(0.2, 4.0)]))
    settings["phase_encode"] = str(rng.choice(["row", "column"]))
    settings["thickness_mm"] = 5.0 if phantom.slices is None else float(rng.uniform(3, 6))
    settings["seed"] = int(rng.integers(2**31))
    stack = phantom.slices
    if stack is not None:
        middle = stack.first_z_mm + (stack.count - 1) / 2 * stack.spacing_mm
        settings["stack_centre_patient"] = tuple(float(v) for v in middle * normal)
    return default_setup(phantom, **(settings | changes))


def _axes(rng: np.random.Generator, plane: str) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    if plane != "oblique":
        return PLANES[plane]
    a, b, c = np.radians(rng.uniform(-35, 35, 3))
    about_x = np.array([[1, 0, 0], [0, math.cos(a), -math.sin(a)], [0, math.sin(a), math.cos(a)]])
    about_y = np.array([[math.cos(b), 0, math.sin(b)], [0, 1, 0], [-math.sin(b), 0, math.cos(b)]])
    about_z = np.array([[math.cos(c), -math.sin(c), 0], [math.sin(c), math.cos(c), 0], [0, 0, 1]])
    turned = about_z @ about_y @ about_x
    row, column = (tuple(float(v) for v in turned[:, k]) for k in (0, 1))
    return (row[0], row[1], row[2]), (column[0], column[1], column[2])
