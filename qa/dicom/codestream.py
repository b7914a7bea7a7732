"""A look at the head of a compressed frame before a decoder sees it.

A decoder allocates what the codestream asks for, whatever the DICOM header says; a few damaged bytes can ask for gigabytes.
"""

import struct

__all__ = ["size_of"]

_JPEG_START, _JPEG_2000_START = b"\xff\xd8", b"\xff\x4f\xff\x51"
_FRAME_HEADERS = frozenset({*range(0xC0, 0xD0), 0xF7}) - {0xC4, 0xC8, 0xCC}
_STANDALONE = frozenset({0x01, *range(0xD0, 0xD9)})
_JP2_HEADER_BYTES = 4096


def size_of(frame: bytes) -> tuple[int, int, int] | None:
    """Return rows, columns and components that a JPEG, JPEG-LS or JPEG 2000 codestream says it holds; None where it does not.

    JPEG: the frame header (ITU-T T.81, B.2.2; T.87, C.2.2). JPEG 2000: the SIZ segment (ITU-T T.800, A.5.1), which stands
    first in the codestream, itself bare or in a JP2 box.
    """
    try:
        if frame.startswith(_JPEG_START):
            return _of_jpeg(frame)
        start = frame.find(_JPEG_2000_START, 0, _JP2_HEADER_BYTES)
        return None if start < 0 else _of_jpeg_2000(frame, start)
    except struct.error:
        return None


def _of_jpeg(frame: bytes) -> tuple[int, int, int] | None:
    place = 2
    while place < len(frame) - 1:
        if frame[place] != 0xFF:
            return None
        marker = frame[place + 1]
        if marker == 0xFF:
            place += 1
            continue
        place += 2
        if marker in _FRAME_HEADERS:
            rows, columns, components = struct.unpack_from(">3xHHB", frame, place)
            return rows, columns, components
        if marker not in _STANDALONE:
            place += max(2, struct.unpack_from(">H", frame, place)[0])
    return None


def _of_jpeg_2000(frame: bytes, start: int) -> tuple[int, int, int]:
    x, y, x_offset, y_offset = struct.unpack_from(">4I", frame, start + 8)
    (components,) = struct.unpack_from(">H", frame, start + 40)
    return y - y_offset, x - x_offset, components
