"""From elements to the records that travel: identity, scanner, settings, kind, plane."""

import math
from datetime import datetime
from functools import lru_cache
from pathlib import Path
from typing import Literal

import numpy as np

from qa.dicom.elements import Elements, File
from qa.dicom.identity import Header, is_name_of_a_person, is_plausible_birth_date
from qa.dicom.refusal import RefusalError
from qa.geometry import Plane
from qa.records import ImageKind, Scanner, Settings

__all__ = ["acquired_at", "header_of", "image_type", "kind_of", "plane_of", "scanner_of", "settings_of"]

_HIGHEST_FIELD_T = 30.0
_HZ_FROM = 1e5  # a frequency above this is in Hz, not MHz
_FARTHEST_MM = 1e5
_LARGEST_PIXEL_MM = 100.0
_SMALLEST_PIXEL_MM = 0.001
_DIRECTION_TOLERANCE = 1e-3

_SIEMENS = "SIEMENS MR HEADER"
_SIEMENS_SHARED = "SIEMENS MR SDS 01"
_SIEMENS_FRAME = "SIEMENS MR SDI 02"
_GE = "GEMS_PARM_01"
_PHILIPS = "Philips Imaging DD 001"
_PHILIPS_MR = "Philips MR Imaging DD 001"
_PHILIPS_FRAME = "Philips MR Imaging DD 005"

# Image Type values beyond the first two: processing that changes the noise. FIL, NORM, DIS2D, DIS3D: Siemens' image filter,
# intensity normalisation and distortion correction; FILTERED_GEMS is a scan option of GE's (both from memory of their
# conformance statements).
_CHANGES_NOISE = frozenset({"FIL", "NORM", "DIS2D", "DIS3D", "FILTERED", "SM", "INTERP", "FILTERED_GEMS"})
_MAPS = frozenset(
    [
        "ADC",
        "FA",
        "TRACEW",
        "TRACE",
        "EADC",
        "T1",
        "T2",
        "T2_STAR",
        "T1MAP",
        "T2MAP",
        "T1_MAP",
        "T2_MAP",
        "R2",
        "R2_STAR",
        "B0",
        "B1",
        "FIELD_MAP",
        "VELOCITY",
        "V",
        "MIP",
        "MPR",
        "MINIP",
        "SUB",
        "SUBTRACTION",
        "DIFFERENCE",
        "MEAN",
        "STDDEV",
        "SNR",
        "CBF",
        "CBV",
        "MTT",
        "TTP",
        "PBP",
        "DEPENDENT",
        "RATIO",
    ]
)
_COMPONENTS: dict[str, ImageKind] = {
    "M": "magnitude",
    "MAGNITUDE": "magnitude",
    "P": "phase",
    "PHASE": "phase",
    "R": "real",
    "REAL": "real",
    "I": "imaginary",
    "IMAGINARY": "imaginary",
    "MIXED": "other",
}
_GE_COMPONENTS: dict[int, ImageKind] = {0: "magnitude", 1: "phase", 2: "real", 3: "imaginary"}


def header_of(file: File, path: Path, sha256: str) -> Header:
    """Read what admission decides on; no pixel is touched."""
    get = file.elements
    name, number, scanned = get.text(0x00100010), get.text(0x00100020), acquired_at(get)
    return Header(
        modality=get.code(0x00080060),
        sop_class_uid=get.text(0x00080016) or file.meta.text(0x00020002),
        sop_instance_uid=get.text(0x00080018),
        study_instance_uid=get.text(0x0020000D),
        series_instance_uid=get.text(0x0020000E),
        series_description=get.text(0x0008103E),
        protocol=get.text(0x00181030),
        image_type=image_type(get),
        manufacturer=get.text(0x00080070),
        model=get.text(0x00081090),
        station=get.text(0x00081010),
        serial=get.text(0x00181000),
        software=get.text(0x00181020),
        field_strength_T=_field_strength(get),
        acquired_at=scanned,
        patient_id=number,
        names_a_person=is_name_of_a_person(name, number),
        gives_birth_date=is_plausible_birth_date(get.text(0x00100030), get.day(0x00100030), scanned),
        sex_is_other=get.code(0x00100040) == "O",
        path=path,
        sha256=sha256,
    )


def image_type(get: Elements) -> tuple[str, ...]:
    """Return Image Type, or Frame Type where a functional group gives it, in capitals.

    Siemens' enhanced images say less there than in a private element of the same meaning, whose values are added.
    """
    values = list(get.strings(0x00089007) or get.strings(0x00080008))
    if tag := get.private(0x0021, _SIEMENS_FRAME, 0x75):
        values += [value for value in get.strings(tag)[2:] if value not in values]
    return tuple(value.upper() for value in values)


