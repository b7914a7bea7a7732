"""The report of one scanner over a period: records become finished words, rows and figures; the template only places them."""

import hashlib
from collections import Counter
from dataclasses import dataclass
from datetime import date

from qa.quantities import QUANTITIES, Quantity, Sense
from qa.records import Judged, Measurement, RecordedAcquisition, Session, Settings
from qa.report.content import ScannerReport
from qa.report.numbers import COVERAGE_FACTOR, THIN_SPACE, long_date, plain_number, rounded, typeset_unit, with_unit
from qa.report.picture import DrawnPicture, draw_picture
from qa.report.render import fill_template, to_pdf
from qa.report.trend import Mark, TrendChart, TrendPoint, draw_trend, marks_present

__all__ = ["render_scanner_report"]

_PAPER_WIDTH_MM = {"A4": 210.0, "Letter": 215.9}
_SIDE_MARGIN_MM = 18.0
_PICTURE_MM = 100.0
_LONGEST_NAME = 60
_STANDING_MARKS = {"within limits": "pass", "drifting": "conditional-pass", "out of limits": "fail", "overdue": "overdue"}


@dataclass(frozen=True)
class Fact:
    """A name and what is said of it."""

    name: str
    text: str


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


@dataclass(frozen=True)
class Group:
    """What was measured of one phantom (with one coil and protocol) in the latest session."""

    title: str
    rows: tuple[Row, ...]
    not_measured: tuple[Fact, ...]
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class Trend:
    """One chart and the words around it."""

    title: str
    place: str
    latest: str
    figure: str
    description: str


@dataclass(frozen=True)
class Shown:
    """One image with its key."""

    title: str
    figure: str
    description: str
    drawn: DrawnPicture
    caption: str


@dataclass(frozen=True)
class LegendEntry:
    """A mark of the charts and what it means."""

    mark: str
    words: str


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
    facts: tuple[Fact, ...]
    latest_day: str
    groups: tuple[Group, ...]
    never_measured: tuple[Fact, ...]
    missing_sentence: str
    missing_days: tuple[str, ...]
    legend: tuple[LegendEntry, ...]
    trends: tuple[Trend, ...]
    pictures: tuple[Shown, ...]
    refused: tuple[tuple[str, str, str], ...]
    provenance: tuple[Fact, ...]
    cautions: tuple[str, ...]


@dataclass(frozen=True, order=True)
class _Stream:
    """What belongs on one chart: a phantom, and coil and protocol where one session holds several of them."""

    phantom: str
    protocol: str = ""
    coil: str = ""

    @property
    def title(self) -> str:
        return ", ".join(part for part in (self.phantom, self.protocol, self.coil) if part)


def _about(name: str, unit: str = "1") -> Quantity:
    """Look a quantity up; one that this version does not know (an older or newer record) is shown under its own name."""
    return QUANTITIES.get(name) or Quantity(name, unit, name.replace("_", " "), Sense.NEAR_NOMINAL)


def _clipped(text: str, longest: int = _LONGEST_NAME) -> str:
    return text if len(text) <= longest else text[: longest - 1] + "\u2026"


def _split_phantoms(sessions: tuple[Session, ...]) -> frozenset[str]:
    """Phantoms that some session measures with more than one coil or protocol."""
    split: set[str] = set()
    for session in sessions:
        ways = {(a.phantom, a.settings.protocol, a.settings.receive_coil) for a in session.acquisitions}
        split.update(phantom for phantom, count in Counter(way[0] for way in ways).items() if count > 1)
    return frozenset(split)


def _stream(acquisition: RecordedAcquisition, split: frozenset[str]) -> _Stream:
    if acquisition.phantom not in split:
        return _Stream(acquisition.phantom)
    return _Stream(acquisition.phantom, _clipped(acquisition.settings.protocol), _clipped(acquisition.settings.receive_coil))


def _expanded(measurement: Measurement) -> float:
    return COVERAGE_FACTOR * measurement.standard_uncertainty


def _mark(judged: Judged) -> Mark:
    return judged.verdict.conformity if judged.verdict else "no limit"


def _sorted_judged(acquisition: RecordedAcquisition) -> list[Judged]:
    order = {name: number for number, name in enumerate(QUANTITIES)}
    return sorted(acquisition.judged, key=lambda j: (order.get(j.measurement.quantity, len(order)), j.measurement.quantity))


def _row(judged: Judged) -> Row:
    found = judged.measurement
    about = _about(found.quantity, found.unit)
    value, expanded = rounded(found.value, _expanded(found), about.decimals)
    return Row(
        title=about.title,
        value=value,
        unit=typeset_unit(found.unit),
        expanded=expanded,
        limit=judged.verdict.limit if judged.verdict else "no limit set",
        verdict=judged.verdict.conformity if judged.verdict else "\u2013",
        mark=_mark(judged).replace(" ", "-"),
    )


