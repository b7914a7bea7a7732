"""Fourier encoding: fine grid to acquired k-space, channels, ghosts, noise, and the magnitude image.

The image is what a scanner's reconstruction shows: k-space of the acquired matrix, so edges ring; lines that alternate, so
it ghosts; complex Gaussian noise in every channel.
"""

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane
from qa.simulate.coils import Complexes, channel_share, noise_mixing, shading
from qa.simulate.fine import FineGrid
from qa.simulate.objects import density, slice_key
from qa.simulate.setup import Setup
from qa.simulate.warp import jacobian

__all__ = ["Scan", "acquired_window", "ghost_modulation", "object_kspace"]

_SEAM_PIXELS = 4


def object_kspace(fine: Floats, grid: FineGrid, count: tuple[int, int]) -> Complexes:
    """Transform an object on the fine grid, and keep the middle of its k-space.

    Parameters
    ----------
    fine : (R q, C q) float64
        Samples of the object, every edge blurred by `grid.blur_mm`.
    grid : FineGrid
        Where the samples lie.
    count : tuple of int
        Rows and columns of k-space to keep, no more than the samples.

    Returns
    -------
    complex128
        K-space in FFT order, zero frequency first; phases count from in-plane (0, 0), the centre of the image's first pixel;
        the zero frequency is the mean over the field of view.
    """
    from scipy.fft import fft

    rows, columns = fine.shape
    step_x, step_y = float(grid.x_mm[0, 1] - grid.x_mm[0, 0]), float(grid.y_mm[1, 0] - grid.y_mm[0, 0])
    full = _middle(fft(_middle(fft(fine, axis=1), count[1], axis=1), axis=0), count[0], axis=0)
    kx, ky = np.fft.fftfreq(count[1]) * count[1] / (columns * step_x), np.fft.fftfreq(count[0]) * count[0] / (rows * step_y)
    sharpen = 2 * math.pi**2 * grid.blur_mm**2
    across = np.exp(sharpen * kx**2 - 2j * math.pi * kx * grid.x_mm[0, 0])
    down = np.exp(sharpen * ky**2 - 2j * math.pi * ky * grid.y_mm[0, 0])
    return np.asarray(full * (down[:, None] * (across[None, :] / (rows * columns))))


def _middle(spectrum: Complexes, count: int, axis: int) -> Complexes:
    """Keep the lowest `count` frequencies along an axis in FFT order."""
    return np.take(spectrum, _orders(count).astype(np.intp), axis=axis, mode="wrap")


def _orders(count: int) -> Floats:
    """Whole-number frequencies in FFT order: 0, 1, ..., then the negative ones."""
    orders: Floats = np.rint(np.fft.fftfreq(count) * count)
    return orders


def ghost_modulation(setup: Setup) -> Complexes:
    """Give the factor on each phase-encode line, in FFT order.

    A ghost shifted by half the field of view comes of lines that alternate; another shift of a slower ripple, with a ghost
    to either side.
    """
    lines = setup.matrix[0] if setup.phase_encode == "column" else setup.matrix[1]
    k = _orders(lines)
    ghost = setup.ghost_percent / 100 * np.exp(1j * math.radians(setup.ghost_phase_deg))
    ghosts = 1.0 if setup.ghost_shift == 0.5 else 2.0
    return np.asarray(1 + ghosts * ghost * np.cos(2 * math.pi * k * setup.ghost_shift))


def acquired_window(setup: Setup) -> tuple[Floats, Floats]:
    """Give the weight of k-space along rows (R,) and columns (C,), in FFT order: what is acquired, and its apodisation."""
    windows = []
    for axis, count in (("column", setup.matrix[0]), ("row", setup.matrix[1])):
        k = _orders(count)
        edge = setup.acquired_fraction * count / 2
        window = ((k >= -edge) & (k < edge)).astype(np.float64)
        if setup.apodisation == "hann":
            window *= 0.5 + 0.5 * np.cos(math.pi * k / edge)
        if setup.partial_fourier < 1 and setup.phase_encode == axis:
            window *= k >= edge * (1 - 2 * setup.partial_fourier)
        windows.append(window)
    return windows[0], windows[1]


