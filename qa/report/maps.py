"""Further figures of a quantity: the displacement of a lattice, the profile of a slice."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from qa.geometry import Floats
from qa.records import Measurement
from qa.report.numbers import THIN_SPACE, plain_number
from qa.report.page import Shown
from qa.report.style import DATA, FAINT, GREY, HAIRLINE, INK, letters, mm_axes, new_figure, to_svg

__all__ = ["draw_displacements", "draw_profile", "maps_of"]

_SIDE_MM = 78.0
_CIRCLES_MM = (100.0, 150.0, 200.0)
_ASIDE = (math.sin(math.radians(14)), math.cos(math.radians(14)))


def _points(rods: Sequence[Mapping[str, Any]], name: str) -> Floats | None:
    try:
        points = np.array([[float(v) for v in rod[name]] for rod in rods], dtype=np.float64)
    except (KeyError, TypeError, ValueError):
        return None
    return points if points.ndim == 2 and points.shape[1:] == (2,) and np.isfinite(points).all() else None


def _round_factor(factor: float) -> float:
    """Round an exaggeration down to 1, 2 or 5 times a power of ten."""
    power = 10.0 ** math.floor(math.log10(factor))
    return max(step for step in (1.0, 2.0, 5.0) if step * power <= factor * 1.0001) * power


def draw_displacements(true_mm: Floats, measured_mm: Floats) -> tuple[bytes, str]:
    """Draw the displacement of each rod as an arrow from where it is to where it seems to be, much longer than true.

    Parameters
    ----------
    true_mm, measured_mm : (N, 2) float
        In the phantom's x (to the right) and y (downwards).

    Returns
    -------
    tuple
        SVG, and the caption: how much longer, and the longest displacement.
    """
    moved = measured_mm - true_mm
    longest = float(np.hypot(*moved.T).max())
    reach = float(np.abs(true_mm).max()) * 1.12 + 4
    apart = reach / max(1.0, math.sqrt(len(true_mm)) / 2)
    factor = _round_factor(max(1.0, apart / max(longest, 1e-6)))
    figure = new_figure(_SIDE_MM, _SIDE_MM)
    axes = mm_axes(figure, 0, 0, _SIDE_MM, _SIDE_MM)
    axes.set_axis_off()
    axes.set_xlim(-reach, reach)
    axes.set_ylim(reach, -reach)
    turn = np.linspace(0, 2 * math.pi, 91)
    for diameter in _CIRCLES_MM:
        if diameter / 2 < reach:
            axes.plot(diameter / 2 * np.cos(turn), diameter / 2 * np.sin(turn), color=FAINT, linewidth=HAIRLINE, zorder=0)
            axes.annotate(
                f"{diameter:g}", (diameter / 2 * _ASIDE[0], -diameter / 2 * _ASIDE[1]), (1, 1), textcoords="offset points",
                ha="left", va="bottom", color=GREY,
                fontproperties=letters(5.6),
            )  # fmt: skip
    axes.plot(*true_mm.T, linestyle="none", marker=".", markersize=1.6, color=GREY, markeredgewidth=0, zorder=2)
    axes.quiver(
        *true_mm.T, *(factor * moved).T, angles="xy", scale_units="xy", scale=1, color=DATA, width=0.0035, headwidth=3.2,
        headlength=4, headaxislength=3.6, minlength=0.1, zorder=3,
    )  # fmt: skip
    caption = (
        f"Displacement of {len(true_mm)} rods, arrows {plain_number(factor)} times longer than true; the longest is "
        f"{longest:.2f}{THIN_SPACE}mm. Circles: diameter in mm."
    )
    return to_svg(figure), caption


def draw_profile(position_mm: Floats, signal: Floats) -> tuple[bytes, str]:
    """Draw the profile of a slice, with its full width at half maximum.

    Parameters
    ----------
    position_mm, signal : (N,) float
        Position across the slice, rising, and signal.

    Returns
    -------
    tuple
        SVG and caption.
    """
    top = float(signal.max()) or 1.0
    height = 46.0
    figure = new_figure(_SIDE_MM, height)
    axes = mm_axes(figure, 9, 9, _SIDE_MM - 12, height - 11)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("bottom", "left"):
        axes.spines[side].set(color=GREY, linewidth=HAIRLINE)
    axes.set_facecolor("none")
    axes.plot(position_mm, signal / top, color=DATA, linewidth=0.8)
    above = np.flatnonzero(signal >= top / 2)
    left, right = float(position_mm[above[0]]), float(position_mm[above[-1]])
    axes.plot([left, right], [0.5, 0.5], color=INK, linewidth=0.6, marker="|", markersize=5)
    axes.set_ylim(min(0.0, float((signal / top).min())) - 0.03, 1.08)
    axes.tick_params(color=GREY, labelcolor=INK, width=HAIRLINE, length=2.5, pad=2)
    for label in (*axes.get_xticklabels(), *axes.get_yticklabels()):
        label.set_fontproperties(letters())
    axes.set_xlabel("position across the slice, mm", fontproperties=letters(), color=INK, labelpad=1)
    axes.set_yticks([0, 0.5, 1], ["0", "\u00bd", "1"], fontproperties=letters())
    return to_svg(figure), "Slice profile, signal relative to its maximum; the bar spans its half height."


def _profile(details: Mapping[str, Any]) -> tuple[Floats, Floats] | None:
    try:
        position, signal = (np.array(details[name], dtype=np.float64) for name in ("profile_mm", "profile"))
    except (KeyError, TypeError, ValueError):
        return None
    usable = position.ndim == 1 and position.shape == signal.shape and position.size > 3
    return (position, signal) if usable and np.isfinite(position).all() and np.isfinite(signal).all() else None


def maps_of(found: Measurement, name: str) -> tuple[Shown, bytes] | None:
    """Draw what a measurement's details hold for a figure of its own; None where there is nothing.

    `name` is what the page calls the figure.
    """
    rods = found.details.get("rods")
    if isinstance(rods, Sequence) and rods and not isinstance(rods, str):
        true_mm, measured_mm = _points(rods, "true_mm"), _points(rods, "measured_mm")
        if true_mm is not None and measured_mm is not None:
            svg, caption = draw_displacements(true_mm, measured_mm)
            return Shown("Displacement of the lattice", name, caption, _SIDE_MM, _SIDE_MM, (), caption), svg
    profile = _profile(found.details)
    if profile is not None:
        svg, caption = draw_profile(*profile)
        tenth = found.details.get("full_width_tenth_maximum_mm")
        if isinstance(tenth, float):
            caption += f" Full width at a tenth of it: {plain_number(tenth, 3)}{THIN_SPACE}mm."
        return Shown("Slice profile", name, caption, _SIDE_MM, 46.0, (), caption), svg
    return None