def _groups(session: Session, split: frozenset[str]) -> tuple[Group, ...]:
    streams = [_stream(acquisition, split) for acquisition in session.acquisitions]
    repeated = {stream for stream, count in Counter(streams).items() if count > 1}
    groups = []
    for acquisition, stream in zip(session.acquisitions, streams, strict=True):
        at = f", {acquisition.acquired_at:%H:%M}" if stream in repeated else ""
        groups.append(
            Group(
                title=stream.title + at,
                rows=tuple(_row(judged) for judged in _sorted_judged(acquisition)),
                not_measured=tuple(Fact(_about(n.quantity).title, n.reason) for n in acquisition.not_measured),
                remarks=acquisition.remarks,
            )
        )
    return tuple(groups)


def _charts(content: ScannerReport, split: frozenset[str]) -> dict[tuple[_Stream, str], tuple[Quantity, TrendChart]]:
    """One chart a stream and quantity, in the order of the table of quantities."""
    points: dict[tuple[_Stream, str], list[TrendPoint]] = {}
    units: dict[tuple[_Stream, str], str] = {}
    for session in content.sessions:
        for acquisition in session.acquisitions:
            for judged in acquisition.judged:
                found, verdict = judged.measurement, judged.verdict
                key = _stream(acquisition, split), found.quantity
                units[key] = found.unit
                points.setdefault(key, []).append(
                    TrendPoint(
                        at=acquisition.acquired_at,
                        value=found.value,
                        expanded=_expanded(found),
                        mark=_mark(judged),
                        lower=verdict.lower if verdict else None,
                        upper=verdict.upper if verdict else None,
                    )
                )
    order = {name: number for number, name in enumerate(QUANTITIES)}
    keys = sorted(points, key=lambda key: (key[0], order.get(key[1], len(order)), key[1]))
    return {
        key: (
            _about(key[1], units[key]),
            TrendChart(
                label=_about(key[1], units[key]).title,
                unit=units[key],
                points=tuple(sorted(points[key], key=lambda p: p.at)),
                first_day=min(content.first_day, points[key][0].at.date()),
                last_day=max(content.last_day, points[key][-1].at.date()),
                missing=content.missing,
                every_days=content.every_days,
                grace_days=content.grace_days,
            ),
        )
        for key in keys
    }


def _legend(charts: list[TrendChart]) -> tuple[LegendEntry, ...]:
    """Explain what the charts use, and nothing else."""
    entries = [LegendEntry(mark.replace(" ", "-"), mark) for mark in marks_present(charts)]
    points = [point for chart in charts for point in chart.points]
    if any(point.expanded > 0 for point in points):
        entries.append(LegendEntry("bar", f"expanded uncertainty, k = {COVERAGE_FACTOR}"))
    if any(point.lower is not None or point.upper is not None for point in points):
        entries.append(LegendEntry("limit", "limit at the time"))
    if any(chart.missing for chart in charts):
        entries.append(LegendEntry("missed", "session missed"))
    return tuple(entries)


def _value_words(value: float, expanded: float, about: Quantity, unit: str) -> str:
    shown, spread = rounded(value, expanded, about.decimals)
    if not spread:
        return with_unit(shown, unit)
    pair = f"{shown}{THIN_SPACE}\u00b1{THIN_SPACE}{spread}"
    return with_unit(f"({pair})" if typeset_unit(unit) else pair, unit)


def _trend(number: int, stream: _Stream, about: Quantity, chart: TrendChart, latest_limit: str) -> Trend:
    last = chart.points[-1]
    words = _value_words(last.value, last.expanded, about, chart.unit)
    counts = Counter(p.mark for p in chart.points)
    outside = ", ".join(f"{counts[m]} {m}" for m in ("conditional pass", "conditional fail", "fail") if counts[m])
    values = "1 value" if len(chart.points) == 1 else f"{len(chart.points)} values"
    description = (
        f"Chart of {about.title} on {stream.title} over time: {values} from {long_date(chart.points[0].at.date())} "
        f"to {long_date(last.at.date())}; latest {words}; {latest_limit or 'no limit set'}; {outside or 'none out of limits'}."
    )
    return Trend(
        title=about.title,
        place=stream.title,
        latest=f"{words} on {long_date(last.at.date())}",
        figure=f"trend-{number}",
        description=description,
    )


