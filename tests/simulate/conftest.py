"""What the tests of digital phantoms share."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from qa.phantoms import Phantom, load_phantom
from qa.simulate import Setup, default_setup


@pytest.fixture
def make() -> Callable[..., Setup]:
    """A plain scan of a shipped phantom, with some settings changed."""

    def described(name: str = "sphere-170", **changes: object) -> Setup:
        return default_setup(load_phantom(name), **changes)

    return described


@pytest.fixture(scope="session")
def digital() -> Path:
    """Digital phantoms made independently of this program; not part of it."""
    return Path(__file__).parents[3] / "shared" / "data" / "digital"


def member(phantom: Phantom, X: np.ndarray, Y: np.ndarray, Z: np.ndarray) -> np.ndarray:
    """Tell point by point whether there is fill: written from the definition's words alone."""
    body = phantom.body
    radius = body.diameter_mm / 2
    if body.shape == "sphere":
        return radius**2 > X * X + Y * Y + Z * Z
    inside = (radius**2 > X * X + Y * Y) & (np.abs(Z) < body.length_mm / 2)
    for section in phantom.sections:
        if section.kind in _MISSING:
            inside &= ~_MISSING[section.kind](section, X, Y, Z)
    return inside


def _ramps(section, X, Y, Z):
    (cx, cy), (wide, high) = section.block_centre_mm, section.block_size_mm
    block = (np.abs(X - cx) < wide / 2) & (np.abs(Y - cy) < high / 2) & (section.z_from_mm < Z) & (section.z_to_mm > Z)
    for slot in section.slots:
        lift = Z - section.z_mm - slot.slope * (X - slot.crossing_x_mm)
        block &= ~((np.abs(Y - slot.centre_y_mm) < slot.height_mm / 2) & (np.abs(lift) < slot.thickness_mm / 2))
    return block


def _wedge_bars(section, X, Y, Z):
    height = Z - section.z_mm
    gone = np.zeros(X.shape, dtype=bool)
    for bar in section.bars:
        end = section.start_y_mm + section.length_mm + bar.slope * height
        gone |= (bar.x_from_mm < X) & (bar.x_to_mm > X) & (end > Y) & (np.abs(height) < section.reach_mm)
    return gone


def _lattice(section, X, Y, Z):
    def bar(value):
        k = np.clip(np.rint(value / section.pitch_mm), -(section.bars // 2), section.bars // 2)
        return np.abs(value - k * section.pitch_mm) < section.bar_width_mm / 2

    square = (np.abs(X) < section.span_mm / 2) & (np.abs(Y) < section.span_mm / 2)
    return (bar(X) | bar(Y)) & square & (section.z_from_mm < Z) & (section.z_to_mm > Z)


def _rods(section, X, Y, Z):
    i, j = np.rint(X / section.pitch_mm), np.rint(Y / section.pitch_mm)
    there = section.pitch_mm * np.hypot(i, j) <= section.reach_mm
    away = np.hypot(X - section.pitch_mm * i, Y - section.pitch_mm * j)
    return there & (away < section.rod_diameter_mm / 2) & (section.z_from_mm < Z) & (section.z_to_mm > Z)


_MISSING = {"ramps": _ramps, "wedge-bars": _wedge_bars, "lattice": _lattice, "rods": _rods}


@pytest.fixture(scope="session")
def fill() -> Callable[[Phantom, np.ndarray, np.ndarray, np.ndarray], np.ndarray]:
    """`member`, handed to tests."""
    return member
