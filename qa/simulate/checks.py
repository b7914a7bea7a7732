"""What a digital scan may not be: every impossible setting refused in one sentence that names it."""

import math
from dataclasses import fields
from typing import TYPE_CHECKING

import numpy as np

from qa.errors import SettingError

if TYPE_CHECKING:
    from qa.simulate.setup import Setup

__all__ = ["check"]

_POSITIVE = (
    "thickness_mm",
    "snr",
    "level",
    "bandwidth_hz_per_pixel",
    "repetition_ms",
    "t1_ms",
    "t2_ms",
    "proton_density",
    "field_strength_T",
)
_COUNTS = ("slices", "channels", "repeats", "averages")
_CHOICES = {
    "coil": ("loops", "polynomial"),
    "apodisation": ("none", "hann"),
    "phase_encode": ("row", "column"),
    "sequence": ("SE", "GRE"),
}
_RANGES: dict[str, tuple[float, float]] = {
    "profile_edge_mm": (0, 10),
    "tilt_x_deg": (-90, 90),
    "tilt_y_deg": (-90, 90),
    "rotation_deg": (-360, 360),
    "air_bubble_mm": (0, 60),
    "shading_percent": (0, 60),
    "shading_curvature": (-1, 1),
    "ghost_percent": (0, 100),
    "ghost_shift": (0, 0.5),
    "gain_drift_percent": (-50, 50),
    "gain_drift_slope_percent": (-50, 50),
    "scale_x_percent": (-20, 20),
    "scale_y_percent": (-20, 20),
    "nonlinearity_x_mm": (-6, 6),
    "nonlinearity_y_mm": (-6, 6),
    "partial_fourier": (0.5, 1),
    "acquired_fraction": (0.25, 1),
    "echo_ms": (0, math.inf),
    "flip_deg": (0, 180),
    "repeat_seconds": (0, math.inf),
}


def check(setup: "Setup") -> None:
    """Refuse a scan that cannot be.

    Parameters
    ----------
    setup : Setup
        The scan.

    Raises
    ------
    SettingError
        The first impossible setting found; the sentence names it, its value and what is allowed.
    """
    _check_numbers(setup)
    for name, allowed in _CHOICES.items():
        if getattr(setup, name) not in allowed:
            raise SettingError(f"{name} is {getattr(setup, name)!r}: it must be one of {', '.join(allowed)}.")
    if setup.repetition_ms <= setup.echo_ms:
        raise SettingError(f"echo_ms is {setup.echo_ms:g}: it must be below repetition_ms, {setup.repetition_ms:g}.")
    if setup.profile_edge_mm > setup.thickness_mm / 4:
        raise SettingError(
            f"profile_edge_mm is {setup.profile_edge_mm:g}: it must be at most a quarter of thickness_mm, "
            f"{setup.thickness_mm:g}, or the profile's width is no longer that."
        )
    _check_grid(setup)
    _check_coil(setup)
    _check_fit(setup)


def _check_numbers(setup: "Setup") -> None:
    for name in (f.name for f in fields(setup)):
        value = getattr(setup, name)
        numbers = value if isinstance(value, tuple) else (value,)
        if name != "snr" and any(isinstance(v, float) and not math.isfinite(v) for v in numbers):
            raise SettingError(f"{name} is {value!r}: it must be finite.")
    for name in _COUNTS:
        value = getattr(setup, name)
        if not isinstance(value, int) or value < 1:
            raise SettingError(f"{name} is {value!r}: it must be a whole number, at least 1.")
    for name in _POSITIVE:
        value = getattr(setup, name)
        if not value > 0 or (math.isinf(value) and name != "snr"):
            raise SettingError(f"{name} is {value:g}: it must be above 0.")
    for name, (low, high) in _RANGES.items():
        value = getattr(setup, name)
        if not low <= value <= high:
            raise SettingError(f"{name} is {value:g}: it must lie from {low:g} to {high:g}.")


