"""Pixels: what the header promises is checked first, then decoded once, cleaned of unused bits and rescaled."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qa.dicom.codestream import size_of
from qa.dicom.elements import Elements, File
from qa.dicom.isolated import IsolatedDecoder
from qa.dicom.refusal import RefusalError
from qa.errors import EvenfieldError

__all__ = ["Layout", "Scaling", "Stored", "decode", "layout_of", "scale_into", "scaling_of"]

_PIXEL_DATA, _FLOAT_PIXELS, _DOUBLE_PIXELS = 0x7FE00010, 0x7FE00008, 0x7FE00009
_NATIVE = frozenset(
    {"1.2.840.10008.1.2", "1.2.840.10008.1.2.1", "1.2.840.10008.1.2.1.99", "1.2.840.10008.1.2.2", "1.2.840.113619.5.2"}
)
_RUN_LENGTH = "1.2.840.10008.1.2.5"
_BIG_ENDIAN = "1.2.840.10008.1.2.2"
_JPEG_LS = frozenset({"1.2.840.10008.1.2.4.80", "1.2.840.10008.1.2.4.81"})
_COLOURS = ("RGB", "YBR", "PALETTE", "HSV", "ARGB", "CMYK", "XYB", "ICT", "RCT")
_MOST_ON_A_SIDE = 8192
_MOST_PIXELS = 2**28
_LARGEST_FLOAT = 1e9
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
class Scaling:
    """How stored values of one image become output values.

    Output is slope times the stored value plus intercept (PS3.3, C.11.1.1.2). `turned_about`, where it is not None, is the sum
    of the lowest and highest stored value there can be, about which MONOCHROME1 is turned over first: the lowest value is
    then shown brightest, and stands for most signal. Stored values in the inclusive range `padding` are no pixels and read
    as zero: they hold no signal.
    """

    slope: float = 1.0
    intercept: float = 0.0
    turned_about: float | None = None
    padding: tuple[float, float] | None = None

    @property
    def is_plain(self) -> bool:
        """Whether stored values are output values."""
        return self.slope == 1 and self.intercept == 0 and self.turned_about is None


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
        return Layout(frames, rows, columns, bits, bits, bits - 1, True, True, False, None)
    allocated, stored, high_bit, is_signed = _bits(get)
    return Layout(
        frames, rows, columns, allocated, stored, high_bit, is_signed, False, is_inverted, _padding(get, is_signed=is_signed)
    )


def _size(get: Elements) -> tuple[int, int, int]:
    rows, columns = get.whole(0x00280010) or 0, get.whole(0x00280011) or 0
    if rows < 1 or columns < 1:
        raise RefusalError("Rows or Columns is missing or zero: the file holds no image")
    frames = get.whole(0x00280008) if 0x00280008 in get else 1
    if frames is None or frames < 1:
        raise RefusalError("Number of Frames is not a count: the file holds no image")
    if rows > _MOST_ON_A_SIDE or columns > _MOST_ON_A_SIDE or rows * columns * frames > _MOST_PIXELS:
        count = "an image" if frames == 1 else f"{frames} frames"
        raise RefusalError(f"{count} of {rows} x {columns} pixels is more than any phantom series holds")
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


def scaling_of(get: Elements, layout: Layout) -> Scaling:
    """Read the scaling of one image or frame; where the header gives none, stored values stand as they are.

    Real World Value Mapping and manufacturers' private scales (Philips' scale slope) are left alone.

    Raises
    ------
    RefusalError
        Slope or intercept is given and is no number, the slope is zero, or values would not be finite.
    """
    slope = get.number(0x00281053) if 0x00281053 in get else 1.0
    intercept = get.number(0x00281052) if 0x00281052 in get else 0.0
    if slope is None or intercept is None or slope == 0 or abs(slope) * 2.0**32 + abs(intercept) > _FLOAT32_MAX:
        raise RefusalError("Rescale Slope or Rescale Intercept is not a number that values can be scaled with")
    turned_about = None
    if layout.is_inverted:
        turned_about = -1.0 if layout.is_signed else 2.0**layout.stored - 1.0
    return Scaling(slope, intercept, turned_about, layout.padding)


def decode(file: File, layout: Layout, isolated: IsolatedDecoder) -> Stored:
    """Decode stored values, (F, R, C), unused bits taken out and the sign carried up.

    Raises
    ------
    RefusalError
        Pixel data end early, or cannot be decoded.
    """
    if file.transfer_syntax in _NATIVE:
        stored = _native(file, layout)
        if layout.is_float and not bool(np.all(np.abs(stored) < _LARGEST_FLOAT)):
            raise RefusalError("it holds pixels that are not finite numbers, or absurdly large ones")
        return stored if layout.is_float else _clean_bits(stored, layout, layout.high_bit)
    if layout.is_float:
        raise RefusalError("its floating-point pixel data are compressed, which the standard does not allow")
    # A codestream holds the value itself, whatever bit it had in the uncompressed image; run lengths hold the bytes unchanged.
    high_bit = layout.high_bit if file.transfer_syntax == _RUN_LENGTH else layout.stored - 1
    return _clean_bits(_compressed(file, layout, isolated), layout, high_bit)


def scale_into(out: NDArray[np.float32], stored: Stored, scaling: Scaling) -> None:
    """Write the output values of an image into an array of the same shape."""
    if scaling.is_plain:
        np.copyto(out, stored, casting="unsafe")
    else:
        exact = stored.astype(np.float64)
        if scaling.turned_about is not None:
            np.subtract(scaling.turned_about, exact, out=exact)
        exact *= scaling.slope
        exact += scaling.intercept
        np.copyto(out, exact, casting="same_kind")
    if scaling.padding is not None:
        low, high = scaling.padding
        out[(stored >= low) & (stored <= high)] = 0.0


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


def _compressed(file: File, layout: Layout, isolated: IsolatedDecoder) -> Stored:
    """Decode compressed pixel data with the one plug-in chosen for the transfer syntax, others than run lengths in isolation.

    Plug-ins that happen to be installed besides are not tried, so that the same file gives the same pixels everywhere.
    """
    from pydicom.encaps import generate_frames
    from pydicom.pixels.decoders.base import get_decoder
    from pydicom.uid import UID

    syntax, content = file.transfer_syntax, file.elements.bytes_of(_PIXEL_DATA)
    try:
        decoder = get_decoder(UID(syntax))
    except Exception:  # noqa: BLE001 (pydicom raises whatever an unknown or malformed UID leads it to)
        raise RefusalError("its transfer syntax is not one that can be decoded") from None
    options: dict[str, int | str] = {
        "rows": layout.rows,
        "columns": layout.columns,
        "number_of_frames": layout.frames,
        "samples_per_pixel": 1,
        "photometric_interpretation": "MONOCHROME2",
        "bits_allocated": layout.allocated,
        "bits_stored": layout.stored,
        "pixel_representation": int(layout.is_signed),
        "pixel_keyword": "PixelData",
    }
    try:
        if syntax == _RUN_LENGTH:
            # pydicom's own, in Python: it needs no isolation, as the faster one of pylibjpeg does.
            values, _ = decoder.as_array(content, raw=True, decoding_plugin="pydicom", **_loosely(options))
        else:
            for frame in generate_frames(content, number_of_frames=layout.frames):
                _check_size(frame, layout)
            plugin = "pyjpegls" if syntax in _JPEG_LS else "pylibjpeg"
            values = isolated.decode(content, {**options, "transfer_syntax": syntax, "plugin": plugin})
    except (RefusalError, EvenfieldError):
        raise
    except Exception:  # noqa: BLE001 (pydicom raises whatever damaged encapsulation leads it to)
        raise RefusalError(f"its pixel data cannot be decoded ({decoder.UID.name}): damaged or cut short") from None
    if values.size != layout.size:
        raise RefusalError("its pixel data do not hold as many pixels as the header says")
    decoded: Stored = values.reshape(layout.frames, layout.rows, layout.columns)
    return decoded


def _loosely(options: dict[str, int | str]) -> dict[str, Any]:
    return dict(options)


def _check_size(frame: bytes, layout: Layout) -> None:
    size = size_of(frame)
    if size is None:
        raise RefusalError("its compressed pixel data are damaged: they do not say what size they are")
    if size[2] != 1:
        raise RefusalError("its compressed pixel data are in colour: only grey images are measured")
    if size[:2] != (layout.rows, layout.columns):
        raise RefusalError("its compressed pixel data are of another size than the header says")


def _clean_bits(values: Stored, layout: Layout, high_bit: int) -> Stored:
    """Take out the bits that hold no pixel and carry the sign up (PS3.5, 8.1.1)."""
    size = values.dtype.itemsize
    native = values.astype(values.dtype.newbyteorder("="), copy=False).view(f"{'i' if layout.is_signed else 'u'}{size}")
    if layout.stored >= size * 8 or (high_bit == layout.stored - 1 and _fits(native, layout)):
        return native
    up = size * 8 - 1 - high_bit
    shifted = native << np.asarray(up, dtype=native.dtype) if up else native
    cleaned: Stored = shifted >> np.asarray(size * 8 - layout.stored, dtype=native.dtype)
    return cleaned


def _fits(values: Stored, layout: Layout) -> bool:
    if layout.is_signed:
        half = 2 ** (layout.stored - 1)
        return bool(values.min() >= -half and values.max() < half)
    return bool(values.max() < 2**layout.stored)


def _padding(get: Elements, *, is_signed: bool) -> tuple[float, float] | None:
    value, limit = get.number(0x00280120), get.number(0x00280121)
    if value is None:
        return None
    # In implicit encoding the element does not say whether it is signed: it is as the pixels are.
    ends = [value, value if limit is None else limit]
    if is_signed:
        ends = [each - 2**16 if 2**15 <= each < 2**16 else each for each in ends]
    return min(ends), max(ends)
