"""Faults by name: what goes wrong on scanners, each put together from the model's own imperfections.

A severity of 0 is health, 1 is plain to anyone; in between a fault develops. Faults can be put on top of each other.
"""

import math
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Any

from qa.errors import SettingError
from qa.simulate.setup import Setup

__all__ = [
    "FAULTS",
    "crooked_phantom",
    "drifting_magnet",
    "dying_channel",
    "ghosting_gradient_amplifier",
    "gradient_out_of_calibration",
    "protocol_somebody_changed",
    "with_fault",
    "with_protocol",
]


def dying_channel(setup: Setup, severity: float, channel: int = 0) -> Setup:
    """Lower the gain of one receive channel, to nothing at severity 1; its noise stays, so SNR and uniformity fall there."""
    if not 0 <= channel < setup.channels:
        raise SettingError(f"channel is {channel}: this scan has {setup.channels}, counted from 0.")
    gains = list(setup.channel_gains or (1.0,) * setup.channels)
    # A coil of one channel cannot go to nothing and still make an image.
    gains[channel] *= 1 - _checked(severity) * (1.0 if setup.channels > 1 else 0.8)
    return setup.but(channel_gains=tuple(gains))


def ghosting_gradient_amplifier(setup: Setup, severity: float) -> Setup:
    """Let alternate lines differ in phase: a ghost shifted by half the field of view, 5 % at severity 1."""
    return setup.but(ghost_percent=setup.ghost_percent + 5.0 * _checked(severity), ghost_shift=0.5, ghost_phase_deg=90.0)


def gradient_out_of_calibration(setup: Setup, severity: float, axis: str = "x") -> Setup:
    """Stretch the image along its x or y: by 3 % at severity 1, which is 6 mm on 190 mm."""
    if axis not in {"x", "y"}:
        raise SettingError(f"axis is {axis!r}: it must be 'x' or 'y'.")
    name = f"scale_{axis}_percent"
    return setup.but(**{name: getattr(setup, name) + 3.0 * _checked(severity)})


def drifting_magnet(setup: Setup, severity: float) -> Setup:
    """Let the field sink: the centre frequency falls by 5 ppm at severity 1, and the scanner follows it."""
    return setup.but(frequency_offset_ppm=setup.frequency_offset_ppm - 5.0 * _checked(severity))


def crooked_phantom(setup: Setup, severity: float) -> Setup:
    """Put the phantom in crooked: at severity 1 tilted by 5 degrees, turned by 8 and 14 mm off centre."""
    share = _checked(severity)
    x, y, z = setup.centre_patient
    return setup.but(
        tilt_x_deg=setup.tilt_x_deg + 4.0 * share,
        tilt_y_deg=setup.tilt_y_deg - 3.0 * share,
        rotation_deg=setup.rotation_deg + 8.0 * share,
        centre_patient=(x + 12.0 * share, y + 6.0 * share, z + 4.0 * share),
    )


def protocol_somebody_changed(setup: Setup, severity: float) -> Setup:
    """Lengthen the echo time and thin the slice: at severity 1 twice the echo time and 2 mm less; signal and SNR follow."""
    share = _checked(severity)
    return with_protocol(
        setup,
        echo_ms=round(setup.echo_ms * (1 + share), 3),
        thickness_mm=max(1.0, round(setup.thickness_mm - 2.0 * share, 3)),
        spacing_mm=setup.thickness_mm if setup.spacing_mm is None else setup.spacing_mm,
    )


def with_protocol(setup: Setup, **changes: Any) -> Setup:  # noqa: ANN401 - any field of Setup
    """Change the protocol and let signal and SNR follow, as they do on a scanner.

    The signal goes with the sequence's own formula and the voxel's volume; the noise with the square root of bandwidth over
    what is averaged: SNR is proportional to signal x volume x sqrt(averages x phase-encode lines / bandwidth a pixel).

    Parameters
    ----------
    setup : Setup
        The scan as it was.
    **changes
        Fields of `Setup` that somebody changed.

    Returns
    -------
    Setup
        The scan as it is now.
    """
    changed = setup.but(**changes)
    signal = changed.relative_signal * _volume(changed) / (setup.relative_signal * _volume(setup))
    time = _sampled(changed) / _sampled(setup)
    return changed.but(level=setup.level * signal, snr=setup.snr * signal * math.sqrt(time))


def _volume(setup: Setup) -> float:
    return setup.pixel_mm[0] * setup.pixel_mm[1] * setup.thickness_mm


def _sampled(setup: Setup) -> float:
    lines = setup.matrix[0] if setup.phase_encode == "column" else setup.matrix[1]
    return setup.averages * lines * setup.partial_fourier / setup.bandwidth_hz_per_pixel


def _checked(severity: float) -> float:
    if not 0 <= severity <= 1:
        raise SettingError(f"severity is {severity:g}: it must lie from 0 to 1.")
    return severity


FAULTS: Mapping[str, Callable[[Setup, float], Setup]] = MappingProxyType(
    {
        "dying channel": dying_channel,
        "ghosting gradient amplifier": ghosting_gradient_amplifier,
        "gradient out of calibration": gradient_out_of_calibration,
        "drifting magnet": drifting_magnet,
        "phantom put in crooked": crooked_phantom,
        "protocol somebody changed": protocol_somebody_changed,
    }
)
"""Every fault by its name."""


def with_fault(setup: Setup, name: str, severity: float) -> Setup:
    """Put a fault, by name, on a scan.

    Parameters
    ----------
    setup : Setup
        The scan.
    name : str
        A key of `FAULTS`.
    severity : float
        0 to 1.

    Returns
    -------
    Setup
        The scan with the fault.

    Raises
    ------
    SettingError
        Unknown name, or a severity out of range.
    """
    if name not in FAULTS:
        raise SettingError(f"There is no fault {name!r}: known are {', '.join(FAULTS)}.")
    return FAULTS[name](setup, severity)
