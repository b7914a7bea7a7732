"""The marks of a verdict, one shape each, drawn in numbers as one path."""

import math
from typing import Literal

import numpy as np

from qa.geometry import Floats
from qa.report.plot import Plot
from qa.report.style import DATA, INK, LIMIT

__all__ = ["MARKS", "Mark", "add_marks", "add_rings"]

Mark = Literal["pass", "conditional pass", "conditional fail", "fail", "no limit"]
MARKS: tuple[Mark, ...] = ("pass", "conditional pass", "conditional fail", "fail", "no limit")

_DIAMOND = np.array([(0, 1), (1, 0), (0, -1), (-1, 0), (0, 1)], dtype=np.float64)
_OCTAGON = np.array([(math.cos(turn), math.sin(turn)) for turn in np.linspace(0, 2 * math.pi, 17)])


def add_marks(plot: Plot, centres: Floats, mark: Mark, scale: float) -> None:
    """Draw all marks of a kind, at (N, 2) places in points.

    The two common marks are ends of lines without length, a dot by a round cap and a square by a square one; the rarer ones
    are outlines.
    """
    ink = LIMIT if mark in {"fail", "conditional fail"} else DATA
    if mark in {"pass", "no limit"}:
        plot.segments(
            centres, centres + np.array([0.01, 0.0]), edgecolor=ink, zorder=4,
            linewidth=scale * (2.7 if mark == "pass" else 2.2), capstyle="round" if mark == "pass" else "projecting",
        )  # fmt: skip
        return
    outline, radius = (_OCTAGON, 1.75) if mark == "conditional pass" else (_DIAMOND, 3.0 if mark == "fail" else 2.7)
    plot.path(
        [centre + radius * scale * outline for centre in centres], closed=True, facecolor=ink if mark == "fail" else "white",
        edgecolor=ink, linewidth=0.0 if mark == "fail" else 0.8, zorder=4 if mark == "conditional pass" else 5,
    )  # fmt: skip


def add_rings(plot: Plot, centres: Floats) -> None:
    """Draw a ring around each point at which a control rule tripped."""
    plot.path([centre + 3.3 * _OCTAGON for centre in centres], closed=True, edgecolor=INK, linewidth=0.5, zorder=6)