def acquired_at(get: Elements) -> datetime | None:
    """Return when the image was acquired, from the most exact of the dates and times the header gives."""
    for tag in (0x00189074, 0x0008002A):  # Frame Acquisition DateTime, Acquisition DateTime
        if (moment := get.moment(tag)) is not None:
            return moment
    for day, clock in ((0x00080022, 0x00080032), (0x00080021, 0x00080031), (0x00080023, 0x00080033), (0x00080020, 0x00080030)):
        if (moment := get.day_and_time(day, clock)) is not None:
            return moment
    return None


def scanner_of(header: Header) -> Scanner:
    """Return what the header says of the scanner."""
    return Scanner(
        manufacturer=header.manufacturer,
        model=header.model,
        station=header.station,
        serial=header.serial,
        field_strength_T=header.field_strength_T,
        software=header.software,
    )


def settings_of(get: Elements, plane: Plane, kinds: tuple[str, ...]) -> Settings:
    """Return what the header says of the protocol, for one image or frame; `kinds` is its Image Type."""
    return Settings(
        protocol=get.text(0x00181030),
        sequence=get.text(0x00180024) or get.text(0x00189005),
        slice_thickness_mm=get.positive(0x00180050),
        slice_spacing_mm=get.positive(0x00180088),
        pixel_mm=plane.pixel_mm,
        matrix=plane.shape,
        repetition_ms=get.positive(0x00180080),
        echo_ms=get.positive(0x00189082) or get.positive(0x00180081),
        flip_deg=get.positive(0x00181314),
        averages=get.positive(0x00180083),
        bandwidth_hz_per_pixel=get.positive(0x00180095),
        phase_encode=_phase_encode(get),
        receive_coil=_receive_coil(get),
        frequency_MHz=_frequency(get),
        parallel_imaging=_parallel_imaging(get),
        filtered=_filtered(get, kinds),
    )


def kind_of(get: Elements, kinds: tuple[str, ...]) -> ImageKind:
    """Tell magnitude from phase, real, imaginary and from computed maps; `kinds` is the Image Type.

    Complex Image Component (PS3.3, C.8.13.3.1.1) comes first, then the values of Image Type, then the manufacturers' own
    elements. An original image that says nothing is a magnitude image.
    """
    component = _COMPONENTS.get(get.code(0x00089208)) or _kind_of_type(kinds[2:])
    if component is not None:
        return component
    if (tag := get.private(0x0043, _GE, 0x2F)) and (number := get.whole(tag)) is not None:
        return _GE_COMPONENTS.get(number, "other")
    if (tag := get.private(0x2005, _PHILIPS_MR, 0x11)) and (letter := get.code(tag)):
        return _COMPONENTS.get(letter, "other")
    return "magnitude"


def _kind_of_type(values: tuple[str, ...]) -> ImageKind | None:
    if any(value in _MAPS or (value.endswith(" MAP") and not value.startswith("PHASE")) for value in values):
        return "other"
    named = [_COMPONENTS.get("P" if value.startswith("PHASE") else value) for value in values]
    return next((kind for kind in named if kind is not None), None)


def plane_of(get: Elements, shape: tuple[int, int]) -> Plane:
    """Return where the image lies.

    Raises
    ------
    RefusalError
        Position, orientation or spacing is missing or cannot be.
    """
    position = get.numbers(0x00200032)
    if len(position) != 3 or max(map(abs, position)) > _FARTHEST_MM:
        raise RefusalError(f"Image Position (Patient) {_fault(get, 0x00200032)}: where the image lies is not known")
    directions = get.numbers(0x00200037)
    if len(directions) != 6:
        raise RefusalError(f"Image Orientation (Patient) {_fault(get, 0x00200037)}: how the image lies is not known")
    spacing = get.numbers(0x00280030)
    if len(spacing) != 2 or not all(_SMALLEST_PIXEL_MM <= each <= _LARGEST_PIXEL_MM for each in spacing):
        raise RefusalError(f"Pixel Spacing {_fault(get, 0x00280030)}: lengths cannot be known")
    row, column = _orthonormal(directions[:3], directions[3:])
    return Plane(
        position_patient=(position[0], position[1], position[2]),
        row_direction=row,
        column_direction=column,
        pixel_mm=(spacing[0], spacing[1]),
        shape=shape,
    )


