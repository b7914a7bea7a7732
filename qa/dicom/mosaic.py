"""Mosaics: the slices of one volume tiled into one image, as Siemens scanners store echo-planar series.

What the file says of position and size is of the whole mosaic, as if it were one large slice about the same centre. Number
of tiles, and the direction in which slices follow each other, stand in private elements (from memory of the manufacturer's
conformance statements): (0019,xx0A) of "SIEMENS MR HEADER", or the text fields of (0029,xx10) of "SIEMENS CSA HEADER".
"""

import math
import struct
from dataclasses import dataclass, replace

import numpy as np

from qa.dicom.elements import Elements
from qa.dicom.header import image_type
from qa.dicom.pixels import Stored
from qa.dicom.refusal import RefusalError
from qa.geometry import Plane

__all__ = ["Mosaic", "cut", "text_fields", "tiles_of"]

_HEADER, _TEXT_HEADER = "SIEMENS MR HEADER", "SIEMENS CSA HEADER"
_MOST_FIELDS = 512
_MOST_TILES = 1024
_SMALLEST_STEP_MM, _LARGEST_STEP_MM = 0.1, 1000.0


@dataclass(frozen=True)
class Mosaic:
    """How a mosaic is cut: the grid's side in tiles, and the plane of each tile in the order they are tiled."""

    side: int
    planes: tuple[Plane, ...]
    remarks: tuple[str, ...] = ()


def tiles_of(get: Elements, whole: Plane) -> Mosaic | None:
    """Return how the image is to be cut, None where it is no mosaic.

    Raises
    ------
    RefusalError
        It is a mosaic, but does not say what is needed to cut it and to place its slices.
    """
    fields = text_fields(get.bytes_of(get.private(0x0029, _TEXT_HEADER, 0x10)))
    count = get.whole(get.private(0x0019, _HEADER, 0x0A)) or _whole(fields.get("NumberOfImagesInMosaic", ()))
    if "MOSAIC" not in image_type(get) and (count or 0) < 2:
        return None
    if not count or not 0 < count <= _MOST_TILES:
        raise RefusalError("it is a mosaic that does not say how many slices it holds")
    side = math.ceil(math.sqrt(count))
    if whole.shape[0] % side or whole.shape[1] % side:
        raise RefusalError(f"it is a mosaic of {count} slices whose size is not a multiple of {side} tiles")
    shape = whole.shape[0] // side, whole.shape[1] // side
    step = get.number(0x00180088) or 0.0
    if count > 1 and not _SMALLEST_STEP_MM <= step <= _LARGEST_STEP_MM:
        raise RefusalError("it is a mosaic without a usable Spacing Between Slices: where its slices lie is not known")
    direction, remarks = _direction(fields, whole)
    # The whole image's corner lies farther out than a tile's by half the difference of their sizes.
    x_mm = (whole.shape[1] - shape[1]) / 2 * whole.pixel_mm[1]
    y_mm = (whole.shape[0] - shape[0]) / 2 * whole.pixel_mm[0]
    heights = direction * (step if count > 1 else 0.0) * np.arange(count)
    corners = whole.to_patient(x_mm, y_mm, heights).tolist()
    planes = tuple(replace(whole, position_patient=tuple(corner), shape=shape) for corner in corners)
    return Mosaic(side, planes, remarks)


def cut(image: Stored, mosaic: Mosaic) -> Stored:
    """Cut a mosaic, (R, C), into its slices, (F, R / side, C / side); tiles run along rows first, unused ones come last."""
    rows, columns = mosaic.planes[0].shape
    tiles = image.reshape(mosaic.side, rows, mosaic.side, columns).swapaxes(1, 2).reshape(-1, rows, columns)
    return tiles[: len(mosaic.planes)]


def text_fields(content: bytes) -> dict[str, tuple[str, ...]]:
    """Read the named text fields of a Siemens text header ("SV10"); what cannot be read is left out.

    After 16 bytes come fields: a name of 64 bytes, 20 bytes with the number of items at the fourth integer, then items, each
    16 bytes with its length at the second integer and the text padded to 4 bytes.
    """
    fields: dict[str, tuple[str, ...]] = {}
    if not content.startswith(b"SV10"):
        return fields
    try:
        (count,) = struct.unpack_from("<I", content, 8)
        place = 16
        for _ in range(min(count, _MOST_FIELDS)):
            name, items = struct.unpack_from("<64s12xi4x", content, place)
            place += 84
            values = []
            for _ in range(min(items, _MOST_FIELDS)):
                (length,) = struct.unpack_from("<4xi8x", content, place)
                place += 16
                if not 0 <= length <= len(content) - place:
                    return fields
                values.append(_until_zero(content[place : place + length]))
                place += (length + 3) // 4 * 4
            fields[_until_zero(name)] = tuple(value for value in values if value)
    except struct.error:
        pass
    return fields


def _direction(fields: dict[str, tuple[str, ...]], whole: Plane) -> tuple[float, tuple[str, ...]]:
    """Tell whether slices follow each other along the normal (1) or against it (-1)."""
    try:
        along = float(np.asarray([float(value) for value in fields.get("SliceNormalVector", ())]) @ whole.normal)
    except ValueError:
        along = math.nan
    if not math.isfinite(along) or along == 0:
        return 1.0, ("the mosaic does not say in which direction its slices run: taken along the image's normal",)
    return math.copysign(1.0, along), ()


def _until_zero(raw: bytes) -> str:
    return raw.split(b"\0", 1)[0].decode("latin-1").strip()


def _whole(values: tuple[str, ...]) -> int | None:
    return int(values[0]) if values and values[0].isdecimal() and values[0].isascii() else None
