"""The true signal, noise, uniformity and ghosting of one uniform slice, from the model's noise-free image and its noise law."""

import math
from typing import Any

import numpy as np

from qa.geometry import Floats, Plane
from qa.simulate.coils import noise_mixing
from qa.simulate.encode import Scan
from qa.simulate.moments import magnitude_mean, magnitude_variance, root_mean, unsigned_mean
from qa.simulate.setup import Setup

__all__ = ["ghost_regions", "signal_truths"]

Found = dict[str, tuple[float, dict[str, Any]]]
_DISC_MM = math.sqrt(100 / math.pi)  # radius of 1 cm2


def signal_truths(machine: Scan, slice_index: int, outline: tuple[tuple[float, float], float]) -> Found:
    """Return value and details of the signal quantities of one slice.

    Parameters
    ----------
    machine : Scan
        The model.
    slice_index : int
        Counted from 0.
    outline : tuple
        Centre (x, y) and radius of the body in the image, in-plane mm.

    Returns
    -------
    dict
        `snr`, `snr_background`, `uniformity_piu`, `uniformity_naad`, and `ghosting` where there is room for its regions.
    """
    setup = machine.setup
    plane = setup.planes[slice_index]
    (cx, cy), radius = outline
    clean = machine.complex_image(slice_index, noise=False)
    amplitude = np.sqrt(np.sum(clean.real**2 + clean.imag**2, axis=0))
    sigma = 0.0 if math.isinf(setup.snr) else setup.level / setup.snr
    mean, variance = _expected(machine, clean, amplitude, sigma)
    share = setup.phantom.body.region_percent / 100
    x, y = plane.grid_mm()
    region = np.hypot(x - cx, y - cy) <= math.sqrt(share) * radius
    found: Found = {}
    if sigma > 0:
        signal = float(mean[region].mean())
        noise = math.sqrt(float(variance[region].mean()))
        found["snr"] = signal / noise, {"noise_free": float(amplitude[region].mean()) / sigma}
        found["snr_background"] = signal / sigma * _air_ratio(setup), {"noise_free": float(amplitude[region].mean()) / sigma}
    reach = math.sqrt(share) * radius - _DISC_MM
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
        clean_ghost, _ = _ghosting(amplitude, plane, regions, float(amplitude[region].mean()))
        ghost, means = _ghosting(mean, plane, regions, float(mean[region].mean()))
        found["ghosting"] = ghost, {"noise_free": clean_ghost, "regions": regions, "means": means}
    return found


def _expected(machine: Scan, clean: Floats, amplitude: Floats, sigma: float) -> tuple[Floats, Floats]:
    """Mean and variance of the magnitude in every pixel."""
    setup = machine.setup
    if sigma == 0:
        return amplitude, np.zeros_like(amplitude)
    n = setup.channels
    if n == 1 or not setup.noise_correlation:
        return magnitude_mean(amplitude, sigma, n), magnitude_variance(amplitude, sigma, n)
    # Correlated channels: noise along the signal counts at first order, all of it raises the mean at second order.
    mixing = noise_mixing(setup)
    covariance = mixing @ mixing.T
    safe = np.maximum(amplitude, 1e-9)
    toward = np.einsum("irc,ij,jrc->rc", clean.conj(), covariance, clean).real / safe**2
    high = amplitude + sigma**2 * (2 * n - toward) / (2 * safe)
    air = sigma * root_mean(np.linalg.eigvalsh(covariance))
    low = np.hypot(amplitude * 0.0, air) * magnitude_mean(amplitude, sigma, n) / magnitude_mean(0.0, sigma, n)
    strong = amplitude > 10 * sigma
    mean = np.where(strong, high, low)
    variance = np.where(strong, sigma**2 * toward, amplitude**2 + 2 * n * sigma**2 - low**2)
    return mean, variance


def _air_ratio(setup: Setup) -> float:
    """Ratio of the chi distribution's standard deviation for channels without correlation to that of the channels there are."""
    if not setup.noise_correlation or setup.channels == 1:
        return 1.0
    n = setup.channels
    mixing = noise_mixing(setup)
    mean = root_mean(np.linalg.eigvalsh(mixing @ mixing.T))
    return math.sqrt(float(magnitude_variance(0.0, 1.0, n))) / math.sqrt(2 * n - mean**2)


