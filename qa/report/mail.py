"""The text of a mail about the fleet: what is out, drifting or due, in plain text and in HTML that mail programs take."""

import re
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from qa.errors import FaultError
from qa.report.content import CAUTIONS, Notice, RefusedSeries, Standing
from qa.report.numbers import long_date
from qa.report.render import fill_template
from qa.report.words import count_of, sentence, typeset

__all__ = ["FleetNews", "MailText", "ScannerNews", "compose_mail", "write_mail"]

_ORDER: tuple[Standing, ...] = ("out of limits", "overdue", "drifting", "within limits")
_MOST_REFUSED = 12
_LINE = 78
_CONTROLS = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff\u202a-\u202e\u2066-\u2069]+")


@dataclass(frozen=True)
class ScannerNews:
    """What a mail says of one scanner; `report` is where its report lies, empty where none was made."""

    name: str
    standing: Standing
    sentence: str
    notices: tuple[Notice, ...] = ()
    report: str = ""


@dataclass(frozen=True)
class FleetNews:
    """What a mail is made from; `note` is a sentence about the run itself, such as what could not be finished."""

    department: str
    as_of: date
    scanners: tuple[ScannerNews, ...]
    refused: tuple[RefusedSeries, ...] = ()
    note: str = ""
    software_version: str = ""


@dataclass(frozen=True)
class MailText:
    """A mail without its addresses: one line of subject, plain text, HTML."""

    subject: str
    plain: str
    html: str


def _one_line(text: str) -> str:
    """Make a text one line: what could start another header or another line of a list is a blank."""
    return re.sub(r"\s+", " ", _CONTROLS.sub(" ", text)).strip()


def _subject(news: FleetNews) -> str:
    counts = {word: sum(s.standing == word for s in news.scanners) for word in _ORDER}
    said = [f"{counts[word]} {word}" for word in _ORDER[:3] if counts[word]]
    if news.refused:
        said.append(f"{len(news.refused)} refused")
    if not said:
        said = [f"all {count_of(len(news.scanners), 'scanner')} within limits"] if news.scanners else ["no scanner"]
    return _one_line(f"MR quality assurance: {', '.join(said)} ({news.department}, {long_date(news.as_of)})")[:200]


def _lines(scanner: ScannerNews) -> list[str]:
    """Say what a scanner needs, each thing once."""
    first = sentence(scanner.sentence, f"{scanner.standing}:")
    found = [first] if first else []
    for notice in scanner.notices:
        words = sentence(notice.sentence, f"{notice.kind}:")
        if words.casefold() not in {line.casefold() for line in found}:
            found.append(words if notice.kind == scanner.standing else f"{notice.kind}: {words}")
    return [f"{_one_line(line)}." for line in found]


def _wrapped(text: str, indent: str = "", first: str | None = None) -> str:
    return textwrap.fill(
        text, _LINE, initial_indent=indent if first is None else first, subsequent_indent=indent, break_long_words=False,
        break_on_hyphens=False,
    )  # fmt: skip


def _plain(news: FleetNews, ordered: Sequence[ScannerNews]) -> str:
    parts = [f"{_one_line(news.department)}, {long_date(news.as_of)}", ""]
    if news.note:
        parts += [_wrapped(_one_line(typeset(news.note))), ""]
    for scanner in ordered:
        standing = scanner.standing if scanner.standing == "within limits" else scanner.standing.upper()
        parts.append(f"{_one_line(scanner.name)}: {standing}")
        if scanner.standing != "within limits" or scanner.notices:
            parts += [_wrapped(line, "    ", "  - ") for line in _lines(scanner)]
        if scanner.report:
            parts.append(f"    report: {_one_line(scanner.report)}")
        parts.append("")
    if news.refused:
        parts.append("Refused:")
        parts += [
            _wrapped(f"{long_date(r.day)}, {_one_line(r.what)}: {_one_line(r.reason)}", "    ", "  - ")
            for r in news.refused[:_MOST_REFUSED]
        ]
        if len(news.refused) > _MOST_REFUSED:
            parts.append(f"  and {len(news.refused) - _MOST_REFUSED} more.")
        parts.append("")
    parts += [_wrapped(CAUTIONS[0]), "", f"Sent by evenfield {news.software_version}".rstrip()]
    return "\n".join(parts) + "\n"


def compose_mail(news: FleetNews) -> MailText:
    """Write the mail of a scheduled run.

    The gravest standing comes first, in the subject too; a scanner within limits is one line. The same news give the same
    text.

    Parameters
    ----------
    news : FleetNews
        Finished data.

    Returns
    -------
    MailText
        The subject holds no line break, whatever the names hold.
    """
    ordered = sorted(news.scanners, key=lambda s: (_ORDER.index(s.standing), s.name))
    shown = [(s, _lines(s) if s.standing != "within limits" or s.notices else []) for s in ordered]
    subject = _subject(news)
    html = fill_template(
        "mail.html",
        subject=subject,
        department=_one_line(news.department),
        as_of=long_date(news.as_of),
        note=_one_line(typeset(news.note)),
        scanners=shown,
        refused=[(long_date(r.day), _one_line(r.what), _one_line(r.reason)) for r in news.refused[:_MOST_REFUSED]],
        more=max(0, len(news.refused) - _MOST_REFUSED),
        caution=CAUTIONS[0],
        version=news.software_version,
    )
    return MailText(subject, _plain(news, ordered), html)


def write_mail(folder: Path, mail: MailText) -> None:
    """Write a mail as `mail.txt`, its subject in the first line, and `mail.html`; those of an earlier run are written over.

    Raises
    ------
    qa.errors.FaultError
        The folder cannot be written to.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / "mail.txt").write_text(f"Subject: {mail.subject}\n\n{mail.plain}", encoding="utf-8")
        (folder / "mail.html").write_text(mail.html, encoding="utf-8")
    except OSError as error:
        raise FaultError(
            f"{folder}: the mail could not be written there ({error.strerror}): choose another folder."
        ) from error
