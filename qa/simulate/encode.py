"""Fourier encoding: fine grid to acquired k-space, channels, ghosts, noise, and the magnitude image.

The image is what a scanner's reconstruction shows: k-space of the acquired matrix, so edges ring; lines that alternate, so
it ghosts; complex Gaussian noise in every channel.
"""

import math

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane
from qa.simulate.coils import Complexes, channel_share, noise_mixing, shading
from qa.simulate.objects import OVERSAMPLING, FineGrid, density, slice_key
from qa.simulate.setup import Setup

__all__ = ["Scan", "acquired_window", "encode", "ghost_modulation", "noise_level", "scan", "to_image"]


def encode(
    fine: NDArray[np.floating] | Complexes, shape: tuple[int, int], pixel_mm: tuple[float, float], blur_mm: float
) -> Complexes:
    """Transform an object on the fine grid and keep the k-space of an image.

    Parameters
    ----------
    fine : (R q, C q) array
        Samples of the object, every edge blurred by a Gaussian of standard deviation `blur_mm`.
    shape, pixel_mm : tuple
        Rows and columns of the image; row and column spacing.
    blur_mm : float
        The blur to divide out.

    Returns
    -------
    (R, C) complex128
        K-space in FFT order (zero frequency first), scaled so that its inverse transform shows an even object of 1 as 1.
    """
    from scipy.fft import fft

    q = OVERSAMPLING
    half = fft(fine, axis=1)
    half = _crop(half, shape[1], axis=1)
    full = _crop(fft(half, axis=0), shape[0], axis=0)
    kx = np.fft.fftfreq(shape[1]) / pixel_mm[1]
    ky = np.fft.fftfreq(shape[0]) / pixel_mm[0]
    sharpen = 2 * math.pi**2 * blur_mm**2
    start = 2j * math.pi * (q - 1) / 2 / q
    across = np.exp(sharpen * kx**2 + start * kx * pixel_mm[1])
    down = np.exp(sharpen * ky**2 + start * ky * pixel_mm[0])
    return np.asarray(full * (down[:, None] * across[None, :] / q**2))


def _crop(spectrum: Complexes, count: int, axis: int) -> Complexes:
    keep = np.fft.fftfreq(count, 1 / count).round().astype(np.intp)
    return np.take(spectrum, keep, axis=axis, mode="wrap")


def ghost_modulation(setup: Setup) -> Complexes:
    """Factor on each phase-encode line, in FFT order along that axis.

    A ghost shifted by half the field of view comes of lines that alternate; another shift of a slower ripple, with a ghost
    to either side.
    """
    lines = setup.matrix[0] if setup.phase_encode == "column" else setup.matrix[1]
    k = np.fft.fftfreq(lines, 1 / lines)
    ghost = setup.ghost_percent / 100 * np.exp(1j * math.radians(setup.ghost_phase_deg))
    ghosts = 1.0 if setup.ghost_shift == 0.5 else 2.0
    return np.asarray(1 + ghosts * ghost * np.cos(2 * math.pi * k * setup.ghost_shift))


def acquired_window(setup: Setup) -> tuple[Floats, Floats]:
    """Weights of k-space along rows (R,) and columns (C,), in FFT order: what is acquired, and how it is apodised."""
    windows = []
    for axis, count in (("column", setup.matrix[0]), ("row", setup.matrix[1])):
        k = np.fft.fftfreq(count, 1 / count)
        edge = setup.acquired_fraction * count / 2
        window = ((k >= -edge) & (k < edge)).astype(np.float64)
        if setup.apodisation == "hann":
            window *= 0.5 + 0.5 * np.cos(math.pi * k / edge)
        if setup.partial_fourier < 1 and setup.phase_encode == axis:
            window *= k >= edge * (1 - 2 * setup.partial_fourier)
        windows.append(window)
    return windows[0], windows[1]


def to_image(kspace: Complexes) -> Complexes:
    """Inverse transform of k-space in FFT order."""
    from scipy.fft import ifft2

    return np.asarray(ifft2(kspace, axes=(-2, -1)))


def noise_level(setup: Setup, kept: float) -> float:
    """Standard deviation of the real part of one channel's noise before the window, `kept` the window's mean square."""
    if math.isinf(setup.snr):
        return 0.0
    return setup.level / setup.snr / math.sqrt(kept)