def _check_grid(setup: "Setup") -> None:
    if len(setup.matrix) != 2 or not all(isinstance(n, int) and 16 <= n <= 2048 for n in setup.matrix):
        raise SettingError(f"matrix is {setup.matrix!r}: rows and columns must be whole numbers from 16 to 2048.")
    if len(setup.pixel_mm) != 2 or not all(0.05 <= p <= 20 for p in setup.pixel_mm):
        raise SettingError(f"pixel_mm is {setup.pixel_mm!r}: both spacings must lie from 0.05 to 20 mm.")
    if setup.spacing_mm is not None and not 0 < setup.spacing_mm < math.inf:
        raise SettingError(f"spacing_mm is {setup.spacing_mm:g}: it must be above 0.")
    if len(setup.filling_port_mm) != 2 or not all(0 <= v <= 60 for v in setup.filling_port_mm):
        raise SettingError(f"filling_port_mm is {setup.filling_port_mm!r}: width and depth must lie from 0 to 60 mm.")
    row, column = np.asarray(setup.row_direction), np.asarray(setup.column_direction)
    if not np.allclose([row @ row, column @ column, row @ column], [1, 1, 0], atol=1e-6):
        raise SettingError("row_direction and column_direction must be unit vectors at right angles to each other.")


def _check_coil(setup: "Setup") -> None:
    gains = setup.channel_gains
    if gains is not None and (len(gains) != setup.channels or min(gains) < 0 or max(gains) <= 0):
        raise SettingError(f"channel_gains must hold {setup.channels} values, none negative and not all zero.")
    if isinstance(setup.noise_correlation, tuple):
        matrix = np.asarray(setup.noise_correlation, dtype=np.float64)
        if matrix.shape != (setup.channels, setup.channels) or not np.allclose(matrix, matrix.T):
            raise SettingError(f"noise_correlation must be a symmetric matrix of {setup.channels} by {setup.channels} values.")
        if not np.allclose(np.diag(matrix), 1) or np.linalg.eigvalsh(matrix)[0] <= 0:
            raise SettingError("noise_correlation must have ones on its diagonal and be positive definite.")
    elif not 0 <= setup.noise_correlation < 1:
        raise SettingError(f"noise_correlation is {setup.noise_correlation:g}: it must lie from 0 to below 1.")


def _check_fit(setup: "Setup") -> None:
    if setup.diameter_mm is None and setup.phantom.body.diameter_mm is None:
        raise SettingError(f"diameter_mm is missing: the definition of {setup.phantom.name} leaves the diameter open.")
    if setup.diameter_mm is not None:
        if not setup.diameter_mm > 0:
            raise SettingError(f"diameter_mm is {setup.diameter_mm:g}: it must be above 0.")
        if setup.phantom.body.diameter_mm not in {None, setup.diameter_mm}:
            raise SettingError(
                f"diameter_mm may not be set: {setup.phantom.name} is {setup.phantom.body.diameter_mm:g} mm wide."
            )
    reach = _half_extent(setup)
    (rows, columns), (dy, dx) = setup.matrix, setup.pixel_mm
    shift = setup.off_resonance_shift_mm
    for plane in setup.planes:
        centre = plane.from_patient(np.asarray(setup.centre_patient))
        if setup.phantom.body.shape == "cylinder" and not setup.lengthwise:
            centre = centre - setup.axis * centre[2] / setup.axis[2]
        for k, (count, step, scale, name) in enumerate(
            ((columns, dx, setup.scale_x_percent, "columns"), (rows, dy, setup.scale_y_percent, "rows"))
        ):
            wide, at = reach[k] * (1 + scale / 100), float(centre[k]) + shift[k]
            if at - wide < 0.5 * step or at + wide > (count - 1.5) * step:
                raise SettingError(
                    f"matrix and pixel_mm give a field of view of {count * step:g} mm along {name}: the phantom, "
                    f"{2 * wide:.1f} mm wide there, does not fit it where centre_patient puts it."
                )


def _half_extent(setup: "Setup") -> tuple[float, float]:
    """Half the body's size along the image's x and y, mm."""
    radius = setup.body_diameter_mm / 2
    if setup.phantom.body.shape == "sphere":
        return radius, radius
    x, y, z = (abs(float(v)) for v in setup.axis)
    if not setup.lengthwise:
        return radius * math.hypot(1, x / z), radius * math.hypot(1, y / z)
    half = (setup.phantom.extent_mm or 0.0) / 2
    return radius * math.sqrt(1 - x * x) + half * x, radius * math.sqrt(1 - y * y) + half * y
