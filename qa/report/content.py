"""What a report is made from: finished, extracted data; nothing here is looked up later."""

from dataclasses import dataclass
from datetime import date
from typing import Literal

from qa.records import Picture, Session

__all__ = ["CAUTIONS", "PageSize", "RefusedSeries", "ScannerReport", "Standing"]

PageSize = Literal["A4", "Letter"]
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
    page_size: PageSize = "A4"
    cautions: tuple[str, ...] = CAUTIONS