def _squeeze(setup: Setup, plane: Plane, x_mm: Floats, y_mm: Floats) -> Floats:
    """How much of the object's area each place of the image shows: gradients that stretch the image thin its signal."""
    stretch = jacobian(setup, plane, x_mm, y_mm)
    return np.asarray(stretch[0, 0] * stretch[1, 1] - stretch[0, 1] * stretch[1, 0])


def _without_seam(sensed: Callable[[Floats, Floats], Complexes], plane: Plane, x: Floats, y: Floats) -> Complexes:
    """Evaluate a sensitivity so that it is smooth over the field of view's edge, where the transform joins its two ends.

    Within a few pixels of the edge, where no object lies, what is sensed on this side passes smoothly into what is sensed on
    the other; a jump would scatter the object's ringing over the whole image.
    """
    (wide, high), (dy, dx) = plane.size_mm, plane.pixel_mm
    x_on, x_share = _past_seam(x, wide, dx)
    y_on, y_share = _past_seam(y, high, dy)

    def across(y_mm: Floats) -> Complexes:
        whole = sensed(np.where(x_share == 1, x_on - wide, x_on), y_mm)
        strip = ((x_share > 0) & (x_share < 1))[0]
        share = x_share[:, strip]
        whole[..., strip] = (1 - share) * sensed(x_on[:, strip], y_mm) + share * sensed(x_on[:, strip] - wide, y_mm)
        return whole

    whole = across(np.where(y_share == 1, y_on - high, y_on))
    strip = ((y_share > 0) & (y_share < 1))[:, 0]
    share = y_share[strip]
    whole[..., strip, :] = (1 - share) * across(y_on[strip]) + share * across(y_on[strip] - high)
    return whole


def _past_seam(at: Floats, size: float, step: float) -> tuple[Floats, Floats]:
    """Count places from before the seam on, and tell how far they have passed it, 0 to 1.

    The seam lies half a pixel beyond the last pixel's centre; places just after it are the image's first.
    """
    seam = size - step / 2
    half = _SEAM_PIXELS * step
    onward: Floats = np.where(at < seam - size + half, at + size, at)
    t = np.clip((onward - seam) / (2 * half) + 0.5, 0.0, 1.0)
    return onward, np.asarray(t * t * (3 - 2 * t))


