"""Planes, millimetres and pixels.

Conventions, the same in every room
-----------------------------------
- An image is indexed ``[row, column]``; a stack ``[slice, row, column]``. An integer index is the *centre* of a pixel:
  a 250 x 250 image reaches from -0.5 to 249.5, and its middle is 124.5.
- *Patient* millimetres are DICOM's patient coordinates (left, posterior, head: PS3.3, C.7.6.2.1.1). Names end in
  ``_patient``.
- *In-plane* millimetres ``(x, y)`` belong to one image: x along the row direction (increasing column index), y along the
  column direction (increasing row index), zero at the centre of pixel [0, 0]. So column = x / column spacing and
  row = y / row spacing. Anisotropic pixels need no special case there.
- *Phantom* millimetres are the phantom's own frame: origin at the body's centre, z along its axis.
- ``pixel_mm`` is (row spacing, column spacing), DICOM's order: the first is the step between rows, along y.
- Angles in an image are from the row direction towards increasing row index, so 45 degrees runs towards increasing column
  and row index alike.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Floats", "Plane"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Plane:
    """Where one image lies in space.

    Attributes
    ----------
    position_patient : tuple of float
        Centre of pixel [0, 0], mm (DICOM Image Position (Patient)).
    row_direction : tuple of float
        Unit vector of increasing column index (the first three values of Image Orientation (Patient)).
    column_direction : tuple of float
        Unit vector of increasing row index (the last three).
    pixel_mm : tuple of float
        Row spacing and column spacing.
    shape : tuple of int
        Rows and columns.
    """

    position_patient: tuple[float, float, float]
    row_direction: tuple[float, float, float]
    column_direction: tuple[float, float, float]
    pixel_mm: tuple[float, float]
    shape: tuple[int, int]

    @cached_property
    def axes(self) -> Floats:
        """Row direction, column direction and normal as the columns of a (3, 3) matrix."""
        row, column = np.asarray(self.row_direction), np.asarray(self.column_direction)
        return np.stack([row, column, np.cross(row, column)], axis=1)

    @property
    def normal(self) -> Floats:
        """Unit vector along which slices are ordered: row direction cross column direction."""
        return self.axes[:, 2]

    @property
    def position_along_normal(self) -> float:
        """Signed distance of the plane from the origin of patient coordinates, mm."""
        return float(self.normal @ np.asarray(self.position_patient))

    @property
    def size_mm(self) -> tuple[float, float]:
        """Field of view along x and y: columns and rows times their spacing."""
        return self.shape[1] * self.pixel_mm[1], self.shape[0] * self.pixel_mm[0]

    @property
    def middle_mm(self) -> tuple[float, float]:
        """In-plane (x, y) of the middle of the image."""
        return (self.shape[1] - 1) / 2 * self.pixel_mm[1], (self.shape[0] - 1) / 2 * self.pixel_mm[0]

    def to_patient(self, x_mm: ArrayLike, y_mm: ArrayLike, height_mm: ArrayLike = 0.0) -> Floats:
        """Map in-plane mm (and a height above the plane along its normal) to patient mm, shape (..., 3)."""
        local = np.stack(np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in (x_mm, y_mm, height_mm))), axis=-1)
        mapped: Floats = np.asarray(self.position_patient) + local @ self.axes.T
        return mapped

    def from_patient(self, points: ArrayLike) -> Floats:
        """Map patient mm, shape (..., 3), to in-plane x and y and the height above the plane, shape (..., 3)."""
        local: Floats = (np.asarray(points, dtype=np.float64) - np.asarray(self.position_patient)) @ self.axes
        return local

    def grid_mm(self) -> tuple[Floats, Floats]:
        """In-plane x, shape (1, C), and y, shape (R, 1), of the pixel centres, ready to broadcast."""
        rows, columns = (np.arange(count, dtype=np.float64) for count in self.shape)
        return (columns * self.pixel_mm[1])[None, :], (rows * self.pixel_mm[0])[:, None]
