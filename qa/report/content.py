"""What a report is made from: finished, extracted data; nothing here is looked up later."""

from dataclasses import dataclass
from datetime import date
from typing import Literal

from qa.records import Baseline, Event, Picture, Session

__all__ = [
    "CAUTIONS",
    "Change",
    "ChangePoint",
    "Comparison",
    "ControlPoint",
    "ControlState",
    "Course",
    "Forecast",
    "LikelyCause",
    "Notice",
    "NoticeKind",
    "PageSize",
    "RefusedSeries",
    "ScannerReport",
    "SignOff",
    "Standing",
]

PageSize = Literal["A4", "Letter"]
ControlState = Literal["in control", "out of control", "still learning"]
NoticeKind = Literal["out of limits", "drifting", "due", "refused", "set-up", "to note"]
Standing = Literal["within limits", "drifting", "out of limits", "overdue"]

_LOCAL_FIRST = (
    "Limits shipped with the program are published defaults; "
    "local codes, the accreditation programme and the manufacturer's figures come first."
)
_LEAKS = (
    "A leaking phantom is not scanned, and not handled without its safety data sheet: "
    "fills are commonly nickel or copper salts."
)
CAUTIONS: tuple[str, ...] = (
    "These figures support and do not replace the judgement of a qualified MR medical physicist.",
    _LOCAL_FIRST,
    "Phantom scanning is subject to the department's MR safety screening and zone rules.",
    _LEAKS,
)


@dataclass(frozen=True)
class RefusedSeries:
    """A series or file that was not taken in; neither text holds a name, number or date of a person."""

    day: date
    what: str
    reason: str


@dataclass(frozen=True)
class Notice:
    """Something that needs a person: what kind it is, and the sentence."""

    kind: NoticeKind
    sentence: str


@dataclass(frozen=True)
class ControlPoint:
    """What the control chart says of one value; `acquisition` is the identifier of the recorded acquisition it came from.

    `centre`, `lower` and `upper` are None while the chart is still learning; `rules` names, in words, the rules that tripped.
    """

    acquisition: int
    centre: float | None = None
    lower: float | None = None
    upper: float | None = None
    rules: tuple[str, ...] = ()


@dataclass(frozen=True)
class ChangePoint:
    """When a quantity changed level or slope: the likeliest day, and the days between which it lies."""

    day: date
    earliest: date
    latest: date
    sentence: str


@dataclass(frozen=True)
class Forecast:
    """Where a trend leads: a straight course from one day and value to another, and the day on which it crosses a limit.

    `earliest` and `latest` bound the crossing; None where that side is open.
    """

    from_day: date
    from_value: float
    crosses_on: date
    at_limit: float
    earliest: date | None
    latest: date | None
    sentence: str


@dataclass(frozen=True)
class Course:
    """One quantity's own history on one phantom, with one protocol and coil (empty: whatever they are), as judged.

    `state` is "in control", "out of control" or "still learning"; `sentence` says since when and by which rule.
    """

    quantity: str
    phantom: str
    protocol: str = ""
    coil: str = ""
    state: ControlState = "still learning"
    sentence: str = ""
    control: tuple[ControlPoint, ...] = ()
    baselines: tuple[Baseline, ...] = ()
    change_points: tuple[ChangePoint, ...] = ()
    forecast: Forecast | None = None


@dataclass(frozen=True)
class LikelyCause:
    """What to look at first, and what speaks for it; it suggests, a person decides."""

    sentence: str
    evidence: tuple[str, ...] = ()


@dataclass(frozen=True)
class Change:
    """A change of set-up, protocol, software or limits, on a day."""

    day: date
    text: str


@dataclass(frozen=True)
class SignOff:
    """A period signed off in the record."""

    name: str
    day: date
    first_day: date
    last_day: date
    comment: str = ""


@dataclass(frozen=True, eq=False)
class Comparison:
    """The last session in which a quantity was good beside the first in which it was out."""

    quantity: str
    phantom: str
    good: Picture
    good_day: date
    bad: Picture
    bad_day: date


@dataclass(frozen=True, eq=False)
class ScannerReport:
    """One scanner over a period.

    Attributes
    ----------
    department, scanner, description : str
        As site.toml names them; the description may be empty.
    first_day, last_day : date
        The period, both days included.
    standing : Standing
        The scanner's standing on `as_of`.
    standing_sentence : str
        The same in one sentence, with what is out and since when.
    sessions : tuple of Session
        Those of the period, in order of day.
    pictures : tuple of Picture
        Images of the latest session with the regions that figures were read in.
    missing : tuple of date
        Days on which a session was due and none was made within its days of grace.
    refused : tuple of RefusedSeries
        What was refused in the period.
    software_version, limits_sha256, record_head : str
        Version of the program, hash of the limits in force on `as_of` (empty: no limits are set) and hash of the record's
        latest entry (empty: the record is empty or keeps none).
    limits_version : int
        Version of the limits in force on `as_of`.
    as_of : date
        The day that the report is dated with. The same content with the same day gives the same bytes.
    every_days, grace_days : int
        The schedule.
    attention : tuple of Notice
        What is out, drifting or due, the gravest first.
    previous_report : date or None
        Day of the report before this one.
    since_previous : tuple of str
        What changed since then, in sentences.
    courses : tuple of Course
        The control state of each quantity; none where it is not judged.
    events : tuple of Event
        Service events and downtime of the period.
    causes : tuple of LikelyCause
        The likeliest first.
    changes : tuple of Change
        Of set-up, protocol, software and limits in the period.
    comparisons : tuple of Comparison
        For quantities that are out.
    signatures : tuple of SignOff
        Those that touch the period.
    next_due : date or None
        When the next session is due.
    page_size : PageSize
        Paper.
    cautions : tuple of str
        One sentence each.
    """

    department: str
    scanner: str
    description: str
    first_day: date
    last_day: date
    standing: Standing
    standing_sentence: str
    sessions: tuple[Session, ...]
    software_version: str
    limits_version: int
    limits_sha256: str
    record_head: str
    as_of: date
    pictures: tuple[Picture, ...] = ()
    missing: tuple[date, ...] = ()
    refused: tuple[RefusedSeries, ...] = ()
    every_days: int = 7
    grace_days: int = 2
    attention: tuple[Notice, ...] = ()
    previous_report: date | None = None
    since_previous: tuple[str, ...] = ()
    courses: tuple[Course, ...] = ()
    events: tuple[Event, ...] = ()
    causes: tuple[LikelyCause, ...] = ()
    changes: tuple[Change, ...] = ()
    comparisons: tuple[Comparison, ...] = ()
    signatures: tuple[SignOff, ...] = ()
    next_due: date | None = None
    page_size: PageSize = "A4"
    cautions: tuple[str, ...] = CAUTIONS
