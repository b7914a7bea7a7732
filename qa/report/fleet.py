"""The fleet report: every scanner by weeks, how the schedule was kept, what was out and why, models compared."""

import json
from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass
from datetime import date
from itertools import groupby

from qa.judge import FleetRow
from qa.report.content import Standing
from qa.report.data import AttachedFile
from qa.report.fleet_content import Episode, FleetReport, FleetScanner, WeekState, mondays
from qa.report.numbers import MINUS, THIN_SPACE, long_date, rounded, short_date
from qa.report.page import Fact
from qa.report.render import fill_template, to_pdf
from qa.report.scanner import STANDING_MARKS, page_identifier
from qa.report.words import about, clipped, count_of, sentence, typeset, value_words

__all__ = ["FleetPage", "lay_out_fleet", "render_fleet_report"]

_MOST_COLUMNS = 56
_NAME_MM = 30.0
_CONTENT_MM = {"A4": 178.0, "Letter": 183.9}
_LETTER_MM = 1.55
_WORST_FIRST: tuple[WeekState, ...] = ("out of limits", "control alarm", "missed", "within limits", "downtime", "not due")
_LETTERS: dict[WeekState, str] = {
    "within limits": "W",
    "control alarm": "A",
    "out of limits": "O",
    "missed": "M",
    "downtime": "D",
    "not due": "\u2013",
}
_STANDINGS: tuple[Standing, ...] = ("out of limits", "overdue", "drifting", "within limits")
_COMPARED_ACROSS = 6


@dataclass(frozen=True)
class Cell:
    """Some weeks of one state, side by side: how many columns, what is written in them, and the whole in words."""

    columns: int
    style: str
    text: str
    words: str


@dataclass(frozen=True)
class CalendarRow:
    """One scanner's weeks."""

    name: str
    cells: tuple[Cell, ...]


@dataclass(frozen=True)
class OverviewRow:
    """One scanner in the table of standings; `keys` sort its columns: standing, last session, next due, share made."""

    name: str
    description: str
    mark: str
    standing: str
    sentence: str
    last_session: str
    next_due: str
    kept: str
    keys: tuple[str, str, str, str]


@dataclass(frozen=True)
class EpisodeRow:
    """One episode."""

    scanner: str
    what: str
    began: str
    ended: str
    sessions: str
    worst: str
    limit: str
    cause: str


@dataclass(frozen=True)
class Compared:
    """Scanners of one model side by side: names, and a row a quantity with a value for each, those that stand out marked."""

    title: str
    names: tuple[str, ...]
    rows: tuple[tuple[str, tuple[tuple[str, bool], ...]], ...]


@dataclass(frozen=True)
class FleetPage:
    """Everything the template places."""

    title: str
    department: str
    running_title: str
    created: str
    as_of: str
    period: str
    summary: str
    summary_mark: str
    counts: tuple[Fact, ...]
    overview: tuple[OverviewRow, ...]
    column_width: str
    months: tuple[tuple[int, str], ...]
    column_words: str
    calendar: tuple[CalendarRow, ...]
    legend: tuple[tuple[str, str, str], ...]
    episodes: tuple[EpisodeRow, ...]
    compared: tuple[Compared, ...]
    provenance: tuple[Fact, ...]
    cautions: tuple[str, ...]


