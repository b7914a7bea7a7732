"""One slice seen from the phantom: where each pixel lies in the phantom's frame, and where a place of it appears."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from qa.geometry import Floats, Plane
from qa.phantoms import Phantom
from qa.records import Acquisition, Pose

__all__ = ["SliceView", "Window", "slice_of_section"]


@dataclass(frozen=True)
class Window:
    """A rectangle of pixels: `rows` and `columns` cut it from an image, X and Y are its places in phantom mm."""

    rows: slice
    columns: slice
    X: Floats
    Y: Floats


@dataclass(frozen=True, eq=False)
class SliceView:
    """A plane in the phantom's frame.

    The phantom's coordinates of in-plane (x, y) are `origin + lay @ (x, y)`, with `lay` of shape (3, 2).
    """

    plane: Plane
    origin: Floats
    lay: Floats

    @classmethod
    def of(cls, plane: Plane, pose: Pose) -> "SliceView":
        """Look at a plane from where the phantom lies."""
        return cls(
            plane,
            pose.to_phantom(np.asarray(plane.position_patient, dtype=np.float64)),
            pose.orientation.T @ plane.axes[:, :2],
        )

    @cached_property
    def _back(self) -> Floats:
        back: Floats = np.linalg.inv(self.lay[:2]).astype(np.float64)
        return back

    @cached_property
    def normal(self) -> Floats:
        """Slice normal in the phantom's frame."""
        return np.cross(self.lay[:, 0], self.lay[:, 1])

    @cached_property
    def lean(self) -> Floats:
        """Rise of the plane along the phantom's z for each mm along its x and y."""
        rise: Floats = self.lay[2] @ self._back
        return rise

    def to_image(self, X: Floats, Y: Floats) -> Floats:
        """In-plane mm (..., 2) at which lines parallel to the phantom's axis through (X, Y) cross the slice."""
        places: Floats = np.stack([X - self.origin[0], Y - self.origin[1]], axis=-1) @ self._back.T
        return places

    def to_phantom(self, places_mm: Floats) -> Floats:
        """Phantom x and y (..., 2) of in-plane mm (..., 2)."""
        return self.origin[:2] + places_mm @ self.lay[:2].T

    def height(self, X: Floats | float, Y: Floats | float) -> Floats:
        """Phantom z of the plane over (X, Y)."""
        start = self.origin[2] - self.lean @ self.origin[:2]
        z: Floats = np.asarray(start + self.lean[0] * np.asarray(X) + self.lean[1] * np.asarray(Y))
        return z

    def in_plane(self, X: float, Y: float) -> Floats:
        """In-plane mm (x, y) of a step in the slice that is (X, Y) in the phantom's frame."""
        step: Floats = self._back @ np.array([X, Y])
        return step

    def pitch_mm(self, X: float, Y: float) -> float:
        """Pixel spacing that limits resolution along the phantom direction (X, Y): the coarser of the axes' parts of it."""
        along = self.in_plane(X, Y) / np.hypot(X, Y)
        return float(max(abs(along[0]) * self.plane.pixel_mm[1], abs(along[1]) * self.plane.pixel_mm[0]))

    def window(self, x_mm: tuple[float, float], y_mm: tuple[float, float]) -> Window:
        """Pixels that cover a rectangle of the phantom's frame, those inside the image."""
        corners = self.to_image(np.array([x_mm[0], x_mm[0], x_mm[1], x_mm[1]]), np.array([*y_mm, *y_mm]))
        columns, rows = (
            slice(max(0, int(np.floor(p.min() / mm))), max(0, min(n, int(np.ceil(p.max() / mm)) + 1)))
            for p, mm, n in zip(corners.T, self.plane.pixel_mm[::-1], self.plane.shape[::-1], strict=True)
        )
        x = np.arange(columns.start, columns.stop) * self.plane.pixel_mm[1]
        y = np.arange(rows.start, rows.stop)[:, None] * self.plane.pixel_mm[0]
        X, Y = (self.origin[k] + self.lay[k, 0] * x + self.lay[k, 1] * y for k in (0, 1))
        return Window(rows, columns, X, Y)


def slice_of_section(acquisition: Acquisition, pose: Pose, phantom: Phantom, z_mm: float) -> int | str:
    """Index of the slice that is meant to show a section, or a plain reason why there is none.

    In a stack of as many slices as the definition expects it is the one that was placed there; else the nearest. It may be off
    by no more than three quarters of the distance between slices.
    """
    normal = acquisition.planes[0].normal
    along = float(normal @ pose.orientation[:, 2])
    if abs(along) < 0.5:
        return "the slices lie along the phantom's axis, not across it"
    heights = np.array([p.position_along_normal for p in acquisition.planes]) - normal @ pose.centre_patient
    off = heights / along - z_mm
    index = int(np.argmin(np.abs(off)))
    stack = phantom.slices
    if stack is not None and len(off) == stack.count:
        placed = round((z_mm - stack.first_z_mm) / stack.spacing_mm)
        if 0 <= placed < stack.count:
            index = placed if along > 0 else stack.count - 1 - placed
    spacing = float(np.min(np.diff(heights))) if len(heights) > 1 else stack.spacing_mm if stack is not None else 2.0
    if abs(off[index]) > 0.75 * max(spacing, 2.0):
        return f"no slice shows the section at z = {z_mm:g} mm: the nearest one lies {np.abs(off).min():.0f} mm from it"
    return index
