"""The report of one scanner over a period: records become finished words, rows and figures; the template only places them."""

import hashlib

from qa.report.content import ScannerReport
from qa.report.data import AttachedFile, attached_data
from qa.report.images import Figures, pictures
from qa.report.numbers import long_date
from qa.report.page import ScannerPage
from qa.report.render import fill_template, to_pdf
from qa.report.sections import (
    causes,
    facts,
    groups,
    happenings,
    legend,
    missing_sentence,
    never_measured,
    notices,
    provenance,
    signatures,
    trends,
)
from qa.report.streams import histories
from qa.report.words import clipped, sentence, typeset

__all__ = ["STANDING_MARKS", "lay_out_scanner", "page_identifier", "render_scanner_report"]

_PAPER_WIDTH_MM = {"A4": 210.0, "Letter": 215.9}
_SIDE_MARGIN_MM = 16.0
STANDING_MARKS = {"within limits": "pass", "drifting": "conditional-pass", "out of limits": "fail", "overdue": "overdue"}


def lay_out_scanner(content: ScannerReport) -> tuple[ScannerPage, Figures, tuple[AttachedFile, ...]]:
    """Turn content into what the template places, the figures by name, and the files that travel inside."""
    found = histories(content)
    attached = attached_data(content)
    figures: Figures = {}
    width = _PAPER_WIDTH_MM[content.page_size] - 2 * _SIDE_MARGIN_MM
    since = long_date(content.previous_report) if content.previous_report else ""
    page = ScannerPage(
        title=f"Scanner report: {clipped(content.scanner)}, {long_date(content.as_of)}",
        department=content.department,
        scanner=content.scanner,
        description=content.description,
        running_title=f"{clipped(content.department)} \u00b7 {clipped(content.scanner)}",
        created=content.as_of.isoformat(),
        as_of=long_date(content.as_of),
        standing=content.standing[:1].upper() + content.standing[1:],
        standing_mark=STANDING_MARKS[content.standing],
        standing_sentence=f"{sentence(content.standing_sentence, f'{content.standing}:')}.",
        notices=notices(content),
        causes=causes(content),
        since_heading=f"Since the report of {since}" if since else "",
        since=tuple(typeset(text) for text in content.since_previous),
        facts=facts(content),
        latest_day=long_date(content.sessions[-1].day) if content.sessions else "",
        groups=groups(content, found, figures),
        never_measured=never_measured(content),
        missing_sentence=missing_sentence(content),
        legend=legend([history.chart for history in found]),
        trends=trends(content, found, width, figures),
        pictures=pictures(content, figures),
        happenings=happenings(content),
        refused=tuple((long_date(r.day), r.what, r.reason) for r in content.refused),
        provenance=provenance(content, attached),
        signatures=signatures(content),
        cautions=content.cautions,
    )
    return page, figures, attached


def page_identifier(page: object, figures: Figures, attached: tuple[AttachedFile, ...] = ()) -> bytes:
    """Make the file identifier from all that a page holds, so that the same data give the same file."""
    digest = hashlib.sha256(repr(page).encode(errors="backslashreplace"))
    for name in sorted(figures):
        digest.update(name.encode() + figures[name])
    for file in attached:
        digest.update(file.content)
    return digest.digest()[:16]


def render_scanner_report(content: ScannerReport) -> bytes:
    """Make the dated report of one scanner.

    Parameters
    ----------
    content : ScannerReport
        Finished data; the sessions may be none.

    Returns
    -------
    bytes
        PDF/A-3a, with the data behind it attached as CSV and JSON. The same content gives the same bytes.

    Raises
    ------
    qa.errors.FaultError
        This installation lacks a library or a template.
    """
    page, figures, attached = lay_out_scanner(content)
    html = fill_template("scanner.html", page=page)
    paper = f"@page {{ size: {content.page_size} }}"
    return to_pdf(html, figures, page_identifier(page, figures, attached), paper, attached=attached, as_of=content.as_of)
