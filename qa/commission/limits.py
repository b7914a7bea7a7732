"""The least standard deviation that noise allows any method: sampling and Cramer-Rao limits of one digital scan.

Worked out from the noise-free model and the law of its noise; nothing is shared with the routines that measure.
"""

import math
from collections.abc import Mapping
from functools import lru_cache
from typing import Any

import numpy as np

from qa.geometry import Floats
from qa.phantoms import Ramps, Slot
from qa.simulate.encode import Scan
from qa.simulate.moments import magnitude_mean, magnitude_variance
from qa.simulate.places import Truth, on_plane
from qa.simulate.warp import image_place

__all__ = ["fisher_information", "least_deviation"]

_AIR_MM2 = 2000.0


def least_deviation(name: str, machine: Scan, truth: Truth) -> float | None:
    """Return the least standard deviation of one quantity in one scan.

    Parameters
    ----------
    name : str
        Quantity.
    machine : Scan
        The model.
    truth : Truth
        Its true value.

    Returns
    -------
    float or None
        Percent of the true value for the two signal-to-noise ratios (1 / sqrt(2 n), n the pixels of the measurement
        region, or of 20 cm2 of air), percent for ghosting (that of the four means), mm for slice thickness (Cramer-Rao);
        None for the others, where it lies far below the bar, and for a scan without noise.
    """
    if machine.sigma == 0:
        return None
    match name:
        case "snr":
            radius = machine.setup.body_diameter_mm / 2
            return _of_a_deviation(machine, machine.setup.phantom.body.region_percent / 100 * math.pi * radius**2)
        case "snr_background":
            return _of_a_deviation(machine, _AIR_MM2)
        case "ghosting":
            return _ghosting(machine, truth.details)
        case "slice_thickness":
            return _thickness(machine, truth.details)
    return None


def _of_a_deviation(machine: Scan, area_mm2: float) -> float:
    dy, dx = machine.setup.pixel_mm
    return 100 / math.sqrt(2 * area_mm2 / (dx * dy))


def _amplitude(machine: Scan, number: int) -> Floats:
    clean = machine.clean(number - 1)
    combined: Floats = np.sqrt(np.sum(clean.real**2 + clean.imag**2, axis=0))
    return combined


def _ghosting(machine: Scan, details: Mapping[str, Any]) -> float:
    """Propagate the noise of the four means: 100 sqrt(sum of variances) / (2 S)."""
    setup = machine.setup
    amplitude = _amplitude(machine, details["slice"])
    x, y = setup.planes[details["slice"] - 1].grid_mm()
    variance = 0.0
    for x0, x1, y0, y1 in details["regions"].values():
        inside = amplitude[(x >= x0) & (x <= x1) & (y >= y0) & (y <= y1)]
        variance += float(magnitude_variance(inside, machine.sigma, setup.channels).mean()) / inside.size
    signal = float(magnitude_mean(setup.level, machine.sigma, setup.channels))
    return 100 * math.sqrt(variance) / (2 * signal)


def _thickness(machine: Scan, details: Mapping[str, Any]) -> float | None:
    """Bound 2 A B / (A + B) times the slope, A and B the widths of the two bars, both read in the same image.

    The image of a bar is a trapezoid along x: slice profile and slab, each a rectangle, folded. Its two half heights and its
    plateau are unknown, everything else (floor, shape, shading) known, and the pixels' noise that of magnitudes. A method that
    knows less cannot do better; ringing and the loss of the edge pixels across the bar are left out, which lowers the bound.
    """
    setup = machine.setup
    section = next(s for s in setup.phantom.sections if isinstance(s, Ramps))
    amplitude = _amplitude(machine, details["slice"])
    dy, dx = setup.pixel_mm
    variances = []
    for slot, width in zip(section.slots, details["bars_mm"], strict=True):
        plateau = _plateau(machine, details["slice"], amplitude, slot)
        thick, slab = sorted((setup.thickness_mm, slot.thickness_mm), reverse=True)
        ramp = width * slab / thick
        variances.append(_width_variance(plateau / machine.sigma, width, ramp, setup.channels) * dx * dy / slot.height_mm)
    a, b = details["bars_mm"]
    slope = math.sqrt(abs(section.slots[0].slope * section.slots[1].slope))
    rates = 2 * b**2 / (a + b) ** 2, 2 * a**2 / (a + b) ** 2
    return slope * math.sqrt(sum(r * r * v for r, v in zip(rates, variances, strict=True)))


