"""The sheet to pin up beside a scanner: one page for the technologist, what to scan and when, and what to do now."""

from contextlib import suppress
from dataclasses import dataclass

from qa.report.content import ScannerReport
from qa.report.numbers import long_date
from qa.report.page import Fact, Row
from qa.report.render import TooManyPagesError, fill_template, to_pdf
from qa.report.scanner import STANDING_MARKS, page_identifier
from qa.report.sections import notices, table_row
from qa.report.streams import in_order
from qa.report.words import about, clipped, count_of, sentence, typeset

__all__ = ["ExpectedSeries", "PinUp", "render_pin_up"]

_ATTEMPTS = ((16, 6, ""), (12, 5, ""), (8, 4, ""), (10, 4, "dense"), (5, 3, "dense"), (0, 1, "dense"))
"""Rows of figures, things to do and size of type, tried in turn until the sheet is one page; the last is taken as it comes."""
_WEEKDAYS = ("Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday")


@dataclass(frozen=True)
class ExpectedSeries:
    """What a session must hold: the phantom, how the series is named, the patient ID to enter, and the settings in words."""

    phantom: str
    series: str
    patient_id: str
    settings: str = ""


@dataclass(frozen=True, eq=False)
class PinUp:
    """What the sheet is made from; `tell` are the people to tell when something is wrong."""

    report: ScannerReport
    expected: tuple[ExpectedSeries, ...] = ()
    tell: tuple[str, ...] = ()


@dataclass(frozen=True)
class PinUpPage:
    """Everything the template places."""

    title: str
    department: str
    scanner: str
    description: str
    created: str
    density: str
    as_of: str
    standing: str
    standing_mark: str
    standing_sentence: str
    due: str
    rhythm: str
    expected: tuple[ExpectedSeries, ...]
    latest_day: str
    rows: tuple[Row, ...]
    more_rows: int
    to_do: tuple[str, ...]
    not_measured: tuple[Fact, ...]
    tell: str
    cautions: tuple[str, ...]


def _rows(report: ScannerReport) -> list[Row]:
    """List what was held against a limit in the latest session, what is out first."""
    judged = [j for s in report.sessions[-1:] for a in s.acquisitions for j in in_order(a.judged) if j.verdict is not None]
    rows = [table_row(one, None, "") for one in judged]
    return sorted(rows, key=lambda row: row.mark not in {"fail", "conditional-fail"})


def _to_do(report: ScannerReport) -> list[str]:
    """List what a technologist can act on: notices of the standing, and remarks on the latest session's set-up."""
    found = [f"{notice.kind}: {notice.sentence}" for notice in notices(report)]
    remarks = [f"{sentence(r)}." for s in report.sessions[-1:] for a in s.acquisitions for r in a.remarks]
    return list(dict.fromkeys(found + remarks))


def _lay_out(content: PinUp, most_rows: int, most_to_do: int, density: str) -> PinUpPage:
    report = content.report
    rows, to_do = _rows(report), _to_do(report)
    reasons = {n.quantity: n.reason for s in report.sessions[-1:] for a in s.acquisitions for n in a.not_measured}
    due = report.next_due
    rhythm = "every day" if report.every_days == 1 else f"every {report.every_days} days"
    return PinUpPage(
        title=f"{clipped(report.scanner)}: what to scan, {long_date(report.as_of)}",
        department=report.department,
        scanner=report.scanner,
        description=report.description,
        created=report.as_of.isoformat(),
        density=density,
        as_of=long_date(report.as_of),
        standing=report.standing[:1].upper() + report.standing[1:],
        standing_mark=STANDING_MARKS[report.standing],
        standing_sentence=clipped(f"{sentence(report.standing_sentence, f'{report.standing}:')}.", 240),
        due=f"{_WEEKDAYS[due.weekday()]}, {long_date(due)}" if due else "not planned",
        rhythm=f"{rhythm}, at most {count_of(report.grace_days, 'day')} late",
        expected=content.expected,
        latest_day=long_date(report.sessions[-1].day) if report.sessions else "",
        rows=tuple(rows[:most_rows]),
        more_rows=max(0, len(rows) - most_rows),
        to_do=tuple(clipped(typeset(text), 260) for text in to_do[:most_to_do]),
        not_measured=tuple(Fact(about(name).title, clipped(reason, 160)) for name, reason in list(reasons.items())[:4]),
        tell=", ".join(content.tell),
        cautions=report.cautions[-2:],
    )


def render_pin_up(content: PinUp) -> bytes:
    """Make the sheet: one page, large enough to be read from a step away.

    Parameters
    ----------
    content : PinUp
        Finished data; the sessions may be none.

    Returns
    -------
    bytes
        PDF/A-3a of one page. The same content gives the same bytes.

    Raises
    ------
    qa.errors.FaultError
        This installation lacks a library or a template.
    """
    for attempt in _ATTEMPTS:
        page = _lay_out(content, *attempt)
        html = fill_template("pin-up.html", page=page)
        most_pages = None if attempt == _ATTEMPTS[-1] else 1
        with suppress(TooManyPagesError):
            return to_pdf(
                html, {}, page_identifier(page, {}), f"@page {{ size: {content.report.page_size} }}", most_pages=most_pages
            )
    raise AssertionError("the last attempt takes any number of pages")
