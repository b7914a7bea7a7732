"""What a slice should show of a phantom's inserts: the share of full signal at each place, to about a pixel.

Serves to recognise sections and to lay the phantom over the image; edges are straight ramps about a pixel wide, and the slice
profile is taken to be a rectangle. Rods are left out: a square lattice of them says nothing about turns by a quarter.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from qa.geometry import Floats
from qa.phantoms import Lattice, Ramps, WedgeBars

__all__ = ["TELLING", "Places", "expected_fill"]

TELLING = (Ramps, WedgeBars, Lattice)
"""Kinds of section by which a turn and a height can be told."""


@dataclass(frozen=True, eq=False)
class Places:
    """Places in the phantom's frame, mm: arrays that broadcast against each other."""

    X: Floats
    Y: Floats
    Z: Floats


@dataclass(frozen=True, eq=False)
class _Slab:
    """Places with the lower and upper face of the slice there, and the width over which an edge rises."""

    X: Floats
    Y: Floats
    below: Floats
    above: Floats
    soft_mm: float

    def share(self, low: Floats | float, high: Floats | float) -> Floats:
        """Share of the slice's thickness that lies between two heights."""
        shared: Floats = np.clip(np.minimum(self.above, high) - np.maximum(self.below, low), 0.0, None)
        return shared / (self.above - self.below)

    def within(self, place: Floats, low: float, high: float) -> Floats:
        """1 between two places, 0 outside, with soft ends."""
        half = (high - low) / 2
        most = min(1.0, 2 * half / self.soft_mm)
        inside: Floats = np.clip((half - np.abs(place - (low + high) / 2)) / self.soft_mm + 0.5, 0.0, most)
        return inside


def expected_fill(sections: Iterable[Any], places: Places, thickness_mm: float, soft_mm: float) -> Floats:
    """Return the share of full signal at places in the phantom.

    Parameters
    ----------
    sections : iterable of Section
        Inserts; kinds other than `TELLING` change nothing.
    places : Places
        In the slice's middle.
    thickness_mm : float
        Slice thickness.
    soft_mm : float
        Width over which an edge rises.

    Returns
    -------
    float array
        0 to 1.
    """
    half = thickness_mm / 2
    slab = _Slab(places.X, places.Y, places.Z - half, places.Z + half, soft_mm)
    fill = np.ones(np.broadcast_shapes(places.X.shape, places.Y.shape, places.Z.shape))
    for section in sections:
        match section:
            case Ramps():
                fill = _with_ramps(section, fill, slab)
            case WedgeBars():
                fill = _with_wedges(section, fill, slab)
            case Lattice():
                fill = _with_lattice(section, fill, slab)
            case _:
                pass
    return fill


def _with_ramps(section: Ramps, fill: Floats, slab: _Slab) -> Floats:
    (x, y), (width, height) = section.block_centre_mm, section.block_size_mm
    along = slab.within(slab.X, x - width / 2, x + width / 2)
    block = along * slab.within(slab.Y, y - height / 2, y + height / 2) * slab.share(section.z_from_mm, section.z_to_mm)
    filled = fill * (1 - block)
    for slot in section.slots:
        middle = section.z_mm + slot.slope * (slab.X - slot.crossing_x_mm)
        low = np.maximum(middle - slot.thickness_mm / 2, section.z_from_mm)
        high = np.minimum(middle + slot.thickness_mm / 2, section.z_to_mm)
        across = slab.within(slab.Y, slot.centre_y_mm - slot.height_mm / 2, slot.centre_y_mm + slot.height_mm / 2)
        filled = filled + along * across * slab.share(low, np.maximum(low, high))
    return filled


def _with_wedges(section: WedgeBars, fill: Floats, slab: _Slab) -> Floats:
    low, high = section.z_from_mm, section.z_to_mm
    for bar in section.bars:
        face = np.clip(section.z_mm + (slab.Y - section.start_y_mm - section.length_mm) / bar.slope, low, high)
        dark = slab.share(face, high) if bar.slope > 0 else slab.share(low, face)
        fill = fill * (1 - dark * slab.within(slab.X, bar.x_from_mm, bar.x_to_mm))
    return fill


def _with_lattice(section: Lattice, fill: Floats, slab: _Slab) -> Floats:
    half = section.span_mm / 2
    across, down = (_lattice_bars(section, place, slab) for place in (slab.X, slab.Y))
    across, down = across * slab.within(slab.Y, -half, half), down * slab.within(slab.X, -half, half)
    filled: Floats = fill * (1 - slab.share(section.z_from_mm, section.z_to_mm) * (across + down - across * down))
    return filled


def _lattice_bars(section: Lattice, place: Floats, slab: _Slab) -> Floats:
    """1 on the bars that cross one axis."""
    shift = 0.0 if section.bars % 2 else 0.5
    last = (section.bars - 1) / 2
    number = np.clip(np.round(place / section.pitch_mm + shift) - shift, -last, last)
    half = section.bar_width_mm / 2
    return slab.within(place - number * section.pitch_mm, -half, half)
