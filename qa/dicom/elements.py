"""The one place that touches pydicom's loosely typed data sets: bytes in, plain texts and numbers out.

Values are read straight from the raw elements where they are plain (ASCII text, binary numbers) and through pydicom where a
character set or a sequence is involved. Whatever is wrong with a value, it reads as absent: no exception of pydicom, which
may quote the header, leaves this module.
"""

import contextlib
import logging
import math
import re
import struct
import warnings
import zlib
from collections.abc import Callable, Iterator, Mapping, MutableSequence
from datetime import date, datetime, time
from io import SEEK_CUR, BytesIO
from typing import Any

from pydicom.charset import convert_encodings
from pydicom.datadict import dictionary_VR
from pydicom.dataelem import RawDataElement, convert_raw_data_element
from pydicom.dataset import Dataset
from pydicom.filereader import data_element_generator
from pydicom.sequence import Sequence

from qa.dicom.refusal import RefusalError

__all__ = ["Elements", "File", "parse", "quietly"]

_CHARACTER_SET, _STORAGE_CLASS, _TRANSFER_SYNTAX = 0x00080005, 0x00020002, 0x00020010
_DIRECTORY = "1.2.840.10008.1.3.10"
_EXPLICIT = "1.2.840.10008.1.2.1"
_DEFLATED = "1.2.840.10008.1.2.1.99"
_BIG_ENDIAN = "1.2.840.10008.1.2.2"
_IMPLICIT = ("1.2.840.10008.1.2", "1.2.840.113619.5.2")
_LARGEST_INFLATED = 2**30
_INFLATED_AT_ONCE, _INFLATED_TIMES = 2**26, 100
_LONGEST_TEXT = 200
_BINARY = {
    "US": "H",
    "SS": "h",
    "UL": "I",
    "SL": "i",
    "FL": "f",
    "FD": "d",
    "UV": "Q",
    "SV": "q",
    "OW": "H",
    "OF": "f",
    "OD": "d",
}
_TEXTUAL = frozenset(
    {"AE", "AS", "CS", "DA", "DS", "DT", "IS", "LO", "LT", "PN", "SH", "ST", "TM", "UC", "UI", "UR", "UT", "UN", None}
)
_PREFIX_END = 132
_DATE = re.compile(r"(\d{4})[.-]?(\d\d)[.-]?(\d\d)")
_TIME = re.compile(r"(\d\d):?(\d\d)?:?(\d\d)?(?:\.(\d{1,6})\d*)?")
_Raw = Any


@contextlib.contextmanager
def quietly() -> Iterator[None]:
    """Keep back the warnings and log records of pydicom and its plug-ins, which may quote a header's values."""
    loggers = [logging.getLogger(name) for name in ("pydicom", "pylibjpeg", "openjpeg", "libjpeg", "rle")]
    levels = [logger.level for logger in loggers]
    try:
        for logger in loggers:
            logger.setLevel(logging.CRITICAL + 1)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        for logger, level in zip(loggers, levels, strict=True):
            logger.setLevel(level)


