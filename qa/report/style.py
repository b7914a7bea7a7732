"""The house style of every figure: inks, letters, sizes, and the way a figure becomes SVG.

Few inks, each told apart by lightness as well as hue, so that a grey print and colour-blind eyes lose nothing; meaning is
never carried by an ink alone. Letters are the reports' own, referred to by name in the SVG, so that a figure's words can be
searched in the PDF. The same data give the same bytes: no date, no random identifiers.
"""

import io
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from qa.resources import shipped_folder

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.font_manager import FontProperties

__all__ = [
    "BAND",
    "DATA",
    "FAINT",
    "FONT_FAMILY",
    "GREY",
    "HAIRLINE",
    "INK",
    "LIMIT",
    "MISSED",
    "TEXT_SIZE",
    "letters",
    "mm_axes",
    "new_figure",
    "to_svg",
]

INK = "#15191e"
GREY = "#5b6470"
FAINT = "#c3c9d1"
MISSED = "#e6e9ed"
BAND = "#dbe7f0"
DATA = "#17466b"
LIMIT = "#a3231b"
TEXT_SIZE = 7.0
HAIRLINE = 0.5
FONT_FAMILY = "Open Sans"
_MM_PER_INCH = 25.4


@lru_cache(maxsize=8)
def letters(size: float = TEXT_SIZE, weight: int = 400) -> "FontProperties":
    """Return the reports' font, measured from the file that travels with the program."""
    from matplotlib.font_manager import FontProperties

    file = "OpenSans-Semibold.ttf" if weight >= 600 else "OpenSans-Regular.ttf"
    return FontProperties(
        family=FONT_FAMILY, size=size, weight=weight, fname=str(shipped_folder("templates") / "fonts" / file)
    )


def new_figure(width_mm: float, height_mm: float) -> "Figure":
    """Make an empty figure of a size, drawn without any window system or global state."""
    from matplotlib.figure import Figure

    # 72 per inch is what SVG is written with: places worked out in figure units beforehand stay right.
    return Figure(figsize=(width_mm / _MM_PER_INCH, height_mm / _MM_PER_INCH), dpi=72, facecolor="none")


def mm_axes(figure: "Figure", left: float, bottom: float, width: float, height: float, **options: Any) -> "Axes":  # noqa: ANN401 - matplotlib's own options
    """Add axes at a place given in mm from the figure's lower left corner."""
    total_width, total_height = (inches * _MM_PER_INCH for inches in figure.get_size_inches())
    return figure.add_axes((left / total_width, bottom / total_height, width / total_width, height / total_height), **options)


def to_svg(figure: "Figure") -> bytes:
    """Write a figure as SVG; the same figure gives the same bytes."""
    import matplotlib as mpl

    buffer = io.BytesIO()
    with mpl.rc_context({"svg.fonttype": "none", "svg.hashsalt": "evenfield", "path.simplify": False}):
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    return buffer.getvalue()
