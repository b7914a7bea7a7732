"""What the template of a scanner's report places: finished words, rows and names of figures."""

from dataclasses import dataclass

__all__ = [
    "Compared",
    "Fact",
    "Group",
    "Happening",
    "LegendEntry",
    "NoticeRow",
    "Row",
    "ScannerPage",
    "Shown",
    "Trend",
]


@dataclass(frozen=True)
class Fact:
    """A name and what is said of it."""

    name: str
    text: str


@dataclass(frozen=True)
class NoticeRow:
    """Something that needs a person, with its mark."""

    kind: str
    mark: str
    sentence: str


@dataclass(frozen=True)
class Row:
    """One line of the table of the latest session."""

    title: str
    value: str
    unit: str
    expanded: str
    limit: str
    verdict: str
    mark: str
    state: str
    spark: str
    spark_description: str


@dataclass(frozen=True)
class Group:
    """What was measured of one phantom (with one coil and protocol) in the latest session."""

    title: str
    rows: tuple[Row, ...]
    not_measured: tuple[Fact, ...]
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class Shown:
    """One image with its key: number, name of the region, and what was read there."""

    title: str
    figure: str
    description: str
    width_mm: float
    height_mm: float
    key: tuple[tuple[int, str, str], ...]
    caption: str


@dataclass(frozen=True)
class Compared:
    """The last good image beside the first bad one."""

    good: Shown
    bad: Shown


@dataclass(frozen=True)
class Trend:
    """One quantity's section: chart, what is said of it, and further figures."""

    title: str
    place: str
    latest: str
    figure: str
    description: str
    notes: tuple[Fact, ...]
    maps: tuple[Shown, ...]
    compared: tuple[Compared, ...]


@dataclass(frozen=True)
class LegendEntry:
    """A mark of the charts and what it means."""

    mark: str
    words: str


@dataclass(frozen=True)
class Happening:
    """An event or change, dated; `letter` is the one on the charts, empty where it is not drawn."""

    letter: str
    day: str
    kind: str
    text: str


@dataclass(frozen=True)
class ScannerPage:
    """Everything the template places."""

    title: str
    department: str
    scanner: str
    description: str
    running_title: str
    created: str
    as_of: str
    standing: str
    standing_mark: str
    standing_sentence: str
    notices: tuple[NoticeRow, ...]
    causes: tuple[Fact, ...]
    since_heading: str
    since: tuple[str, ...]
    facts: tuple[Fact, ...]
    latest_day: str
    groups: tuple[Group, ...]
    never_measured: tuple[Fact, ...]
    missing_sentence: str
    legend: tuple[LegendEntry, ...]
    trends: tuple[Trend, ...]
    pictures: tuple[Shown, ...]
    happenings: tuple[Happening, ...]
    refused: tuple[tuple[str, str, str], ...]
    provenance: tuple[Fact, ...]
    signatures: tuple[Happening, ...]
    cautions: tuple[str, ...]
