"""Made scenes with a known outline: any shape, shaded, band-limited as a scanner's k-space is, with complex noise."""

import numpy as np
import pytest

from qa.geometry import Plane
from qa.records import Acquisition, Scanner, Series, Settings

OVER = 4


class Scene:
    """Shapes in mm from the image's middle, x along rows, y along columns."""

    def __init__(self, shape=(200, 200), pixel_mm=(1.0, 1.0)):
        self.shape, self.pixel_mm = shape, pixel_mm
        rows, columns = shape
        y = ((np.arange(rows * OVER) + 0.5) / OVER - rows / 2) * pixel_mm[0]
        x = ((np.arange(columns * OVER) + 0.5) / OVER - columns / 2) * pixel_mm[1]
        self.x, self.y = x[None, :], y[:, None]
        self.density = np.zeros((rows * OVER, columns * OVER))

    def ellipse(self, x, y, a, b, value=1.0):
        reach = np.hypot((self.x - x) / a, (self.y - y) / b)
        soft = np.clip((1 - reach) * min(a, b) / (max(self.pixel_mm) / OVER) + 0.5, 0, 1)
        self.density = self.density * (1 - soft) + value * soft
        return self

    def disc(self, x, y, radius, value=1.0):
        return self.ellipse(x, y, radius, radius, value)

    def empty(self, x, y):
        """Empty a rectangle given by its ends."""
        inside = (self.x > x[0]) & (self.x < x[1]) & (self.y > y[0]) & (self.y < y[1])
        self.density = np.where(inside, 0.0, self.density)
        return self

    def shaded(self, percent, direction_deg=30.0, reach_mm=85.0):
        """Linear shading, 100 (max - min) / (max + min) over +-reach."""
        turn = np.radians(direction_deg)
        self.density = self.density * (1 + percent / 100 * (self.x * np.cos(turn) + self.y * np.sin(turn)) / reach_mm)
        return self

    def image(self, snr, seed=0, channels=1, level=1000.0):
        """Magnitude image (R, C) of the band-limited scene; SNR is that of density 1."""
        rows, columns = self.shape
        spectrum = np.fft.fft2(self.density)
        keep = [np.fft.fftfreq(n, 1 / n).astype(int) for n in self.shape]
        cut = spectrum[np.ix_(*keep)] / OVER**2
        half = [np.exp(1j * np.pi * k * (OVER - 1) / (n * OVER)) for k, n in zip(keep, self.shape, strict=True)]
        signal = np.fft.ifft2(cut * half[0][:, None] * half[1][None, :])
        rng = np.random.default_rng(seed)
        power = np.zeros(self.shape)
        for _ in range(channels):
            noise = rng.standard_normal((2, rows, columns)) / snr if np.isfinite(snr) else np.zeros((2, rows, columns))
            power += np.abs(signal / np.sqrt(channels) + noise[0] + 1j * noise[1]) ** 2
        return np.rint(level * np.sqrt(power)).astype(np.float32)

    @property
    def middle(self):
        """In-plane mm of the image's middle."""
        return tuple((n - 1) / 2 * p for n, p in zip(self.shape[::-1], self.pixel_mm[::-1], strict=True))


def acquisition(images, *, pixel_mm=(1.0, 1.0), spacing=5.0, kind="magnitude", phase_encode="column", repeats=()):
    """Stack images at heights 0, spacing, ... with the image's middle at the origin of patient coordinates."""
    stacks = [np.asarray(images, dtype=np.float32), *(np.asarray(r, dtype=np.float32) for r in repeats)]
    rows, columns = stacks[0].shape[1:]
    x, y = -(columns - 1) / 2 * pixel_mm[1], -(rows - 1) / 2 * pixel_mm[0]
    planes = tuple(
        Plane((x, y, k * spacing), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), pixel_mm, (rows, columns)) for k in range(len(stacks[0]))
    )
    settings = Settings(slice_thickness_mm=5.0, pixel_mm=pixel_mm, matrix=(rows, columns), phase_encode=phase_encode)
    return Acquisition(tuple(Series("1", "2", "", None, kind, 1, Scanner(), settings, planes, stack) for stack in stacks))


@pytest.fixture
def scene():
    return Scene


@pytest.fixture
def scan():
    return acquisition
