"""True signal, noise, uniformity and ghosting of one uniform slice: from the noise-free image and the law of its noise."""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane
from qa.simulate.coils import Complexes, noise_mixing
from qa.simulate.encode import Scan
from qa.simulate.moments import magnitude_mean, magnitude_variance, root_mean, unsigned_mean
from qa.simulate.setup import Setup

__all__ = ["Found", "ghost_regions", "signal_truths"]

Found = dict[str, tuple[float, dict[str, Any]]]
Box = tuple[float, float, float, float]
_DISC_MM = math.sqrt(100 / math.pi)  # radius of 1 cm2


def signal_truths(machine: Scan, slice_index: int, outline: tuple[tuple[float, float], float], inner: float) -> Found:
    """Return value and details of the signal quantities of one slice.

    Parameters
    ----------
    machine : Scan
        The model.
    slice_index : int
        Counted from 0.
    outline : tuple
        Centre (x, y) and radius of the body in the image, in-plane mm.
    inner : float
        Radius of the measurement region, mm.

    Returns
    -------
    dict
        `snr`, `snr_background`, `uniformity_piu`, `uniformity_naad`, and `ghosting` where there is room for its regions.
    """
    setup = machine.setup
    plane = setup.planes[slice_index]
    (cx, cy), radius = outline
    clean = machine.clean(slice_index)
    amplitude = _combined(clean)
    mean, variance = _expected(setup, clean, amplitude, machine.sigma)
    x, y = plane.grid_mm()
    region = np.hypot(x - cx, y - cy) <= inner
    bright, seen = float(amplitude[region].mean()), float(mean[region].mean())
    found: Found = {}
    if machine.sigma > 0:
        unlike = {"noise_free": bright / machine.sigma}
        found["snr"] = seen / math.sqrt(float(variance[region].mean())), unlike
        found["snr_background"] = seen / machine.sigma * _air_ratio(setup), unlike
    reach = inner - _DISC_MM
    found["uniformity_piu"] = (
        _integral(mean, plane, (cx, cy), reach),
        {"noise_free": _integral(amplitude, plane, (cx, cy), reach)},
    )
    found["uniformity_naad"] = (
        _deviation(amplitude, np.zeros_like(amplitude), region),
        {"with_noise": _deviation(mean, variance, region)},
    )
    regions = ghost_regions(plane, (cx, cy), radius)
    if regions:
        still = _combined(machine.without_ringing(slice_index))
        found["ghosting"] = (
            _ghosting(mean, plane, regions, seen),
            {
                "noise_free": _ghosting(amplitude, plane, regions, bright),
                "ghost_percent": _ghosting(still, plane, regions, bright),
                "regions": regions,
            },
        )
    return found


def _combined(channels: Complexes) -> Floats:
    return np.asarray(np.sqrt(np.sum(channels.real**2 + channels.imag**2, axis=0)))


def _expected(setup: Setup, clean: Complexes, amplitude: Floats, sigma: float) -> tuple[Floats, Floats]:
    """Mean and variance of the magnitude in every pixel."""
    if sigma == 0:
        return amplitude, np.zeros_like(amplitude)
    n = setup.channels
    mean = magnitude_mean(amplitude, sigma, n)
    variance = amplitude**2 + 2 * n * sigma**2 - mean**2
    if n == 1 or not setup.noise_correlation:
        return mean, variance
    # Correlated channels. Over signal: noise along it counts at first order, all else raises the mean at second order. In
    # air: the weighted chi distribution, its rise with a faint signal taken to be that of channels without correlation.
    mixing = noise_mixing(setup)
    covariance = mixing @ mixing.T
    strong = amplitude > 10 * sigma
    faint = np.maximum(amplitude, sigma)
    toward = np.einsum("irc,ij,jrc->rc", clean.conj(), covariance, clean).real / faint**2
    air = root_mean(np.linalg.eigvalsh(covariance)) / float(magnitude_mean(0.0, 1.0, n))
    low = mean * air
    mean = np.where(strong, amplitude + sigma**2 * (2 * n - toward) / (2 * faint), low)
    variance = np.where(strong, sigma**2 * toward, np.maximum(amplitude**2 + 2 * n * sigma**2 - low**2, 0.0))
    return mean, variance


