"""The tables of site.toml, limits aside (`qa.site.limits`), as checked and frozen records."""

import unicodedata
from collections.abc import Mapping
from dataclasses import fields
from datetime import date
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from qa.records import Settings
from qa.site.limits import ANY, Pattern, Patterns, Positive, Text, did_you_mean

__all__ = [
    "Charts",
    "Department",
    "Downtime",
    "Expectation",
    "Mail",
    "Match",
    "RecordPlace",
    "ReportSettings",
    "SiteFile",
    "SiteScanner",
    "check_name",
]

Days = Annotated[int, Field(strict=True, ge=0, le=3660)]
Switch = Annotated[bool, Field(strict=True)]
_RESERVED = {"fleet", "con", "prn", "aux", "nul", *(f"{port}{n}" for port in ("com", "lpt") for n in range(1, 10))}
_NAME_BYTES = 80


def check_name(name: str) -> str:
    """Check a scanner's name: it becomes part of file names, on any file system.

    Letters, marks and digits of any script, `-` and `_` are allowed; the first is a letter or a digit.

    Returns
    -------
    str
        The name in Unicode's composed form, so that two spellings of one name are equal.

    Raises
    ------
    ValueError
        The name cannot serve; the sentence says why.
    """
    name = unicodedata.normalize("NFC", name)
    wrong = next((c for c in name if c not in "-_" and unicodedata.category(c)[0] not in "LMN"), None)
    if wrong is not None:
        raise ValueError(f"the name {name!r} holds {wrong!r}: allowed are letters, digits, '-' and '_'")
    if not name or unicodedata.category(name[0])[0] not in "LN":
        raise ValueError(f"the name {name!r} must begin with a letter or a digit")
    if len(name.encode()) > _NAME_BYTES:
        raise ValueError(f"the name {name!r} is longer than {_NAME_BYTES} bytes")
    if name.casefold() in _RESERVED:
        raise ValueError(f"the name {name!r} is taken by the reports or by the operating system: choose another")
    return name


def _timezone(name: str) -> str:
    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(f"unknown time zone {name!r}: allowed are names such as 'Europe/London' or 'UTC'") from None
    return name


def _address(text: str) -> str:
    local, at, domain = text.rpartition("@")
    if not (local and at and domain) or any(c.isspace() or ord(c) < 32 or c in ",;<>" for c in text):
        raise ValueError(f"{text!r} is not a mail address such as 'physics@saltmarsh.example'")
    return text


def _addresses(value: Any) -> Any:  # noqa: ANN401 - what TOML holds
    return [value] if isinstance(value, str) else value


def _patient_pattern(pattern: str) -> str:
    if not any(c.isalnum() for c in pattern):
        raise ValueError(
            f"the pattern {pattern!r} would take patients' images for phantom scans: "
            "write at least one letter or digit that every phantom's number holds, such as 'QA-*'"
        )
    return pattern


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)


class Department(_Table):
    """Whose scanners these are, and by which clock their days are counted."""

    name: Text
    timezone: Annotated[Text, AfterValidator(_timezone)]

    @property
    def zone(self) -> ZoneInfo:
        """The time zone."""
        return ZoneInfo(self.timezone)


class RecordPlace(_Table):
    """Where the record is kept: a database URL; a relative SQLite path is meant from the department folder."""

    url: Text = "sqlite:///evenfield.db"

    @model_validator(mode="after")
    def _known(self) -> "RecordPlace":
        scheme, colon, rest = self.url.partition(":")
        driver = scheme.partition("+")[0]
        if not colon or driver not in {"sqlite", "postgresql"} or not rest.startswith("//"):
            raise ValueError("the URL must begin with sqlite:/// or postgresql+psycopg://")
        if driver == "sqlite" and rest in {"//", "///", "///:memory:"}:
            raise ValueError("the URL names no file: a record kept in memory would be lost")
        if driver == "sqlite" and not rest.startswith("///"):
            raise ValueError("an SQLite URL has three slashes before the path, such as sqlite:///evenfield.db")
        return self


class Match(_Table):
    """How a scanner is known in the DICOM header; every key given must agree."""

    station: Text | None = None
    serial: Text | None = None

    @model_validator(mode="after")
    def _something(self) -> "Match":
        if self.station is None and self.serial is None:
            raise ValueError("gives nothing to match by: give station, serial or both")
        return self

    def agrees(self, station: str, serial: str) -> bool:
        """Tell whether a header's station name and serial number are this scanner's; case and outer blanks do not count."""
        pairs = ((self.station, station), (self.serial, serial))
        return all(_plain(wanted) == _plain(found) for wanted, found in pairs if wanted is not None)

    @property
    def keys(self) -> int:
        """How many things must agree."""
        return (self.station is not None) + (self.serial is not None)


def _plain(text: str) -> str:
    return text.strip().casefold()


class SiteScanner(_Table):
    """One scanner of the department: its name, how it is known, and how often it is due."""

    name: Annotated[str, Field(strict=True), AfterValidator(check_name)]
    match: Match
    field_strength_T: Annotated[float, Field(strict=True, gt=0, le=25, allow_inf_nan=False)]
    every_days: Annotated[int, Field(strict=True, ge=1, le=3660)] = 7
    grace_days: Days = 2
    model: Annotated[str, Field(strict=True)] = ""
    location: Annotated[str, Field(strict=True)] = ""
    since: date | None = None