def _plateau(machine: Scan, number: int, amplitude: Floats, slot: Slot) -> float:
    """Amplitude over the middle of a bar: where the slab crosses the slice, all along the slot's height but its borders."""
    setup = machine.setup
    plane = setup.planes[number - 1]
    X = slot.crossing_x_mm + np.linspace(-8, 8, 17)[:, None]
    Y = slot.centre_y_mm + slot.height_mm * np.linspace(-0.2, 0.2, 3)[None, :]
    at = on_plane(setup, plane, X, Y)
    x, y = image_place(setup, plane, at[..., 0], at[..., 1])
    columns, rows = np.rint(x / plane.pixel_mm[1]).astype(np.intp), np.rint(y / plane.pixel_mm[0]).astype(np.intp)
    return float(amplitude[np.clip(rows, 0, plane.shape[0] - 1), np.clip(columns, 0, plane.shape[1] - 1)].mean())


def _width_variance(plateau: float, width: float, ramp: float, channels: int) -> float:
    """Cramer-Rao bound of the distance of the half heights, for 1 pixel a mm along the bar and one line of pixels.

    Parameters are the two half heights l and r and the plateau P, the amplitude being P (1/2 + (x - l) / ramp) on the left
    ramp; `plateau` is in units of the noise.
    """
    shape = (np.arange(200) + 0.5) / 200
    on_ramp = fisher_information(plateau * shape, channels)
    flat = float(fisher_information(np.array([plateau]), channels)[0])
    edge = float(on_ramp.mean()) * plateau**2 / ramp
    cross = float((on_ramp * shape).mean()) * plateau
    height = 2 * ramp * float((on_ramp * shape**2).mean()) + max(width - ramp, 0.0) * flat
    information = np.array([[edge, 0, -cross], [0, edge, cross], [-cross, cross, height]])
    covariance = np.linalg.inv(information)
    return float(covariance[0, 0] + covariance[1, 1] - 2 * covariance[0, 1])


def fisher_information(ratio: Floats, channels: int) -> Floats:
    """Information on the amplitude in one pixel's magnitude, in units of 1 / sigma^2.

    Parameters
    ----------
    ratio : ndarray
        Amplitude over `sigma`.
    channels : int
        Complex channels combined as root sum of squares, none correlated.

    Returns
    -------
    ndarray
        0 where there is no signal, towards 1 where there is much; from the noncentral chi density (Constantinides et al. 1997;
        for one channel the Rician one), by quadrature of its squared score.
    """
    at, values = _information_table(channels)
    found: Floats = np.interp(ratio, at, values)
    return found


@lru_cache(maxsize=32)
def _information_table(channels: int) -> tuple[Floats, Floats]:
    from scipy.special import ive

    at = np.concatenate([np.linspace(0.0, 12.0, 121), np.geomspace(12.5, 600.0, 60)])
    values = np.zeros_like(at)
    for k, a in enumerate(at[1:], start=1):
        middle = float(magnitude_mean(a, 1.0, channels))
        m = np.linspace(max(1e-6, middle - 9), middle + 9, 2001)
        bessel = ive(channels - 1, m * a)
        density = m**channels / a ** (channels - 1) * np.exp(-0.5 * (m - a) ** 2) * bessel
        bend = np.divide(ive(channels, m * a), bessel, out=np.ones_like(m), where=bessel > 0)
        score = m * bend - a
        values[k] = np.sum(score**2 * density) / np.sum(density)
    return at, values