def _latest_limits(sessions: tuple[Session, ...], split: frozenset[str]) -> dict[tuple[_Stream, str], str]:
    return {
        (_stream(acquisition, split), judged.measurement.quantity): judged.verdict.limit if judged.verdict else ""
        for session in sessions
        for acquisition in session.acquisitions
        for judged in acquisition.judged
    }


def _size(values: tuple[float, float]) -> str:
    return f"{plain_number(values[0], 4)}{THIN_SPACE}\u00d7{THIN_SPACE}{plain_number(values[1], 4)}"


def _settings_words(settings: Settings) -> str:
    """Protocol settings in one line; what the header does not say is left out."""
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
        parts.append(f"matrix {_size((settings.matrix[0], settings.matrix[1]))}")
        parts.append(f"pixel {with_unit(_size(settings.pixel_mm), 'mm')}")
    if settings.averages is not None:
        parts.append(f"averages {plain_number(settings.averages)}")
    if settings.bandwidth_hz_per_pixel is not None:
        parts.append(f"bandwidth {with_unit(plain_number(settings.bandwidth_hz_per_pixel, 4), 'Hz')} per pixel")
    if settings.phase_encode is not None:
        parts.append(f"phase encoded along {settings.phase_encode}s")
    if settings.receive_coil:
        parts.append(f"coil {settings.receive_coil}")
    return ", ".join(_clipped(part) for part in parts if part)


def _header_words(acquisition: RecordedAcquisition) -> str:
    header = acquisition.scanner
    parts = [" ".join(part for part in (header.manufacturer, header.model) if part)]
    if header.field_strength_T is not None:
        parts.append(with_unit(plain_number(header.field_strength_T, 4), "T"))
    parts += [
        f"{name} {value}"
        for name, value in (("station", header.station), ("serial", header.serial), ("software", header.software))
        if value
    ]
    return ", ".join(_clipped(part) for part in parts if part)


def _facts(content: ScannerReport, latest: Session | None) -> tuple[Fact, ...]:
    count = len(content.sessions)
    days = "day" if content.every_days == 1 else f"{content.every_days} days"
    facts = [
        Fact("Period", f"{long_date(content.first_day)} to {long_date(content.last_day)}"),
        Fact(
            "Sessions",
            f"{count} made, {len(content.missing)} missed; one is due every {days}, "
            f"with {content.grace_days} {'day' if content.grace_days == 1 else 'days'} of grace",
        ),
    ]
    if latest is None:
        return tuple(facts)
    facts.append(Fact("Scanner", _header_words(latest.acquisitions[-1]) or "the images do not say"))
    for acquisition in _once_each(latest):
        facts.append(Fact("Phantom", acquisition.phantom))
        facts.append(Fact("Settings", _settings_words(acquisition.settings) or "the images do not say"))
    return tuple(facts)


def _once_each(session: Session) -> list[RecordedAcquisition]:
    """Acquisitions of a session, each way of measuring once."""
    seen: dict[tuple[str, str], RecordedAcquisition] = {}
    for acquisition in session.acquisitions:
        seen.setdefault((acquisition.phantom, _settings_words(acquisition.settings)), acquisition)
    return list(seen.values())


def _never_measured(content: ScannerReport, latest: Session | None) -> tuple[Fact, ...]:
    """Quantities that some session of the period could not measure, none did, and the latest does not name; latest reason."""
    measured = {j.measurement.quantity for s in content.sessions for a in s.acquisitions for j in a.judged}
    said = {n.quantity for a in latest.acquisitions for n in a.not_measured} if latest else set()
    reasons = {n.quantity: n.reason for s in content.sessions for a in s.acquisitions for n in a.not_measured}
    return tuple(
        Fact(_about(name).title, reason) for name, reason in reasons.items() if name not in measured and name not in said
    )


def _missing_sentence(content: ScannerReport) -> str:
    count = len(content.missing)
    if not count:
        return "No session is missing in this period." if content.sessions else ""
    return (
        f"{'One session' if count == 1 else f'{count} sessions'} due in this period {'is' if count == 1 else 'are'} missing."
    )


def _day_runs(days: tuple[date, ...], every_days: int) -> tuple[str, ...]:
    """Write days that were due one after the other as one stretch."""
    runs: list[list[date]] = []
    for day in sorted(set(days)):
        if runs and (day - runs[-1][-1]).days <= every_days:
            runs[-1].append(day)
        else:
            runs.append([day])
    return tuple(
        long_date(run[0]) if len(run) == 1 else f"{long_date(run[0])} to {long_date(run[-1])} ({len(run)} sessions)"
        for run in runs
    )