class Downtime(_Table):
    """A period in which a scanner is not expected to be measured.

    Both days belong to it; without a last day it holds until further notice.
    """

    scanner: Patterns
    first_day: date = Field(alias="from")
    last_day: date | None = Field(default=None, alias="to")
    reason: Text

    @model_validator(mode="after")
    def _ordered(self) -> "Downtime":
        if self.last_day is not None and self.last_day < self.first_day:
            raise ValueError(f"to {self.last_day} lies before from {self.first_day}")
        return self

    def covers(self, day: date) -> bool:
        """Tell whether a day belongs to it."""
        return self.first_day <= day and (self.last_day is None or day <= self.last_day)


_NUMERIC = {
    "slice_thickness_mm", "slice_spacing_mm", "repetition_ms", "echo_ms", "flip_deg", "averages",
    "bandwidth_hz_per_pixel", "frequency_MHz",
}  # fmt: skip
_PAIRS = {"pixel_mm", "matrix"}
_SWITCHES = {"parallel_imaging", "filtered"}
SETTING_NAMES = tuple(f.name for f in fields(Settings))


def _settings(given: Any) -> Any:  # noqa: ANN401 - what TOML holds
    if not isinstance(given, dict):
        raise ValueError("must be a table such as { repetition_ms = 500, echo_ms = 20 }")  # noqa: TRY004 - pydantic's way
    return {key: _setting(key, value) for key, value in given.items()}


def _setting(key: str, value: Any) -> Any:  # noqa: ANN401 - what TOML holds
    if key not in SETTING_NAMES:
        raise ValueError(f"unknown setting {key!r}: {did_you_mean(key, SETTING_NAMES)}")
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    if key in _NUMERIC and not number:
        raise ValueError(f"{key}: must be a number, found {value!r}")
    if key in _SWITCHES and not isinstance(value, bool):
        raise ValueError(f"{key}: must be true or false, found {value!r}")
    if key in _PAIRS:
        pair = [value, value] if number else value
        if not (isinstance(pair, list) and len(pair) == 2 and all(isinstance(v, (int, float)) for v in pair)):
            raise ValueError(f"{key}: must be a number or two numbers [rows, columns], found {value!r}")
        return tuple(float(v) for v in pair)
    if key == "phase_encode" and value not in {"row", "column"}:
        raise ValueError(f"{key}: must be 'row' or 'column', found {value!r}")
    if key not in _NUMERIC | _SWITCHES and not isinstance(value, str):
        raise ValueError(f"{key}: must be a text (a shell pattern), found {value!r}")
    return float(value) if key in _NUMERIC else value


class Expectation(_Table):
    """What a session must hold: one series of one phantom, and the settings it is taken with.

    `phantom` is the definition's name after loading. `settings` maps names of `qa.records.Settings` to the value expected;
    texts are shell patterns, `pixel_mm` and `matrix` pairs.
    """

    scanner: Patterns = ANY
    phantom: Text
    series: Pattern = "*"
    patient_id: Annotated[Pattern, AfterValidator(_patient_pattern)]
    settings: Annotated[Mapping[str, Any], BeforeValidator(_settings), Field(default_factory=dict)]


class Mail(_Table):
    """Who is told, and through which mail server.

    A password is never written here: `password_variable` names the environment variable that holds it.
    """

    to: Annotated[tuple[Annotated[str, Field(strict=True), AfterValidator(_address)], ...], BeforeValidator(_addresses)] = (
        Field(min_length=1)
    )
    host: Text
    port: Annotated[int, Field(strict=True, ge=1, le=65535)] = 25
    sender: Annotated[str, Field(strict=True), AfterValidator(_address)] | None = None
    security: Literal["none", "starttls", "tls"] = "none"
    user: Text | None = None
    password_variable: Text | None = None
    timeout_s: Positive = 30.0


class Charts(_Table):
    """Settings of baselines and control charts.

    None leaves the choice to `qa.judge`, where the defaults are reasoned and their false-alarm rate is stated.
    """

    baseline_sessions: Annotated[int, Field(strict=True, ge=2, le=1000)] | None = None
    nelson: tuple[Annotated[int, Field(strict=True, ge=1, le=8)], ...] | None = None
    ewma: Switch | None = None
    cusum: Switch | None = None
    moving_range: Switch | None = None
    weight: Annotated[float, Field(strict=True, gt=0, le=1)] | None = None
    width: Positive | None = None
    reference: Positive | None = None
    decision: Positive | None = None
    jump: Positive | None = None

    def chosen(self) -> dict[str, Any]:
        """Give the settings of the charts that the department chose itself, by their names in `qa.judge`."""
        return self.model_dump(exclude_none=True, exclude={"baseline_sessions"})


class ReportSettings(_Table):
    """How reports look and how far they reach back."""

    page: Literal["A4", "Letter"] = "A4"
    weeks: Annotated[int, Field(strict=True, ge=1, le=1040)] = 52


class SiteFile(_Table):
    """All of site.toml but its limits."""

    department: Department
    record: RecordPlace = RecordPlace()
    scanner: Annotated[tuple[SiteScanner, ...], Field(min_length=1)]
    expect: Annotated[tuple[Expectation, ...], Field(min_length=1)]
    downtime: tuple[Downtime, ...] = ()
    mail: Mail | None = None
    charts: Charts = Charts()
    report: ReportSettings = ReportSettings()
