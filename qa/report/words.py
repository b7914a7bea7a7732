"""Records in words: settings, headers, stretches of days, values with their uncertainty."""

import re
from datetime import date

from qa.quantities import QUANTITIES, Quantity, Sense
from qa.records import Measurement, Scanner, Settings
from qa.report.numbers import COVERAGE_FACTOR, MINUS, THIN_SPACE, long_date, plain_number, rounded, typeset_unit, with_unit

__all__ = [
    "about",
    "clipped",
    "count_of",
    "day_runs",
    "expanded",
    "header_words",
    "sentence",
    "settings_words",
    "typeset",
    "value_words",
]

_LONGEST_NAME = 60
_HYPHEN = re.compile(r"(?<![\w.-])-(?=\d)")
_ISO_DATE = re.compile(r"\b\d{4}-\d{2}-\d{2}\b")


def about(name: str, unit: str = "1") -> Quantity:
    """Look a quantity up; one that this version does not know (an older or newer record) goes under its own name."""
    return QUANTITIES.get(name) or Quantity(name, unit, name.replace("_", " "), Sense.NEAR_NOMINAL)


def typeset(text: str) -> str:
    """Write the ISO dates in a sentence out, 2026-11-23 as 23 Nov 2026, and give its numbers a minus sign."""
    return _HYPHEN.sub(MINUS, _ISO_DATE.sub(_written_out, text))


def _written_out(found: "re.Match[str]") -> str:
    try:
        return long_date(date.fromisoformat(found[0]))
    except ValueError:
        return found[0]


def sentence(text: str, after: str = "") -> str:
    """Make a sentence of a text: dates written out, without an opening that stands before it already, no stop at its end."""
    text = typeset(text.strip())
    if after and text.casefold().startswith(after.casefold()):
        text = text[len(after) :].lstrip(": ")
        text = text[:1].upper() + text[1:]
    return text.rstrip(".")


def clipped(text: str, longest: int = _LONGEST_NAME) -> str:
    """Shorten a text that came from outside, with an ellipsis."""
    return text if len(text) <= longest else text[: longest - 1] + "\u2026"


def count_of(number: int, one: str, many: str = "") -> str:
    """Write a number and what is counted: 1 session, 3 sessions."""
    return f"{number} {one if number == 1 else many or one + 's'}"


def expanded(measurement: Measurement) -> float:
    """Return the expanded uncertainty of a measurement."""
    return COVERAGE_FACTOR * measurement.standard_uncertainty


def value_words(value: float, spread: float, of: Quantity, unit: str) -> str:
    """Write a value with its expanded uncertainty and unit."""
    shown, written = rounded(value, spread, of.decimals)
    if not written:
        return with_unit(shown, unit)
    pair = f"{shown}{THIN_SPACE}\u00b1{THIN_SPACE}{written}"
    return with_unit(f"({pair})" if typeset_unit(unit) else pair, unit)


def day_runs(dates: tuple[date, ...], every_days: int) -> tuple[str, ...]:
    """Write days that were due one after the other as one stretch."""
    runs: list[list[date]] = []
    for day in sorted(set(dates)):
        if runs and (day - runs[-1][-1]).days <= every_days:
            runs[-1].append(day)
        else:
            runs.append([day])
    return tuple(
        long_date(run[0]) if len(run) == 1 else f"{long_date(run[0])} to {long_date(run[-1])} ({len(run)} sessions)"
        for run in runs
    )


def _size(values: tuple[float, float]) -> str:
    return f"{plain_number(values[0], 4)}{THIN_SPACE}\u00d7{THIN_SPACE}{plain_number(values[1], 4)}"


def settings_words(settings: Settings) -> str:
    """Write protocol settings in one line; what the header does not say is left out."""
    parts = [settings.protocol, settings.sequence]
    for name, value, unit in (
        ("TR", settings.repetition_ms, "ms"),
        ("TE", settings.echo_ms, "ms"),
        ("flip angle", settings.flip_deg, "degrees"),
        ("slice thickness", settings.slice_thickness_mm, "mm"),
        ("slice spacing", settings.slice_spacing_mm, "mm"),
    ):
        if value is not None:
            parts.append(f"{name} {with_unit(plain_number(value), unit)}")
    if settings.matrix != (0, 0):
        parts.append(f"matrix {_size(settings.matrix)}")
        parts.append(f"pixel {with_unit(_size(settings.pixel_mm), 'mm')}")
    if settings.averages is not None:
        parts.append(f"averages {plain_number(settings.averages)}")
    if settings.bandwidth_hz_per_pixel is not None:
        parts.append(f"bandwidth {with_unit(plain_number(settings.bandwidth_hz_per_pixel, 4), 'Hz')} per pixel")
    if settings.phase_encode is not None:
        parts.append(f"phase encoded along {settings.phase_encode}s")
    if settings.receive_coil:
        parts.append(f"coil {settings.receive_coil}")
    return ", ".join(clipped(part) for part in parts if part)


def header_words(header: Scanner) -> str:
    """Write what the images say of the scanner in one line."""
    parts = [" ".join(part for part in (header.manufacturer, header.model) if part)]
    if header.field_strength_T is not None:
        parts.append(with_unit(plain_number(header.field_strength_T, 4), "T"))
    named = (("station", header.station), ("serial", header.serial), ("software", header.software))
    parts += [f"{name} {value}" for name, value in named if value]
    return ", ".join(clipped(part) for part in parts if part)
