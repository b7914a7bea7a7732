"""A bare plotting area on a figure: values become places on paper, and lines of one kind become one path.

Reports hold dozens of charts over years of weeks. An axes object with its ticks costs more than all the points drawn in it,
and every path is read again when the page is laid out; so a chart here is few, plain artists in points (1/72 inch).
"""

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from qa.geometry import Floats
from qa.report.style import INK, MM, letters

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["Plot"]

_DECIMALS = 2
"""Of places in points: four micrometres, and half the text of a path."""


class Plot:
    """A rectangle of a figure with a range of values along x and y.

    Parameters
    ----------
    figure : Figure
        What it is drawn on.
    box_mm : tuple of float
        Left, bottom, width and height on paper, from the figure's lower left corner.
    x_range, y_range : tuple of float
        Values at the left and right, and at the bottom and top.
    """

    def __init__(
        self,
        figure: "Figure",
        box_mm: tuple[float, float, float, float],
        x_range: tuple[float, float],
        y_range: tuple[float, float],
    ) -> None:
        self.figure = figure
        self.left, self.bottom, self.width, self.height = (MM * v for v in box_mm)
        self.x_range, self.y_range = x_range, y_range

    def x(self, values: ArrayLike) -> Floats:
        """Places along x, in points."""
        low, high = self.x_range
        return np.asarray(self.left + self.width * (np.asarray(values, dtype=np.float64) - low) / (high - low))

    def y(self, values: ArrayLike) -> Floats:
        """Places along y, in points."""
        low, high = self.y_range
        return np.asarray(self.bottom + self.height * (np.asarray(values, dtype=np.float64) - low) / (high - low))

    def at(self, x: ArrayLike, y: ArrayLike) -> Floats:
        """Places of points, (N, 2)."""
        return np.stack(np.broadcast_arrays(self.x(x), self.y(y)), axis=-1).reshape(-1, 2)

    def path(self, pieces: Sequence[Floats], *, closed: bool = False, **options: Any) -> None:  # noqa: ANN401 - matplotlib's
        """Draw polylines or outlines, each (N, 2) in points, as one path."""
        from matplotlib.patches import PathPatch
        from matplotlib.path import Path
        from matplotlib.transforms import IdentityTransform

        pieces = [piece for piece in pieces if len(piece) > 1]
        if not pieces:
            return
        codes = np.concatenate([_codes(len(piece), closed) for piece in pieces])
        options.setdefault("facecolor", "none")
        options.setdefault("edgecolor", "none")
        self.figure.add_artist(
            PathPatch(
                Path(np.round(np.concatenate(pieces), _DECIMALS), codes),
                transform=IdentityTransform(),
                clip_on=False,
                **options,
            )
        )

    def segments(self, starts: Floats, ends: Floats, **options: Any) -> None:  # noqa: ANN401 - matplotlib's
        """Draw separate straight lines, (N, 2) to (N, 2) in points, as one path."""
        from matplotlib.patches import PathPatch
        from matplotlib.path import Path
        from matplotlib.transforms import IdentityTransform

        vertices = np.round(np.stack([starts, ends], axis=1).reshape(-1, 2), _DECIMALS)
        codes = np.tile([Path.MOVETO, Path.LINETO], len(starts))
        path = Path(vertices, codes)
        self.figure.add_artist(PathPatch(path, fill=False, transform=IdentityTransform(), clip_on=False, **options))

    def boxes(self, spans: Sequence[tuple[float, float, float, float]], **options: Any) -> None:  # noqa: ANN401 - matplotlib's
        """Fill rectangles given by values (x from, x to, y from, y to), cut at the plot's edges."""
        pieces = []
        for x_from, x_to, y_from, y_to in spans:
            x0, x1 = np.clip([x_from, x_to], *self.x_range)
            y0, y1 = np.clip([y_from, y_to], *self.y_range)
            if x1 > x0 and y1 > y0:
                pieces.append(self.at([x0, x1, x1, x0, x0], [y0, y0, y1, y1, y0]))
        self.path(pieces, closed=True, **options)

    def text(self, x: float, y: float, words: str, size: float, **options: Any) -> None:  # noqa: ANN401 - matplotlib's
        """Write words at a place given in points."""
        from matplotlib.text import Text
        from matplotlib.transforms import IdentityTransform

        weight = options.pop("weight", 400)
        options.setdefault("color", INK)
        artist = Text(
            x, y, words, fontproperties=letters(size, weight), transform=IdentityTransform(), parse_math=False, **options
        )
        self.figure.add_artist(artist)


def _codes(count: int, closed: bool) -> "np.ndarray[Any, np.dtype[np.uint8]]":
    from matplotlib.path import Path

    codes = np.full(count, Path.LINETO, dtype=np.uint8)
    codes[0] = Path.MOVETO
    if closed:
        codes[-1] = Path.CLOSEPOLY
    return codes