def _fault(get: Elements, tag: int) -> str:
    return "is not what it should be" if tag in get else "is missing"


@lru_cache(maxsize=256)
def _orthonormal(
    row: tuple[float, ...], column: tuple[float, ...]
) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    """Make two directions exactly of unit length and perpendicular, as the file's few digits cannot."""
    first, second = np.asarray(row), np.asarray(column)
    lengths = math.hypot(*row), math.hypot(*column)
    if any(abs(length - 1) > _DIRECTION_TOLERANCE for length in lengths):
        raise RefusalError("Image Orientation (Patient) holds directions that are not of unit length")
    if abs(float(first @ second)) > _DIRECTION_TOLERANCE:
        raise RefusalError("Image Orientation (Patient) holds directions that are not perpendicular")
    first = first / lengths[0]
    second = second - (first @ second) * first
    second = second / math.sqrt(float(second @ second))
    return (float(first[0]), float(first[1]), float(first[2])), (float(second[0]), float(second[1]), float(second[2]))


def _field_strength(get: Elements) -> float | None:
    value = get.positive(0x00180087)
    return value if value is not None and value < _HIGHEST_FIELD_T else None


def _frequency(get: Elements) -> float | None:
    """Return the imaging frequency in MHz: Imaging Frequency, Transmitter Frequency, or Philips' own copy of it."""
    value = get.positive(0x00180084) or get.positive(0x00189098)
    if value is None and (tag := get.private(0x2001, _PHILIPS, 0x83)):
        value = get.positive(tag)
    return value if value is None or value <= _HZ_FROM else value / 1e6


def _phase_encode(get: Elements) -> Literal["row", "column"] | None:
    """In-plane Phase Encoding Direction: ROW, COL in classic images (PS3.3, C.8.3.1), COLUMN in enhanced (C.8.13.5.3)."""
    direction = get.code(0x00181312)
    if direction == "ROW":
        return "row"
    return "column" if direction in {"COL", "COLUMN"} else None


def _receive_coil(get: Elements) -> str:
    """Name the receive coil, and the elements in use where the manufacturer says which.

    Two series of one protocol can be received by different elements (or by the body coil), which changes shading and noise;
    Siemens says so in private elements only: (0051,xx0F) of "SIEMENS MR HEADER", (0021,xx4F) of "SIEMENS MR SDI 02".
    """
    name = get.text(0x00181250)
    elements = ""
    for group, creator, offset in ((0x0051, _SIEMENS, 0x0F), (0x0021, _SIEMENS_FRAME, 0x4F)):
        if (tag := get.private(group, creator, offset)) and (elements := get.text(tag)):
            break
    return f"{name}: {elements}" if name and elements else name or elements


def _parallel_imaging(get: Elements) -> bool | None:
    """Tell whether parallel imaging was used: Parallel Acquisition, else what manufacturers put in private elements.

    Siemens writes a mode text such as "p2" or "p2 s3" where there was any; GE factors, 1 for none; Philips a copy of the
    standard's element.
    """
    if (answer := get.code(0x00189077)) in {"YES", "NO"}:
        return answer == "YES"
    for group, creator, offset in ((0x0051, _SIEMENS, 0x11), (0x0021, _SIEMENS_FRAME, 0x56), (0x0021, _SIEMENS_SHARED, 0x09)):
        if (tag := get.private(group, creator, offset)) and (mode := get.text(tag)):
            return any(part[:1] in {"p", "s"} and part[1:2] not in {"", "1"} for part in mode.lower().split())
    if (tag := get.private(0x0043, _GE, 0x83)) and (factors := get.numbers(tag)):
        return any(factor != 1 for factor in factors)
    if tag := get.private(0x2005, _PHILIPS_FRAME, 0x0F):
        answers = {item.code(0x00189077) for item in get.items(tag)[:1]}
        return "YES" in answers if answers & {"YES", "NO"} else None
    return None


def _filtered(get: Elements, kinds: tuple[str, ...]) -> bool | None:
    """Tell whether the image was filtered, normalised or interpolated after reconstruction, as far as the header says.

    A filter in k-space does not count: it leaves noise the same in the phantom and in air. Siemens' Image Type names each
    step, so that one which names none of them ("ND": not even distortion corrected) says that there was none.
    """
    if _CHANGES_NOISE.intersection(kinds[2:]) or _CHANGES_NOISE.intersection(get.strings(0x00180022)):
        return True
    return False if "ND" in kinds[2:] and get.code(0x00080070).startswith("SIEMENS") else None
