"""Pixels: what the header promises is checked first, then decoded once, cleaned of unused bits and rescaled."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.dicom.elements import Elements, File
from qa.dicom.refusal import RefusalError

__all__ = ["Layout", "Rescale", "Stored", "decode", "layout_of", "rescale_of", "rescaled"]

_PIXEL_DATA, _FLOAT_PIXELS, _DOUBLE_PIXELS = 0x7FE00010, 0x7FE00008, 0x7FE00009
_NATIVE = frozenset(
    {"1.2.840.10008.1.2", "1.2.840.10008.1.2.1", "1.2.840.10008.1.2.1.99", "1.2.840.10008.1.2.2", "1.2.840.113619.5.2"}
)
_RUN_LENGTH = "1.2.840.10008.1.2.5"
_BIG_ENDIAN = "1.2.840.10008.1.2.2"
_COLOURS = ("RGB", "YBR", "PALETTE", "HSV", "ARGB", "CMYK", "XYB", "ICT", "RCT")
_MOST_ON_A_SIDE = 8192
_MOST_PIXELS = 2**28
_FLOAT32_MAX = float(np.finfo(np.float32).max)

Stored = NDArray[Any]
"""Stored values: whole or floating-point numbers, (F, R, C)."""


@dataclass(frozen=True)
class Layout:
    """How pixels are stored (PS3.3, C.7.6.3), checked so that nothing absurd is allocated.

    `allocated` to `high_bit` are in bits; `is_float` tells of (Double) Float Pixel Data, `is_inverted` of MONOCHROME1;
    `padding` is the inclusive range of stored values that stand for no pixel, None where there is none.
    """

    frames: int
    rows: int
    columns: int
    allocated: int
    stored: int
    high_bit: int
    is_signed: bool
    is_float: bool
    is_inverted: bool
    padding: tuple[float, float] | None

    @property
    def size(self) -> int:
        """Number of pixels of all frames."""
        return self.frames * self.rows * self.columns


@dataclass(frozen=True)
class Rescale:
    """Stored value to output value: slope times the stored value plus intercept (PS3.3, C.11.1.1.2)."""

    slope: float = 1.0
    intercept: float = 0.0


def layout_of(get: Elements) -> Layout:
    """Read how pixels are stored.

    Raises
    ------
    RefusalError
        Something is missing, cannot be, is too large, or the image is in colour.
    """
    frames, rows, columns = _size(get)
    is_inverted = _is_inverted(get)
    present = [tag for tag in (_PIXEL_DATA, _FLOAT_PIXELS, _DOUBLE_PIXELS) if get.raw(tag) is not None]
    if not present:
        raise RefusalError("it holds no pixel data; the file may be cut short")
    if len(present) > 1:
        raise RefusalError("it holds pixel data of more than one kind")
    if present[0] != _PIXEL_DATA:
        bits = 32 if present[0] == _FLOAT_PIXELS else 64
        return Layout(frames, rows, columns, bits, bits, bits - 1, True, True, False, _padding(get))
    allocated, stored, high_bit, is_signed = _bits(get)
    return Layout(frames, rows, columns, allocated, stored, high_bit, is_signed, False, is_inverted, _padding(get))


def _size(get: Elements) -> tuple[int, int, int]:
    rows, columns = get.whole(0x00280010) or 0, get.whole(0x00280011) or 0
    if rows < 1 or columns < 1:
        raise RefusalError("Rows or Columns is missing or zero: the file holds no image")
    frames = get.whole(0x00280008) if 0x00280008 in get else 1
    if frames is None or frames < 1:
        raise RefusalError("Number of Frames is not a count: the file holds no image")
    if rows > _MOST_ON_A_SIDE or columns > _MOST_ON_A_SIDE or rows * columns * frames > _MOST_PIXELS:
        raise RefusalError(f"{frames} frames of {rows} x {columns} pixels are more than any phantom series holds")
    return frames, rows, columns


def _is_inverted(get: Elements) -> bool:
    photometric = get.code(0x00280004)
    if (get.whole(0x00280002) or 1) != 1 or photometric.startswith(_COLOURS):
        raise RefusalError("it is a colour image: only grey images are measured")
    if photometric not in {"MONOCHROME2", "MONOCHROME1", ""}:
        raise RefusalError("Photometric Interpretation is none that a grey image has")
    return photometric == "MONOCHROME1"


def _bits(get: Elements) -> tuple[int, int, int, bool]:
    allocated, stored, high = get.whole(0x00280100), get.whole(0x00280101), get.whole(0x00280102)
    if allocated not in {8, 16, 32}:
        raise RefusalError("Bits Allocated is not 8, 16 or 32")
    stored = allocated if stored is None else stored
    high = stored - 1 if high is None else high
    if not 1 <= stored <= allocated or not stored - 1 <= high < allocated:
        raise RefusalError("Bits Stored or High Bit does not fit Bits Allocated")
    signed = get.whole(0x00280103)
    if signed not in {0, 1, None}:
        raise RefusalError("Pixel Representation is neither 0 (unsigned) nor 1 (signed)")
    return allocated, stored, high, signed == 1


def rescale_of(get: Elements) -> Rescale:
    """Read the rescale of one image or frame; where the header gives none, stored values stand as they are.

    Real World Value Mapping and manufacturers' private scales (Philips' scale slope) are left alone.

    Raises
    ------
    RefusalError
        Slope or intercept is given and is no number, or the slope is zero.
    """
    slope = get.number(0x00281053) if 0x00281053 in get else 1.0
    intercept = get.number(0x00281052) if 0x00281052 in get else 0.0
    if slope is None or intercept is None or slope == 0:
        raise RefusalError("Rescale Slope or Rescale Intercept is not a number that values can be scaled with")
    return Rescale(slope, intercept)


def decode(file: File, layout: Layout) -> Stored:
    """Decode stored values, (F, R, C), unused bits taken out and the sign carried up.

    Raises
    ------
    RefusalError
        Pixel data end early, or cannot be decoded.
    """
    if file.transfer_syntax in _NATIVE:
        stored = _native(file, layout)
        return stored if layout.is_float else _clean_bits(stored, layout, layout.high_bit)
    if layout.is_float:
        raise RefusalError("its floating-point pixel data are compressed, which the standard does not allow")
    # A codestream holds the value itself, whatever bit it had in the uncompressed image; run lengths hold the bytes unchanged.
    high_bit = layout.high_bit if file.transfer_syntax == _RUN_LENGTH else layout.stored - 1
    return _clean_bits(_compressed(file, layout), layout, high_bit)


def rescaled(stored: Stored, layout: Layout, rescale: Rescale) -> NDArray[np.float32]:
    """Turn stored values, of any shape, into output values.

    MONOCHROME1, in which the lowest value is shown brightest, is turned over within the range of stored values first, as a
    viewer shows it: lowest + highest - value. Pixels that are padding read as zero: they hold no signal.

    Raises
    ------
    RefusalError
        A value is not finite.
    """
    is_plain = rescale == Rescale() and not layout.is_inverted
    if is_plain and not layout.is_float:
        values = stored.astype(np.float32)
    else:
        exact = stored.astype(np.float64)
        if layout.is_inverted:
            exact = (-1.0 if layout.is_signed else 2.0**layout.stored - 1.0) - exact
        with np.errstate(all="ignore"):
            exact = exact * rescale.slope + rescale.intercept
            is_out = not bool(np.all(np.abs(exact) <= _FLOAT32_MAX))
        if is_out:
            raise RefusalError("it holds pixels that are not finite numbers")
        values = exact.astype(np.float32)
    if layout.padding is not None:
        values[(stored >= layout.padding[0]) & (stored <= layout.padding[1])] = 0.0
    return values


def _native(file: File, layout: Layout) -> Stored:
    tag = _PIXEL_DATA if not layout.is_float else _FLOAT_PIXELS if layout.allocated == 32 else _DOUBLE_PIXELS
    content = file.elements.bytes_of(tag)
    expected = layout.size * layout.allocated // 8
    if len(content) < expected:
        raise RefusalError(f"the pixel data are cut short: {len(content)} of {expected} bytes")
    is_big = file.transfer_syntax == _BIG_ENDIAN
    if is_big and layout.allocated == 8 and file.elements.raw(tag).VR == "OW":
        # PS3.5, 8.1.2: 8-bit pixels in OW are two to a word, and the words are big endian.
        content = np.frombuffer(content[: len(content) // 2 * 2], dtype=">u2").astype("<u2").tobytes()
    kind = "f" if layout.is_float else "i" if layout.is_signed else "u"
    values = np.frombuffer(content, dtype=f"{'>' if is_big else '<'}{kind}{layout.allocated // 8}", count=layout.size)
    return values.reshape(layout.frames, layout.rows, layout.columns)


def _compressed(file: File, layout: Layout) -> Stored:
    from pydicom.pixels.decoders.base import get_decoder
    from pydicom.uid import UID

    try:
        decoder = get_decoder(UID(file.transfer_syntax))
    except Exception:  # noqa: BLE001 (pydicom raises whatever an unknown or malformed UID leads it to)
        raise RefusalError("its transfer syntax is not one that can be decoded") from None
    try:
        values, _ = decoder.as_array(file.dataset, raw=True, validate=True)
    except Exception:  # noqa: BLE001 (each decoder plug-in raises what it likes)
        raise RefusalError(
            f"its pixel data cannot be decoded ({UID(file.transfer_syntax).name}): damaged or cut short"
        ) from None
    if values.size != layout.size:
        raise RefusalError("its pixel data do not hold as many pixels as the header says")
    decoded: Stored = values.reshape(layout.frames, layout.rows, layout.columns)
    return decoded


def _clean_bits(values: Stored, layout: Layout, high_bit: int) -> Stored:
    """Take out the bits that hold no pixel and carry the sign up (PS3.5, 8.1.1)."""
    size = values.dtype.itemsize
    native = values.astype(values.dtype.newbyteorder("="), copy=False).view(f"{'i' if layout.is_signed else 'u'}{size}")
    if layout.stored >= size * 8:
        return native
    up = size * 8 - 1 - high_bit
    shifted = native << np.asarray(up, dtype=native.dtype) if up else native
    cleaned: Stored = shifted >> np.asarray(size * 8 - layout.stored, dtype=native.dtype)
    return cleaned


def _padding(get: Elements) -> tuple[float, float] | None:
    value = get.number(0x00280120)
    if value is None:
        return None
    limit = get.number(0x00280121)
    return (value, value) if limit is None else (min(value, limit), max(value, limit))