def _integral(image: Floats, plane: Plane, centre: tuple[float, float], reach_mm: float) -> float:
    """Percent integral uniformity: extremes of the mean over a disc of 1 cm2 anywhere within `reach_mm`.

    The disc's mean is a product in k-space with the disc's transform, so the disc may lie between pixels.
    """
    from scipy.fft import fft2, ifft2
    from scipy.ndimage import map_coordinates
    from scipy.special import j1

    (rows, columns), (dy, dx) = plane.shape, plane.pixel_mm
    k = np.hypot(np.fft.fftfreq(columns, dx)[None, :], np.fft.fftfreq(rows, dy)[:, None])
    phase = 2 * math.pi * _DISC_MM * np.maximum(k, 1e-12)
    means = ifft2(fft2(image) * (2 * j1(phase) / phase)).real
    steps = max(24, math.ceil(reach_mm))
    radii = np.linspace(0, reach_mm, steps)[:, None]
    turns = np.linspace(0, 2 * math.pi, 360, endpoint=False)[None, :]
    at = [(centre[1] + radii * np.sin(turns)) / dy, (centre[0] + radii * np.cos(turns)) / dx]
    values = map_coordinates(means, at, order=3)
    high, low = float(values.max()), float(values.min())
    return 100 * (1 - (high - low) / (high + low))


def _deviation(mean: Floats, variance: Floats, region: Floats) -> float:
    """Normalised absolute average deviation after the low-pass filter, with what noise of a variance adds on average."""
    from scipy.ndimage import convolve

    kernel = np.array([[1, 2, 1], [2, 4, 2], [1, 2, 1]]) / 16
    smooth = convolve(mean, kernel, mode="nearest")[region]
    spread = np.sqrt(np.maximum(convolve(variance, kernel**2, mode="nearest")[region], 0))
    middle = smooth.mean()
    away = unsigned_mean(smooth - middle, spread) if spread.any() else np.abs(smooth - middle)
    return float(100 * (1 - away.mean() / middle))


def ghost_regions(plane: Plane, centre: tuple[float, float], radius_mm: float) -> dict[str, tuple[float, float, float, float]]:
    """Lay the four regions in the margins: name to x from, x to, y from, y to, in-plane mm; empty where a margin is below 10 mm.

    About 10 cm2 and 4 : 1, centred in the margin, its thin side cut to what the margin holds with 2 mm clear to either side.
    """
    wide, high = plane.size_mm
    dy, dx = plane.pixel_mm
    left, top = centre[0] - radius_mm + dx / 2, centre[1] - radius_mm + dy / 2
    margins = {"left": left, "right": wide - left - 2 * radius_mm, "top": top, "bottom": high - top - 2 * radius_mm}
    if min(margins.values()) < 10:
        return {}
    found = {}
    for name, margin in margins.items():
        thin = min(math.sqrt(1000 / 4), margin - 4)
        long = 1000 / thin if thin < math.sqrt(250) else 4 * thin
        middle = margin / 2
        if name in {"left", "right"}:
            x = -dx / 2 + middle if name == "left" else wide - dx / 2 - middle
            found[name] = (x - thin / 2, x + thin / 2, centre[1] - long / 2, centre[1] + long / 2)
        else:
            y = -dy / 2 + middle if name == "top" else high - dy / 2 - middle
            found[name] = (centre[0] - long / 2, centre[0] + long / 2, y - thin / 2, y + thin / 2)
    return found


def _ghosting(
    image: Floats, plane: Plane, regions: dict[str, tuple[float, float, float, float]], signal: float
) -> tuple[float, dict[str, float]]:
    x, y = plane.grid_mm()
    means = {}
    for name, (x0, x1, y0, y1) in regions.items():
        inside = (x >= x0) & (x <= x1) & (y >= y0) & (y <= y1)
        means[name] = float(image[inside].mean())
    value = 100 * abs(means["top"] + means["bottom"] - means["left"] - means["right"]) / (2 * signal)
    return value, means