def _columns(content: FleetReport) -> list[list[date]]:
    """Group weeks into columns, so many a column that all fit the page."""
    weeks = mondays(content.first_day, content.last_day)
    step = -(-len(weeks) // _MOST_COLUMNS)
    return [weeks[start : start + step] for start in range(0, len(weeks), step)]


def _calendar(content: FleetReport, columns: Sequence[Sequence[date]], column_mm: float) -> tuple[CalendarRow, ...]:
    rows = []
    for scanner in content.scanners:
        state_of = {week.monday: week.state for week in scanner.weeks}
        states = [min((state_of.get(monday, "not due") for monday in column), key=_WORST_FIRST.index) for column in columns]
        cells, start = [], 0
        for state, run in groupby(states):
            count = len(list(run))
            fits = count * column_mm >= _LETTER_MM * len(state) + 1
            last = columns[start + count - 1][-1]
            span = f"{state}, {count_of(sum(len(c) for c in columns[start : start + count]), 'week')} "
            span += f"from {long_date(columns[start][0])} to that of {long_date(last)}"
            cells.append(Cell(count, state.replace(" ", "-"), state if fits else _LETTERS[state], span))
            start += count
        rows.append(CalendarRow(scanner.name, tuple(cells)))
    return tuple(rows)


def _months(columns: Sequence[Sequence[date]]) -> tuple[tuple[int, str], ...]:
    """Name the months above the columns: how many columns each spans, and its name, with the year where it begins."""
    years = len(columns) and (columns[-1][0] - columns[0][0]).days > 800
    spans = []
    for number, (key, run) in enumerate(groupby(columns, key=lambda c: c[0].year if years else (c[0].year, c[0].month))):
        group = list(run)
        day = group[0][0]
        name = str(day.year) if years else short_date(day).split()[1]
        if not years and (number == 0 or key == (day.year, 1)) and len(group) > 2:
            name += f" {day.year}"
        spans.append((len(group), name if len(group) > 1 else ""))
    return tuple(spans)


def _overview(scanners: Iterable[FleetScanner]) -> tuple[OverviewRow, ...]:
    rows = sorted(scanners, key=lambda s: _STANDINGS.index(s.standing))
    return tuple(
        OverviewRow(
            name=scanner.name,
            description=scanner.description,
            mark=STANDING_MARKS[scanner.standing],
            standing=scanner.standing,
            sentence=f"{sentence(scanner.sentence, f'{scanner.standing}:')}.",
            last_session=long_date(scanner.last_session) if scanner.last_session else "none",
            next_due=long_date(scanner.next_due) if scanner.next_due else "\u2013",
            kept=_kept(scanner),
            keys=(
                str(_STANDINGS.index(scanner.standing)),
                scanner.last_session.isoformat() if scanner.last_session else "",
                scanner.next_due.isoformat() if scanner.next_due else "9999",
                f"{scanner.made / scanner.expected:.6f}" if scanner.expected else "2",
            ),
        )
        for scanner in rows
    )


def _kept(scanner: FleetScanner) -> str:
    if not scanner.expected:
        return "none due"
    percent = 100 * scanner.made / scanner.expected
    # A share below one is never rounded up to the whole.
    shown = min(round(percent), 99) if scanner.made < scanner.expected else 100
    return f"{scanner.made} of {scanner.expected}, {shown}{THIN_SPACE}%"


def _episode(episode: Episode) -> EpisodeRow:
    of = about(episode.quantity, episode.unit)
    return EpisodeRow(
        scanner=episode.scanner,
        what=f"{of.title}, {episode.phantom}",
        began=long_date(episode.began),
        ended=long_date(episode.ended) if episode.ended else "lasts",
        sessions=str(episode.sessions),
        worst=value_words(episode.worst, episode.expanded, of, episode.unit),
        limit=typeset(episode.limit),
        cause=typeset(episode.cause) or "none recorded",
    )


def _compared(rows: Sequence[FleetRow]) -> tuple[Compared, ...]:
    """Lay comparisons out as tables of six scanners at most, one after the other for a larger model."""
    tables = []
    for model, group in groupby(sorted(rows, key=lambda r: r.model), key=lambda r: r.model):
        of_model = list(group)
        names = sorted({row.scanner_name for row in of_model})
        order = list(dict.fromkeys((row.quantity, row.phantom) for row in of_model))
        value = {(row.quantity, row.phantom, row.scanner_name): row for row in of_model}
        for start in range(0, len(names), _COMPARED_ACROSS):
            some = names[start : start + _COMPARED_ACROSS]
            lines = []
            for quantity, phantom in order:
                cells = tuple(_compared_cell(value.get((quantity, phantom, name))) for name in some)
                unit = next(row.unit for row in of_model if (row.quantity, row.phantom) == (quantity, phantom))
                title = f"{about(quantity, unit).label}, {phantom}"
                lines.append((title.replace("(degrees)", "(\u00b0)"), cells))
            part = f", {start + 1} to {start + len(some)} of {len(names)}" if len(names) > _COMPARED_ACROSS else ""
            tables.append(Compared(f"{model}{part}", tuple(clipped(name, 24) for name in some), tuple(lines)))
    return tuple(tables)


def _compared_cell(row: FleetRow | None) -> tuple[str, bool]:
    if row is None:
        return "\u2013", False
    shown, _ = rounded(row.value, 2 * row.scatter, about(row.quantity, row.unit).decimals)
    if row.stands_out and row.apart is not None:
        return f"{shown} ({row.apart:+.0f})".replace("-", MINUS), True
    return shown, False


def _summary(content: FleetReport) -> tuple[str, str, tuple[Fact, ...]]:
    counts = {word: sum(s.standing == word for s in content.scanners) for word in _STANDINGS}
    facts = tuple(Fact(word, str(counts[word])) for word in _STANDINGS)
    worst = next((word for word in _STANDINGS if counts[word]), None)
    if worst is None:
        return "No scanner is named in site.toml.", "no-limit", facts
    if worst == "within limits":
        return f"All {count_of(len(content.scanners), 'scanner')} within limits.", "pass", facts
    said = [f"{counts[word]} {word}" for word in _STANDINGS if counts[word]]
    return f"Of {count_of(len(content.scanners), 'scanner')}, {', '.join(said)}.", STANDING_MARKS[worst], facts


def _provenance(content: FleetReport, attached: Sequence[AttachedFile]) -> tuple[Fact, ...]:
    limits = f"version {content.limits_version}, SHA-256 {content.limits_sha256}" if content.limits_sha256 else "none are set"
    return (
        Fact("Report made with", f"Evenfield {content.software_version}"),
        Fact("Limits in force", limits),
        Fact("Latest entry of the record", content.record_head or "the record keeps no hash"),
        *(Fact("Data in this file", f"{file.name}, SHA-256 {file.sha256}") for file in attached),
    )


def _attached(content: FleetReport) -> tuple[AttachedFile, ...]:
    document = {
        "format": "evenfield-fleet-data",
        "version": 1,
        "software": {"name": "evenfield", "version": content.software_version},
        "department": content.department,
        "as_of": content.as_of,
        "period": {"from": content.first_day, "to": content.last_day},
        "limits": {"version": content.limits_version, "sha256": content.limits_sha256},
        "scanners": [asdict(scanner) for scanner in content.scanners],
        "comparison": [asdict(row) for row in content.comparison],
    }
    text = json.dumps(document, ensure_ascii=False, allow_nan=False, default=str)
    return (AttachedFile("fleet.json", "Standings, weeks, episodes and comparison", text.encode(errors="replace")),)


def lay_out_fleet(content: FleetReport) -> tuple[FleetPage, tuple[AttachedFile, ...]]:
    """Turn content into what the template places, and the file that travels inside."""
    attached = _attached(content)
    columns = _columns(content)
    column_mm = (_CONTENT_MM[content.page_size] - _NAME_MM) / max(len(columns), 1)
    summary, mark, counts = _summary(content)
    shown = {week.state for scanner in content.scanners for week in scanner.weeks}
    per_column = len(columns[0]) if columns else 1
    period = f"{long_date(content.first_day)} to {long_date(content.last_day)}"
    episodes = sorted(
        (e for s in content.scanners for e in s.episodes), key=lambda e: (e.ended is not None, e.scanner, e.began)
    )
    page = FleetPage(
        title=f"Fleet report: {clipped(content.department)}, {long_date(content.as_of)}",
        department=content.department,
        running_title=f"{clipped(content.department)} \u00b7 all scanners",
        created=content.as_of.isoformat(),
        as_of=long_date(content.as_of),
        period=period,
        summary=summary,
        summary_mark=mark,
        counts=counts,
        overview=_overview(content.scanners),
        column_width=f"{column_mm:.3f}mm",
        months=_months(columns),
        column_words="one column a week"
        if per_column == 1
        else f"one column for {per_column} weeks, with the gravest of them",
        calendar=_calendar(content, columns, column_mm),
        legend=tuple((state.replace(" ", "-"), _LETTERS[state], state) for state in _WORST_FIRST if state in shown),
        episodes=tuple(_episode(episode) for episode in episodes),
        compared=_compared(content.comparison),
        provenance=_provenance(content, attached),
        cautions=content.cautions,
    )
    return page, attached


def render_fleet_report(content: FleetReport) -> bytes:
    """Make the dated report of all scanners.

    Parameters
    ----------
    content : FleetReport
        Finished data; the scanners may be none.

    Returns
    -------
    bytes
        PDF/A-3a, with the data behind it attached as JSON. The same content gives the same bytes.

    Raises
    ------
    qa.errors.FaultError
        This installation lacks a library or a template.
    """
    page, attached = lay_out_fleet(content)
    html = fill_template("fleet.html", page=page)
    identifier = page_identifier(page, {}, attached)
    return to_pdf(html, {}, identifier, f"@page {{ size: {content.page_size} }}", attached=attached, as_of=content.as_of)
