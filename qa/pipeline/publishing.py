"""What is put up and sent besides the dated reports: the board, the sheet beside a scanner, the text of a mail."""

from collections.abc import Sequence
from dataclasses import replace
from datetime import date, timedelta
from fnmatch import fnmatchcase
from pathlib import Path

from qa.pipeline.department import Department
from qa.pipeline.intake import Intake
from qa.pipeline.pictures import pictures_of
from qa.pipeline.reporting import fleet_report, notices_of, scanner_report
from qa.pipeline.survey import Survey
from qa.pipeline.walk import Progress, no_progress
from qa.report.board import Board, BoardScanner, SessionImage, write_board
from qa.report.content import RefusedSeries
from qa.report.mail import FleetNews, MailText, ScannerNews, compose_mail
from qa.report.pin_up import ExpectedSeries, PinUp, render_pin_up
from qa.site import SiteScanner
from qa.version import __version__

__all__ = ["mail_text", "publish_board", "write_pin_ups"]

_IMAGES = 26
"""Sessions whose images the board shows: half a year of weeks."""


def publish_board(department: Department, folder: Path, as_of: date | None = None, progress: Progress = no_progress) -> Path:
    """Write the static site: the fleet, a page a scanner, the images of the last sessions.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    folder : pathlib.Path
        A new or empty folder, or one that holds an earlier board.
    as_of : datetime.date or None
        The day to look from; the run's own day by default.
    progress : Progress
        Wraps the loop over scanners.

    Returns
    -------
    pathlib.Path
        The page to open first.

    Raises
    ------
    UsageError
        The folder holds something that is no board.
    FaultError
        The disk failed.
    """
    day = as_of or department.today
    first = day - timedelta(weeks=department.site.report.weeks)
    scanners = []
    for scanner in progress(department.site.scanners, "Building pages"):
        report = scanner_report(department, scanner, first, day, day)
        images = [
            SessionImage(session.day, picture)
            for session in report.sessions[-_IMAGES:]
            for acquisition in session.acquisitions
            for picture in pictures_of(department, acquisition)
        ]
        scanners.append(BoardScanner(report, tuple(images)))
    return write_board(folder, Board(fleet_report(department, first, day, day), tuple(scanners)))


def write_pin_ups(department: Department, names: Sequence[str] = (), as_of: date | None = None) -> tuple[Path, ...]:
    """Render the sheet to pin up beside each scanner: what to scan, when, and what to do about the last session.

    Returns
    -------
    tuple of pathlib.Path
        The files written, in the order of the scanners.

    Raises
    ------
    SiteError
        There is no scanner of that name.
    FaultError
        The disk failed.
    """
    from qa.report.files import save_report

    site, day = department.site, as_of or department.today
    written = []
    for scanner in [site.scanner(name) for name in names] or list(site.scanners):
        report = scanner_report(department, scanner, day - timedelta(weeks=site.report.weeks), day, day)
        sheet = PinUp(replace(report, pictures=()), _expected(department, scanner), site.mail.to if site.mail else ())
        written.append(save_report(site.reports, f"{scanner.name}-pin-up", day, render_pin_up(sheet)))
    return tuple(written)


def _expected(department: Department, scanner: SiteScanner) -> tuple[ExpectedSeries, ...]:
    return tuple(
        ExpectedSeries(
            e.phantom, e.series, e.patient_id, ", ".join(f"{name} {_shown(value)}" for name, value in e.settings.items())
        )
        for e in department.site.expectations
        if any(fnmatchcase(scanner.name, pattern) for pattern in e.scanner)
    )


def _shown(value: object) -> str:
    if isinstance(value, tuple):
        return " x ".join(f"{v:g}" for v in value)
    return f"{value:g}" if isinstance(value, float) else str(value)


def mail_text(department: Department, intake: Intake, found: Survey) -> MailText:
    """Compose the mail of a scheduled run; sending it is another's part."""
    news = FleetNews(
        department=department.site.department.name,
        as_of=department.today,
        scanners=tuple(
            ScannerNews(one.scanner_name, one.standing, one.sentence, tuple(notices_of(one))) for one in found.assessments
        ),
        refused=tuple(RefusedSeries(department.today, one.path.name, one.reason) for one in intake.refused),
        note=" ".join(text for text in (found.clock, *found.remarks) if text),
        software_version=__version__,
    )
    return compose_mail(news)
