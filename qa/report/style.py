"""The house style of every figure: inks, letters, sizes, and the way a figure becomes SVG.

Few inks, each told apart by lightness as well as hue, so that a grey print and colour-blind eyes lose nothing; meaning is
never carried by an ink alone. Letters are the reports' own, referred to by name in the SVG, so that a figure's words can be
searched in the PDF. The same data give the same bytes: no date, no random identifiers.
"""

import io
import re
import struct
import zlib
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from qa.resources import shipped_folder

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.font_manager import FontProperties

__all__ = [
    "BAND",
    "CAP_HEIGHT",
    "DATA",
    "FAINT",
    "FONT_FAMILY",
    "GREY",
    "HAIRLINE",
    "INK",
    "LIMIT",
    "MISSED",
    "MM",
    "TEXT_SIZE",
    "grey_png",
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
CAP_HEIGHT = 0.714
"""Height of capitals and figures, as a share of the size of letters."""
_MM_PER_INCH = 25.4
_FIRST_GROUP = b'<g id="figure_1">'
_UPRIGHT = re.compile(rb"M (\S+) (\S+) \nL \1 (\S+) \n")
MM = 72 / _MM_PER_INCH
"""Points in a millimetre."""


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
    figure = Figure(figsize=(width_mm / _MM_PER_INCH, height_mm / _MM_PER_INCH), dpi=72)
    figure.patch.set_visible(False)
    return figure


def mm_axes(figure: "Figure", left: float, bottom: float, width: float, height: float, **options: Any) -> "Axes":  # noqa: ANN401 - matplotlib's own options
    """Add axes at a place given in mm from the figure's lower left corner."""
    total_width, total_height = (inches * _MM_PER_INCH for inches in figure.get_size_inches())
    return figure.add_axes((left / total_width, bottom / total_height, width / total_width, height / total_height), **options)


def to_svg(figure: "Figure", under: bytes = b"") -> bytes:
    """Write a figure as SVG, with more SVG laid under all that is drawn; the same figure gives the same bytes."""
    import matplotlib as mpl

    buffer = io.BytesIO()
    with mpl.rc_context({"svg.fonttype": "none", "svg.hashsalt": "evenfield", "path.simplify": False}):
        figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    drawn = _UPRIGHT.sub(rb"M \1 \2V \3\n", buffer.getvalue())
    return drawn.replace(_FIRST_GROUP, _FIRST_GROUP + under, 1)


def grey_png(shown: NDArray[np.uint8]) -> bytes:
    """Write (R, C) grey values as PNG (ISO/IEC 15948: eight bits of grey, no filter)."""
    rows, columns = shown.shape
    lines = np.zeros((rows, columns + 1), dtype=np.uint8)
    lines[:, 1:] = shown

    def chunk(kind: bytes, content: bytes) -> bytes:
        return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))

    head = struct.pack(">IIBBBBB", columns, rows, 8, 0, 0, 0, 0)
    return (
        b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + chunk(b"IDAT", zlib.compress(lines.tobytes(), 6)) + chunk(b"IEND", b"")
    )
