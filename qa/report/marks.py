"""The marks of a verdict, one shape each, drawn in numbers as one path."""

import math
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from qa.geometry import Floats
from qa.report.style import DATA, INK, LIMIT

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["MARKS", "Mark", "add_marks", "add_rings", "add_segments"]

Mark = Literal["pass", "conditional pass", "conditional fail", "fail", "no limit"]
MARKS: tuple[Mark, ...] = ("pass", "conditional pass", "conditional fail", "fail", "no limit")

_DIAMOND = np.array([(0, 1), (1, 0), (0, -1), (-1, 0), (0, 1)], dtype=np.float64)
_OCTAGON = np.array([(math.cos(turn), math.sin(turn)) for turn in np.linspace(0, 2 * math.pi, 17)])


def add_marks(axes: "Axes", x: Floats, y: Floats, mark: Mark, scale: float) -> None:
    """Draw all marks of a kind as one path: a page of many points stays light.

    The two common marks are ends of lines without length, a dot by a round cap and a square by a square one; the rarer ones
    are outlines.
    """
    from matplotlib.transforms import IdentityTransform

    centres = axes.transData.transform(np.column_stack([x, y]))
    ink = LIMIT if mark in {"fail", "conditional fail"} else DATA
    if mark in {"pass", "no limit"}:
        add_segments(
            axes, centres, centres + np.array([0.01, 0.0]), transform=IdentityTransform(), edgecolor=ink, zorder=4,
            linewidth=scale * (2.7 if mark == "pass" else 2.2), capstyle="round" if mark == "pass" else "projecting",
        )  # fmt: skip
        return
    outline, radius = (_OCTAGON, 1.75) if mark == "conditional pass" else (_DIAMOND, 3.0 if mark == "fail" else 2.7)
    _add_outlines(
        axes, centres, radius * scale * outline, facecolor=ink if mark == "fail" else "white", edgecolor=ink,
        linewidth=0.0 if mark == "fail" else 0.8, zorder=4 if mark == "conditional pass" else 5,
    )  # fmt: skip


def add_rings(axes: "Axes", x: Floats, y: Floats) -> None:
    """Draw a ring around each point at which a control rule tripped."""
    centres = axes.transData.transform(np.column_stack([x, y]))
    _add_outlines(axes, centres, 3.3 * _OCTAGON, facecolor="none", edgecolor=INK, linewidth=0.5, zorder=6)


def _add_outlines(axes: "Axes", centres: Floats, outline: Floats, **options: Any) -> None:  # noqa: ANN401 - matplotlib's own
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as MarkPath
    from matplotlib.transforms import IdentityTransform

    vertices = (centres[:, None] + outline).reshape(-1, 2)
    codes = np.tile([MarkPath.MOVETO, *[MarkPath.LINETO] * (len(outline) - 2), MarkPath.CLOSEPOLY], len(centres))
    axes.add_artist(PathPatch(MarkPath(vertices, codes), transform=IdentityTransform(), **options))


def add_segments(axes: "Axes", starts: Floats, ends: Floats, **options: Any) -> None:  # noqa: ANN401 - matplotlib's own
    """Draw separate lines as one path, in data coordinates."""
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as MarkPath

    vertices = np.stack([starts, ends], axis=1).reshape(-1, 2)
    codes = np.tile([MarkPath.MOVETO, MarkPath.LINETO], len(starts))
    # An artist, not a patch: the axes' limits are set already and need no look at every point.
    axes.add_artist(PathPatch(MarkPath(vertices, codes), fill=False, **options))