class Scan:
    """One acquisition as it is acquired: noise-free k-space once for slices that look the same, noise for every image.

    Parameters
    ----------
    setup : Setup
        The scan.
    """

    def __init__(self, setup: Setup) -> None:
        self.setup = setup
        self._signal: dict[object, Complexes] = {}
        down, across = acquired_window(setup)
        modulation = ghost_modulation(setup)
        lines = modulation[:, None] if setup.phase_encode == "column" else modulation[None, :]
        self.window: Floats = down[:, None] * across[None, :]
        self._weights: Complexes = self.window * lines
        self._sigma = noise_level(setup, float(np.mean(self.window**2)))
        self._mixing = noise_mixing(setup)
        self._maps: Complexes | None = None
        self.scale = self._calibrate()

    def _calibrate(self) -> float:
        """Pixel value of fill at sensitivity 1, so that the mean of the measurement region is `level`."""
        setup = self.setup
        plane = setup.planes[(setup.slices - 1) // 2]
        centre = plane.from_patient(np.asarray(setup.centre_patient))
        reach = math.sqrt(setup.phantom.body.region_percent / 100) * setup.body_diameter_mm / 2
        rings = np.sqrt((np.arange(48) + 0.5) / 48) * reach
        turns = np.arange(96) * 2 * math.pi / 96
        x, y = centre[0] + np.outer(rings, np.cos(turns)), centre[1] + np.outer(rings, np.sin(turns))
        return setup.level / float(np.mean(shading(setup, plane, x, y)))

    def signal(self, slice_index: int, repeat: int = 0) -> Complexes:
        """Noise-free k-space of every channel, (N, R, C) in FFT order."""
        setup = self.setup
        plane = setup.planes[slice_index]
        drifts = bool(setup.gain_drift_slope_percent) and repeat > 0
        key = (slice_key(setup, plane), repeat if drifts else 0)
        if key[0] is not None and key in self._signal:
            return self._signal[key]
        grid = FineGrid.of(plane)
        if self._maps is None:
            sensed = self.scale * shading(setup, plane, grid.x_mm, grid.y_mm)
            self._maps = channel_share(setup, plane, grid.x_mm, grid.y_mm) * sensed
        filled = density(setup, plane)
        if drifts:
            middle = plane.middle_mm[0]
            filled = filled * (1 + repeat * setup.gain_drift_slope_percent / 100 * (grid.x_mm - middle) / 100)
        kspace = np.stack(
            [
                encode(filled * (m.real if setup.channels == 1 else m), setup.matrix, setup.pixel_mm, grid.blur_mm)
                * self._weights
                for m in self._maps
            ]
        )
        if key[0] is not None:
            self._signal[key] = kspace
        return kspace

    def complex_image(self, slice_index: int, repeat: int = 0, *, noise: bool = True) -> Complexes:
        """Image of every channel, (N, R, C)."""
        setup = self.setup
        kspace = self.signal(slice_index, repeat) * (1 + repeat * setup.gain_drift_percent / 100)
        if noise and self._sigma > 0:
            rng = np.random.default_rng(np.random.SeedSequence([setup.seed, slice_index, repeat]))
            raw = rng.standard_normal((2, setup.channels, *setup.matrix))
            white = raw[0] + 1j * raw[1]
            if setup.noise_correlation:
                white = np.tensordot(self._mixing, white, axes=1)
            spread = self._sigma * math.sqrt(setup.matrix[0] * setup.matrix[1])
            kspace = kspace + white * (spread * self.window)
        return to_image(kspace)

    def magnitude(self, slice_index: int, repeat: int = 0, *, noise: bool = True) -> Floats:
        """Root sum of squares over the channels, (R, C)."""
        image = self.complex_image(slice_index, repeat, noise=noise)
        if len(image) == 1:
            return np.abs(image[0])
        combined: Floats = np.sqrt(np.sum(image.real**2 + image.imag**2, axis=0))
        return combined


def scan(setup: Setup, *, noise: bool = True) -> list[NDArray[np.float32]]:
    """Acquire every repeat.

    Parameters
    ----------
    setup : Setup
        The scan.
    noise : bool
        False for the model's noise-free images, not rounded.

    Returns
    -------
    list of (S, R, C) float32
        One stack a repeat, pixel values as a scanner stores them: whole numbers from 0 to 65535.
    """
    machine = Scan(setup)
    stacks = []
    for repeat in range(setup.repeats):
        images = np.stack([machine.magnitude(k, repeat, noise=noise) for k in range(setup.slices)])
        if noise:
            images = np.clip(np.rint(images), 0, 65535)
        stack = images.astype(np.float32)
        stack.setflags(write=False)
        stacks.append(stack)
    return stacks