def _air_ratio(setup: Setup) -> float:
    """Ratio of the standard deviation in air, channels without correlation over the channels there are."""
    if not setup.noise_correlation or setup.channels == 1:
        return 1.0
    n = setup.channels
    mixing = noise_mixing(setup)
    mean = root_mean(np.linalg.eigvalsh(mixing @ mixing.T))
    return math.sqrt(float(magnitude_variance(0.0, 1.0, n)) / (2 * n - mean**2))


def _integral(image: Floats, plane: Plane, centre: tuple[float, float], reach_mm: float) -> float:
    """Percent integral uniformity: extremes of the mean over a disc of 1 cm2 anywhere within `reach_mm`.

    The disc's mean is a product in k-space with the disc's transform, so the disc may lie between pixels.
    """
    from scipy.fft import irfft2, rfft2
    from scipy.ndimage import map_coordinates
    from scipy.special import j1

    (rows, columns), (dy, dx) = plane.shape, plane.pixel_mm
    k = np.hypot(np.fft.rfftfreq(columns, dx)[None, :], np.fft.fftfreq(rows, dy)[:, None])
    phase = 2 * math.pi * _DISC_MM * np.maximum(k, 1e-9)
    means = irfft2(rfft2(image) * (2 * j1(phase) / phase), s=(rows, columns))
    radii = np.linspace(0, reach_mm, max(24, math.ceil(reach_mm / 1.5)))[:, None]
    turns = np.linspace(0, 2 * math.pi, 240, endpoint=False)[None, :]
    at = [(centre[1] + radii * np.sin(turns)) / dy, (centre[0] + radii * np.cos(turns)) / dx]
    values = map_coordinates(means, at, order=3)
    high, low = float(values.max()), float(values.min())
    return 100 * (1 - (high - low) / (high + low))


def _deviation(mean: Floats, variance: Floats, region: NDArray[np.bool_]) -> float:
    """Normalised absolute average deviation after the low-pass filter, with what noise of a variance adds on average."""
    from scipy.ndimage import convolve

    kernel = np.array([[1, 2, 1], [2, 4, 2], [1, 2, 1]]) / 16
    smooth = convolve(mean, kernel, mode="nearest")[region]
    middle = smooth.mean()
    away = np.abs(smooth - middle)
    if variance.any():
        away = unsigned_mean(smooth - middle, np.sqrt(convolve(variance, kernel**2, mode="nearest")[region]))
    return float(100 * (1 - away.mean() / middle))


def ghost_regions(plane: Plane, centre: tuple[float, float], radius_mm: float) -> dict[str, Box]:
    """Lay the four regions in the margins.

    About 10 cm2 and 4 : 1, centred in the margin; in a narrow margin thinner and longer, 2 mm clear to either side.

    Parameters
    ----------
    plane : Plane
        The image.
    centre, radius_mm
        The body's outline in it, in-plane mm.

    Returns
    -------
    dict
        From "left", "right", "top", "bottom" to x from, x to, y from, y to, in-plane mm; empty where a margin is below 10 mm.
    """
    wide, high = plane.size_mm
    dy, dx = plane.pixel_mm
    left, top = centre[0] - radius_mm + dx / 2, centre[1] - radius_mm + dy / 2
    margins = {"left": left, "right": wide - left - 2 * radius_mm, "top": top, "bottom": high - top - 2 * radius_mm}
    if min(margins.values()) < 10:
        return {}
    found: dict[str, Box] = {}
    for name, margin in margins.items():
        thin = min(math.sqrt(1000 / 4), margin - 4)
        long = 1000 / thin
        if name in {"left", "right"}:
            x = -dx / 2 + (margin / 2 if name == "left" else wide - margin / 2)
            found[name] = (x - thin / 2, x + thin / 2, centre[1] - long / 2, centre[1] + long / 2)
        else:
            y = -dy / 2 + (margin / 2 if name == "top" else high - margin / 2)
            found[name] = (centre[0] - long / 2, centre[0] + long / 2, y - thin / 2, y + thin / 2)
    return found


def _ghosting(image: Floats, plane: Plane, regions: dict[str, Box], signal: float) -> float:
    x, y = plane.grid_mm()
    means = {
        name: float(image[(x >= x0) & (x <= x1) & (y >= y0) & (y <= y1)].mean()) for name, (x0, x1, y0, y1) in regions.items()
    }
    return 100 * abs(means["top"] + means["bottom"] - means["left"] - means["right"]) / (2 * signal)