class Scan:
    """One acquisition on the scanner: noise-free images once for slices that look the same, noise for every image.

    Parameters
    ----------
    setup : Setup
        What is scanned, and how.
    """

    def __init__(self, setup: Setup) -> None:
        self.setup = setup
        down, across = acquired_window(setup)
        modulation = ghost_modulation(setup)
        lines = modulation[:, None] if setup.phase_encode == "column" else modulation[None, :]
        self.window: Floats = down[:, None] * across[None, :]
        self._weights: Complexes = self.window * lines
        self._plain = bool(np.all(self.window == 1))
        self.sigma = 0.0 if math.isinf(setup.snr) else setup.level / setup.snr
        self._mixing = noise_mixing(setup)
        self._scale = self._fill_value()
        self._images: dict[object, Complexes] = {}
        self._sensed: Complexes | None = None

    def _fill_value(self) -> float:
        """Pixel value of fill at sensitivity 1, so that the mean over the measurement region is `level`."""
        setup = self.setup
        plane = setup.planes[(setup.slices - 1) // 2]
        centre = plane.from_patient(np.asarray(setup.centre_patient))
        reach = setup.region_radius_mm(setup.body_diameter_mm / 2)
        rings = np.sqrt((np.arange(48) + 0.5) / 48) * reach
        turns = np.arange(96) * 2 * math.pi / 96
        x, y = centre[0] + np.outer(rings, np.cos(turns)), centre[1] + np.outer(rings, np.sin(turns))
        return setup.level / float(np.mean(shading(setup, plane, x, y) * _squeeze(setup, plane, x, y)))

    def _middle_grid(self, plane: Plane) -> tuple[tuple[int, int], Floats, Floats]:
        """Half as fine again as the image: room for what a smooth sensitivity spreads in k-space."""
        from scipy.fft import next_fast_len

        count = (next_fast_len(math.ceil(1.5 * plane.shape[0])), next_fast_len(math.ceil(1.5 * plane.shape[1])))
        wide, high = plane.size_mm
        x: Floats = np.linspace(0.0, wide, count[1], endpoint=False)[None, :]
        y: Floats = np.linspace(0.0, high, count[0], endpoint=False)[:, None]
        return count, x, y

    def _sensitivity(self, plane: Plane, x: Floats, y: Floats) -> Complexes:
        if self._sensed is None:
            setup = self.setup

            def sensed(x_mm: Floats, y_mm: Floats) -> Complexes:
                bright = self._scale * shading(setup, plane, x_mm, y_mm) * _squeeze(setup, plane, x_mm, y_mm)
                return channel_share(setup, plane, x_mm, y_mm) * bright

            self._sensed = _without_seam(sensed, plane, x, y)
        return self._sensed

    def clean(self, slice_index: int, repeat: int = 0) -> Complexes:
        """Give the noise-free image of every channel, (N, R, C)."""
        setup = self.setup
        plane = setup.planes[slice_index]
        slope = repeat * setup.gain_drift_slope_percent / 100
        same = slice_key(setup, plane)
        key = (slice_index if same is None else same, slope)
        if key not in self._images:
            self._images[key] = self._acquire(plane, slope)
        return self._images[key] * (1 + repeat * setup.gain_drift_percent / 100)

    def _acquire(self, plane: Plane, slope: float) -> Complexes:
        from scipy.fft import fft, ifft2

        setup = self.setup
        grid = FineGrid.of(plane)
        count, x, y = self._middle_grid(plane)
        thing = ifft2(object_kspace(density(setup, plane, grid), grid, count)).real * (count[0] * count[1])
        if slope:
            thing = thing * (1 + slope * (x - plane.middle_mm[0]) / 100)
        images = np.empty((setup.channels, *setup.matrix), dtype=np.complex128)
        for k, sensed in enumerate(self._sensitivity(plane, x, y)):
            seen = thing * (sensed.real if setup.channels == 1 else sensed)
            kspace = _middle(fft(_middle(fft(seen, axis=1), setup.matrix[1], axis=1), axis=0), setup.matrix[0], axis=0)
            images[k] = ifft2(kspace * self._weights)
        return images * (setup.matrix[0] * setup.matrix[1] / (count[0] * count[1]))

    def without_ringing(self, slice_index: int) -> Complexes:
        """Give the noise-free image of every channel as if k-space had been apodised (Hann): no ringing, the same ghosts."""
        image = self.clean(slice_index)
        for axis in (-2, -1):
            image = 0.5 * image + 0.25 * (np.roll(image, 1, axis) + np.roll(image, -1, axis))
        return image

    def noise(self, slice_index: int, repeat: int) -> Complexes:
        """Give the noise of every channel, (N, R, C): `sigma` in the real and the imaginary part of every pixel.

        White noise stays white under the transform, so it is drawn in the image, unless k-space is weighted.
        """
        from scipy.fft import ifft2

        setup = self.setup
        rng = np.random.default_rng(np.random.SeedSequence([setup.seed, slice_index, repeat]))
        white = rng.standard_normal((setup.channels, *setup.matrix, 2)).view(np.complex128)[..., 0]
        if setup.noise_correlation:
            white = np.tensordot(self._mixing, white, axes=1)
        if not self._plain:
            pixels = setup.matrix[0] * setup.matrix[1]
            white = ifft2(white * (self.window / math.sqrt(np.mean(self.window**2))), axes=(-2, -1)) * math.sqrt(pixels)
        return np.asarray(white * self.sigma)

    def magnitude(self, slice_index: int, repeat: int = 0, *, noise: bool = True) -> Floats:
        """Give the root sum of squares over the channels, (R, C)."""
        image = self.clean(slice_index, repeat)
        if noise and self.sigma > 0:
            image = image + self.noise(slice_index, repeat)
        combined: Floats = np.sqrt(np.sum(image.real**2 + image.imag**2, axis=0))
        return combined

    def stack(self, repeat: int) -> NDArray[np.float32]:
        """Give one repeat as a scanner stores it: (S, R, C), whole numbers from 0 to 65535, read-only."""
        images = np.stack([self.magnitude(k, repeat) for k in range(self.setup.slices)])
        whole = np.clip(np.rint(images), 0, 65535).astype(np.float32)
        whole.setflags(write=False)
        return whole