class Elements:
    """Typed look-ups in a data set.

    A look-up of something absent, empty, of the wrong kind or not finite gives an empty text, an empty tuple or None.

    Parameters
    ----------
    elements : mapping
        Elements as pydicom holds them, raw where they were never looked at, by tag.
    encoding
        The character set of an item's data set, as pydicom gives it; without it, the elements' own.
    """

    __slots__ = ("_creators", "_elements", "_encoding")

    def __init__(self, elements: Mapping[int, _Raw], encoding: _Raw = None) -> None:
        self._elements = elements
        self._encoding = encoding
        self._creators: dict[tuple[int, str], int] | None = None

    @classmethod
    def of(cls, dataset: Dataset) -> "Elements":
        """Return the look-ups in one of pydicom's data sets, as it stands now."""
        return cls({int(tag): element for tag, element in dataset.items()}, dataset.original_character_set)

    def raw(self, tag: int) -> _Raw:
        """Return the element as pydicom holds it; None where it is absent."""
        return self._elements.get(tag)

    def __contains__(self, tag: int) -> bool:
        element = self._elements.get(tag)
        return element is not None and element.value not in (None, b"", "")

    def overlaid(self, over: Mapping[int, _Raw]) -> "Elements":
        """Return the same elements with others laid over them."""
        return Elements({**self._elements, **over}, self._encoding)

    def all(self) -> Mapping[int, _Raw]:
        """Return all elements by tag."""
        return self._elements

    def items(self, tag: int) -> "list[Elements]":
        """Return the items of a sequence."""
        value = self._converted(self._elements.get(tag))
        return [Elements.of(item) for item in value] if isinstance(value, Sequence) else []

    def strings(self, tag: int) -> tuple[str, ...]:
        """Return the values of a text element, trimmed, without control characters."""
        element = self._elements.get(tag)
        if element is None or element.VR not in _TEXTUAL:
            return ()
        value = element.value
        if isinstance(value, bytes):
            if value.isascii() and b"\x1b" not in value:
                return tuple([_clean(text) for text in value.decode("ascii").split("\\")])
            value = self._converted(element)
        if isinstance(value, Sequence):
            return ()
        if isinstance(value, bytes):
            value = value.decode("utf-8", "replace")
        texts = [str(each) for each in value] if _is_list(value) else [str(value or "")]
        return tuple([_clean(text) for text in texts])

    def text(self, tag: int) -> str:
        """Return a text element's value; several values are joined by a space."""
        strings = self.strings(tag)
        if len(strings) == 1:
            return strings[0]
        return " ".join(part for part in strings if part)[:_LONGEST_TEXT]

    def code(self, tag: int) -> str:
        """Return a text element's first value in capitals."""
        values = self.strings(tag)
        return values[0].upper() if values else ""

    def numbers(self, tag: int) -> tuple[float, ...]:
        """Return the values of a number element, all finite, or nothing."""
        element = self._elements.get(tag)
        if element is None:
            return ()
        try:
            values = _numbers(element)
        except (ValueError, TypeError, struct.error, OverflowError, KeyError, AttributeError):
            return ()
        return values if all(map(math.isfinite, values)) else ()

    def number(self, tag: int) -> float | None:
        """Return the first value of a number element."""
        values = self.numbers(tag)
        return values[0] if values else None

    def positive(self, tag: int) -> float | None:
        """Return the first value of a number element where it is above zero."""
        value = self.number(tag)
        return value if value is not None and value > 0 else None

    def whole(self, tag: int) -> int | None:
        """Return the first value of a number element where it is a whole number."""
        value = self.number(tag)
        return int(value) if value is not None and value == int(value) else None

    def bytes_of(self, tag: int) -> bytes:
        """Return the bytes of an element as the file holds them."""
        element = self._elements.get(tag)
        value = None if element is None else element.value
        return value if isinstance(value, bytes) else b""

    def private(self, group: int, creator: str, offset: int) -> int:
        """Return the tag of a private element in the block its creator reserved, 0 where there is no such block.

        PS3.5, 7.8.1: element (gggg,00bb) names the creator of (gggg,bb00) to (gggg,bbFF).
        """
        if self._creators is None:
            self._creators = {}
            for tag in self._elements:
                if tag >> 16 & 1 and 0x10 <= tag & 0xFFFF <= 0xFF:
                    self._creators.setdefault((tag >> 16, self.text(tag).upper()), tag & 0xFF)
        block = self._creators.get((group, creator.upper()))
        return 0 if block is None else group << 16 | block << 8 | offset

    def day(self, tag: int) -> date | None:
        """Return a date (DA)."""
        return _date(self.text(tag))

    def moment(self, tag: int) -> datetime | None:
        """Return a date and time (DT), its offset from universal time left out."""
        text = self.text(tag)
        return _combined(text[:8], text[8:].split("+")[0].split("-")[0])

    def day_and_time(self, day_tag: int, time_tag: int) -> datetime | None:
        """Return a date (DA) and a time (TM) as one; midnight where the time is absent is a guess, so None."""
        return _combined(self.text(day_tag), self.text(time_tag))

    def _converted(self, element: _Raw) -> Any:  # noqa: ANN401 (pydicom's values are of any kind)
        if element is None:
            return None
        if not isinstance(element, RawDataElement):
            return element.value
        try:
            encoding = self._encoding or convert_encodings(list(self.strings(_CHARACTER_SET)))
            return convert_raw_data_element(element, encoding=encoding).value
        except Exception:  # noqa: BLE001 (pydicom raises whatever a damaged element leads it to)
            return None


class File:
    """One parsed file: its elements, those of its meta information, and its transfer syntax."""

    __slots__ = ("elements", "meta", "transfer_syntax")

    def __init__(self, elements: Elements, meta: Elements, transfer_syntax: str) -> None:
        self.elements = elements
        self.meta = meta
        self.transfer_syntax = transfer_syntax

    @property
    def is_directory(self) -> bool:
        """Whether the file is a DICOMDIR, under whatever name."""
        return self.meta.text(_STORAGE_CLASS) == _DIRECTORY