def _provenance(content: ScannerReport, latest: Session | None) -> tuple[Fact, ...]:
    facts = [Fact("Report made with", f"Evenfield {content.software_version}")]
    if content.limits_sha256:
        facts.append(Fact("Limits in force", f"version {content.limits_version}, SHA-256 {content.limits_sha256}"))
    else:
        facts.append(Fact("Limits in force", "none are set"))
    if latest is not None:
        versions = sorted({a.software_version for s in content.sessions for a in s.acquisitions})
        facts.append(Fact("Figures measured with", f"Evenfield {', '.join(versions)}"))
        judged_by = sorted({a.limits_version for s in content.sessions for a in s.acquisitions})
        facts.append(Fact("Verdicts given by limits", f"version {', '.join(map(str, judged_by))}"))
        for phantom, sha256 in sorted({(a.phantom, a.phantom_sha256) for a in latest.acquisitions}):
            facts.append(Fact("Phantom definition", f"{phantom}, SHA-256 {sha256}"))
    facts.append(Fact("Latest entry of the record", content.record_head or "the record keeps no hash"))
    return tuple(facts)


def _pictures(content: ScannerReport, latest: Session | None) -> tuple[Shown, ...]:
    shown = []
    for number, picture in enumerate(content.pictures, start=1):
        drawn = draw_picture(picture, _PICTURE_MM, _PICTURE_MM)
        names = ", ".join(f"{entry.number} {entry.name}" for entry in drawn.key)
        shown.append(
            Shown(
                title=_clipped(picture.title, 120),
                figure=f"picture-{number}",
                description=f"Image of slice {picture.slice}: {picture.title}. Regions drawn: {names or 'none'}.",
                drawn=drawn,
                caption=f"Slice {picture.slice}"
                + (f", session of {long_date(latest.day)}" if latest else "")
                + f". Grey scale: {drawn.grey_scale}.",
            )
        )
    return tuple(shown)


def _identifier(page: ScannerPage, figures: dict[str, bytes]) -> bytes:
    """Make the file identifier from all that the page holds, so that the same data give the same file."""
    digest = hashlib.sha256(repr(page).encode(errors="backslashreplace"))
    for name in sorted(figures):
        digest.update(name.encode() + figures[name])
    return digest.digest()[:16]


def _lay_out(content: ScannerReport) -> tuple[ScannerPage, dict[str, bytes]]:
    """Turn content into what the template places, and the figures by name."""
    latest = content.sessions[-1] if content.sessions else None
    split = _split_phantoms(content.sessions)
    charts = _charts(content, split)
    limits = _latest_limits(content.sessions, split)
    width = _PAPER_WIDTH_MM[content.page_size] - 2 * _SIDE_MARGIN_MM
    figures: dict[str, bytes] = {}
    trends = []
    for number, ((stream, name), (about, chart)) in enumerate(charts.items(), start=1):
        trend = _trend(number, stream, about, chart, limits[stream, name])
        figures[trend.figure] = draw_trend(chart, width)
        trends.append(trend)
    pictures = _pictures(content, latest)
    figures.update({shown.figure: shown.drawn.svg for shown in pictures})
    page = ScannerPage(
        title=f"Scanner report: {_clipped(content.scanner)}, {long_date(content.as_of)}",
        department=content.department,
        scanner=content.scanner,
        description=content.description,
        running_title=f"{_clipped(content.department)} \u00b7 {_clipped(content.scanner)}",
        created=content.as_of.isoformat(),
        as_of=long_date(content.as_of),
        standing=content.standing[:1].upper() + content.standing[1:],
        standing_mark=_STANDING_MARKS[content.standing],
        standing_sentence=content.standing_sentence,
        facts=_facts(content, latest),
        latest_day=long_date(latest.day) if latest else "",
        groups=_groups(latest, split) if latest else (),
        never_measured=_never_measured(content, latest),
        missing_sentence=_missing_sentence(content),
        missing_days=_day_runs(content.missing, content.every_days),
        legend=_legend([chart for _, chart in charts.values()]),
        trends=tuple(trends),
        pictures=pictures,
        refused=tuple((long_date(r.day), r.what, r.reason) for r in content.refused),
        provenance=_provenance(content, latest),
        cautions=content.cautions,
    )
    return page, figures


def render_scanner_report(content: ScannerReport) -> bytes:
    """Make the dated report of one scanner.

    Parameters
    ----------
    content : ScannerReport
        Finished data; the sessions may be none.

    Returns
    -------
    bytes
        PDF/A-3a. The same content gives the same bytes.

    Raises
    ------
    qa.errors.FaultError
        This installation lacks a library or a template.
    """
    page, figures = _lay_out(content)
    html = fill_template("scanner.html", page=page)
    paper = f"@page {{ size: {content.page_size} }}"
    return to_pdf(html, figures, _identifier(page, figures), paper)