def parse(content: bytes) -> File:
    """Parse a file's header and leave its pixels alone.

    Of a file that is damaged or cut short, what stands before the damage is given.

    Raises
    ------
    RefusalError
        The bytes are no DICOM data set.
    """
    stream = BytesIO(content)
    if content[128:_PREFIX_END] == b"DICM":
        stream.seek(_PREFIX_END)
    meta = Elements(_read(stream, is_implicit=False, is_little=True, stop_when=_is_past_meta))
    syntax = meta.text(_TRANSFER_SYNTAX)
    if syntax == _DEFLATED:
        stream = BytesIO(_inflated(content[stream.tell() :]))
    start = stream.read(6)
    stream.seek(-len(start), SEEK_CUR)
    if not syntax:
        is_big = _is_explicit(start) and start[:1] == b"\0"
        syntax = _BIG_ENDIAN if is_big else _EXPLICIT if _is_explicit(start) else _IMPLICIT[0]
    # Where transfer syntax and first element disagree on whether value representations are written, the element is right.
    elements = _read(stream, is_implicit=not _is_explicit(start), is_little=syntax != _BIG_ENDIAN)
    if not elements:
        raise RefusalError("the file is damaged: its header cannot be read")
    return File(Elements(elements), meta, syntax)


def _read(
    stream: BytesIO, *, is_implicit: bool, is_little: bool, stop_when: Callable[[int, str | None, int], bool] | None = None
) -> dict[int, _Raw]:
    """Read elements up to the end, a stop, or damage. Keys are plain integers: pydicom's tags compare in Python code."""
    elements: dict[int, _Raw] = {}
    try:
        for element in data_element_generator(stream, is_implicit, is_little, stop_when):
            elements[int(element.tag)] = element
    except Exception:  # noqa: BLE001 (pydicom raises whatever a damaged file leads it to, and may quote it)
        return elements
    return elements


def _is_explicit(start: bytes) -> bool:
    """Tell from its first six bytes whether a data set writes value representations."""
    return start[4:6].isalpha() and start[4:6].isupper()


def _is_past_meta(tag: int, _vr: str | None, _length: int) -> bool:
    return tag >> 16 != 2


def _inflated(deflated: bytes) -> bytes:
    """Inflate a deflated data set (PS3.5, A.5), up to a bound: a few bytes can ask for gigabytes."""
    most = min(max(_INFLATED_AT_ONCE, _INFLATED_TIMES * len(deflated)), _LARGEST_INFLATED)
    inflater = zlib.decompressobj(-zlib.MAX_WBITS)
    try:
        content = inflater.decompress(deflated, most)
    except zlib.error:
        raise RefusalError("the file is damaged: its deflated content cannot be inflated") from None
    if inflater.unconsumed_tail:
        raise RefusalError("its deflated content swells to more than an image of its size can hold")
    if not inflater.eof:
        raise RefusalError("the file is cut short: its deflated content does not end")
    return content


def _numbers(element: _Raw) -> tuple[float, ...]:
    value = element.value
    if not isinstance(element, RawDataElement):
        return tuple(float(each) for each in value) if _is_list(value) else (float(value),)
    if not value:
        return ()
    kind = element.VR
    if kind is None or kind == "UN":
        kind = dictionary_VR(element.tag)
    if " or " in kind:
        kind = "US"
    if (letter := _BINARY.get(kind)) is None:
        return tuple(float(part) for part in value.split(b"\\"))
    count = len(value) // struct.calcsize(letter)
    return tuple(map(float, struct.unpack(f"{'<' if element.is_little_endian else '>'}{count}{letter}", value)))


def _is_list(value: object) -> bool:
    return isinstance(value, MutableSequence | tuple) and not isinstance(value, Sequence)


def _clean(text: str) -> str:
    if not text.isprintable():
        text = "".join(character if character.isprintable() else " " for character in text)
    return text.strip()[:_LONGEST_TEXT]


def _date(text: str) -> date | None:
    found = _DATE.match(text)
    if found is None:
        return None
    try:
        return date(int(found[1]), int(found[2]), int(found[3]))
    except ValueError:
        return None


def _combined(day_text: str, time_text: str) -> datetime | None:
    day, found = _date(day_text), _TIME.match(time_text)
    if day is None or found is None:
        return None
    try:
        clock = time(int(found[1]), int(found[2] or 0), int(found[3] or 0), int((found[4] or "0").ljust(6, "0")))
    except ValueError:
        return None
    return datetime.combine(day, clock)
