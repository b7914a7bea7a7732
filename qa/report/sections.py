"""The sections of a scanner's report, each from its records: table, trends, images, what happened, what traces it."""

from collections import Counter
from collections.abc import Sequence

from qa.records import Judged, Measurement, Picture, RecordedAcquisition, Session, Verdict
from qa.report.chart import TrendChart
from qa.report.content import Course, ScannerReport
from qa.report.data import AttachedFile
from qa.report.images import Figures, compare
from qa.report.maps import maps_of
from qa.report.numbers import COVERAGE_FACTOR, long_date, plain_number, rounded, typeset_unit, with_unit
from qa.report.page import Fact, Group, Happening, LegendEntry, NoticeRow, Row, Shown, Trend
from qa.report.spark import draw_spark
from qa.report.streams import History, event_letters, in_order, mark_of, split_phantoms, stream_of
from qa.report.trend import draw_trend, marks_present
from qa.report.words import (
    about,
    count_of,
    day_runs,
    expanded,
    header_words,
    sentence,
    settings_words,
    typeset,
    value_words,
)

__all__ = [
    "causes",
    "facts",
    "groups",
    "happenings",
    "legend",
    "missing_sentence",
    "never_measured",
    "notices",
    "provenance",
    "signatures",
    "table_row",
    "trends",
]

_NOTICE_MARKS = {
    "out of limits": "fail",
    "drifting": "conditional-pass",
    "due": "overdue",
    "refused": "conditional-fail",
    "set-up": "conditional-fail",
    "to note": "no-limit",
}
_RULES = {"simple": "simple acceptance", "guarded": "guarded acceptance: the expanded uncertainty must fit inside too"}


def notices(content: ScannerReport) -> tuple[NoticeRow, ...]:
    """List what needs a person; what the standing's own sentence says is not said again."""
    said = sentence(content.standing_sentence).casefold()
    return tuple(
        NoticeRow(notice.kind[:1].upper() + notice.kind[1:], _NOTICE_MARKS[notice.kind], f"{words}.")
        for notice in content.attention
        if (words := sentence(notice.sentence, f"{notice.kind}:")).casefold() not in said
    )


def facts(content: ScannerReport) -> tuple[Fact, ...]:
    """Say what the report is about: period, sessions, scanner, phantoms and settings."""
    grace = count_of(content.grace_days, "day")
    due = "one is due every day" if content.every_days == 1 else f"one is due every {content.every_days} days"
    found = [
        Fact("Period", f"{long_date(content.first_day)} to {long_date(content.last_day)}"),
        Fact(
            "Sessions",
            f"{len(content.sessions)} made, {len(content.missing)} missed; {due}, with {grace} of grace"
            + (f"; next due {long_date(content.next_due)}" if content.next_due else ""),
        ),
    ]
    if not content.sessions:
        return tuple(found)
    latest = content.sessions[-1]
    found.append(Fact("Scanner", header_words(latest.acquisitions[-1].scanner) or "the images do not say"))
    ways = {(a.phantom, settings_words(a.settings)): None for a in latest.acquisitions}
    for phantom, settings in ways:
        found.append(Fact("Phantom", phantom))
        found.append(Fact("Settings", settings or "the images do not say"))
    return tuple(found)


def _state_words(course: Course | None) -> str:
    return course.state if course else "\u2013"


def table_row(judged: Judged, history: History | None, spark: str) -> Row:
    """Lay one judged value out as a row; without a history it has neither control state nor sparkline."""
    found = judged.measurement
    of = about(found.quantity, found.unit)
    value, spread = rounded(found.value, expanded(found), of.decimals)
    return Row(
        title=of.title,
        value=value,
        unit=typeset_unit(found.unit),
        expanded=spread,
        limit=typeset(judged.verdict.limit) if judged.verdict else "no limit set",
        verdict=judged.verdict.conformity if judged.verdict else "\u2013",
        mark=mark_of(judged).replace(" ", "-"),
        state=_state_words(history.course if history else None),
        spark=spark,
        spark_description=_chart_words(history) if history else "",
    )


def groups(content: ScannerReport, found: Sequence[History], figures: Figures) -> tuple[Group, ...]:
    """Lay the latest session out as tables, one for each phantom, with a sparkline for each quantity."""
    if not content.sessions:
        return ()
    session = content.sessions[-1]
    split = split_phantoms(content.sessions)
    by_name = {(h.stream, h.latest.measurement.quantity): (n, h) for n, h in enumerate(found, start=1)}
    streams = [stream_of(acquisition, split) for acquisition in session.acquisitions]
    repeated = {stream for stream, count in Counter(streams).items() if count > 1}
    collected = []
    for acquisition, stream in zip(session.acquisitions, streams, strict=True):
        rows = []
        for judged in in_order(acquisition.judged):
            number, history = by_name[stream, judged.measurement.quantity]
            spark = f"spark-{number}" if len(history.chart.points) > 1 else ""
            if spark and spark not in figures:
                figures[spark] = draw_spark(history.chart)
            rows.append(table_row(judged, history, spark))
        collected.append(
            Group(
                title=stream.title + (f", {acquisition.acquired_at:%H:%M}" if stream in repeated else ""),
                rows=tuple(rows),
                not_measured=tuple(Fact(about(n.quantity).title, n.reason) for n in acquisition.not_measured),
                remarks=acquisition.remarks,
            )
        )
    return tuple(collected)


def never_measured(content: ScannerReport) -> tuple[Fact, ...]:
    """List quantities that no session of the period could measure and that the latest does not name, with the last reason."""
    measured = {j.measurement.quantity for s in content.sessions for a in s.acquisitions for j in a.judged}
    said = {n.quantity for s in content.sessions[-1:] for a in s.acquisitions for n in a.not_measured}
    reasons = {n.quantity: n.reason for s in content.sessions for a in s.acquisitions for n in a.not_measured}
    return tuple(
        Fact(about(name).title, reason) for name, reason in reasons.items() if name not in measured and name not in said
    )


def missing_sentence(content: ScannerReport) -> str:
    """Say which sessions are missing."""
    if not content.missing:
        return "No session is missing in this period." if content.sessions else ""
    count = len(content.missing)
    is_missing = (
        "One session due in this period is missing" if count == 1 else f"{count} sessions due in this period are missing"
    )
    return f"{is_missing}. Due and not made: {'; '.join(day_runs(content.missing, content.every_days))}."


def legend(charts: Sequence[TrendChart]) -> tuple[LegendEntry, ...]:
    """Explain what the charts use, and nothing else."""
    entries = [LegendEntry(mark.replace(" ", "-"), mark) for mark in marks_present(charts)]
    points = [point for chart in charts for point in chart.points]
    for mark, words, used in (
        ("bar", f"expanded uncertainty, k = {COVERAGE_FACTOR}", any(p.expanded > 0 for p in points)),
        ("limit", "limit at the time", any(p.lower is not None or p.upper is not None for p in points)),
        ("baseline", "baseline and the usual scatter", any(chart.baselines for chart in charts)),
        ("control", "control limits", any(p.control_lower is not None or p.control_upper is not None for p in points)),
        ("ring", "a control rule tripped", any(p.tripped for p in points)),
        ("event", "event, by its letter", any(chart.events for chart in charts)),
        ("change", "a change began, within the bar", any(chart.changes for chart in charts)),
        ("forecast", "course to a limit, with its interval", any(chart.forecast for chart in charts)),
        ("missed", "session missed", any(chart.missing for chart in charts)),
    ):
        if used:
            entries.append(LegendEntry(mark, words))
    return tuple(entries)


def _chart_words(history: History) -> str:
    """Say in one sentence what a chart shows, for those who do not see it."""
    chart = history.chart
    first, last = chart.points[0], chart.points[-1]
    counts = Counter(p.mark for p in chart.points)
    outside = ", ".join(f"{counts[m]} {m}" for m in ("conditional pass", "conditional fail", "fail") if counts[m])
    limit = history.latest.verdict.limit if history.latest.verdict else "no limit set"
    return (
        f"Chart of {chart.label} on {history.stream.title} over time: {count_of(len(chart.points), 'value')} from "
        f"{long_date(first.at.date())} to {long_date(last.at.date())}; latest "
        f"{value_words(last.value, last.expanded, history.quantity, chart.unit)}; {limit}; {outside or 'none out of limits'}."
    )


def _limit_note(verdict: Verdict) -> str:
    rule = _RULES.get(verdict.rule, verdict.rule)
    return typeset(f"{verdict.limit}, {rule}" + (f"; {verdict.source}" if verdict.source else ""))


def _sureness(found: Measurement, verdict: Verdict) -> str:
    """Say by how much a value is out, and how sure that is."""
    if verdict.conformity in {"pass", "conditional pass"}:
        return ""
    beyond = [found.value - verdict.upper] if verdict.upper is not None and found.value > verdict.upper else []
    beyond += [verdict.lower - found.value] if verdict.lower is not None and found.value < verdict.lower else []
    said = ""
    if beyond:
        _, spread = rounded(found.value, expanded(found), 2)
        shown, _ = rounded(beyond[0], expanded(found), about(found.quantity, found.unit).decimals)
        by_nothing = not shown.strip("0.")
        said = "just beyond the limit" if by_nothing else f"beyond the limit by {with_unit(shown, found.unit)}"
        said += f", with an expanded uncertainty of {with_unit(spread, found.unit)}" if spread else ""
    if verdict.probability is not None:
        percent = 100 * verdict.probability
        shown = "below 0.1" if percent < 0.1 else plain_number(percent, 2)
        said += f"{'; ' if said else ''}the probability that it conforms is {shown} %"
    return said


def _read_in(found: Measurement, shown: Sequence[Picture]) -> str:
    """Name the image and the numbers of the regions a value was read in."""
    wanted = {(region.name, region.slice) for region in found.regions}
    for number, picture in enumerate(shown, start=1):
        names = list(dict.fromkeys(region.name for region in picture.regions))
        numbers = [n for n, name in enumerate(names, start=1) if (name, picture.slice) in wanted]
        if numbers:
            where = f"slice {picture.slice}, image {number}"
            return f"{where}, {'region' if len(numbers) == 1 else 'regions'} {', '.join(map(str, numbers))}"
    return f"slice {found.slice}" if found.slice is not None else ""


def _notes(history: History, shown: Sequence[Picture]) -> tuple[Fact, ...]:
    """Collect what is said of one quantity below its chart."""
    found, verdict, course = history.latest.measurement, history.latest.verdict, history.course
    said = []
    if verdict is not None:
        said.append(Fact("Limit", _limit_note(verdict)))
        if sure := _sureness(found, verdict):
            said.append(Fact("Out by", sure))
    if course is not None:
        said.append(Fact("Control", sentence(course.sentence or course.state)))
        said += [Fact("Changed", sentence(change.sentence)) for change in course.change_points]
        if course.baselines:
            last = course.baselines[-1]
            words = value_words(last.value, COVERAGE_FACTOR * last.standard_uncertainty, history.quantity, found.unit)
            on = f"from {count_of(last.sessions, 'session')}" if last.sessions else "set by hand"
            said.append(Fact("Baseline", f"{words}, {on}, in force since {long_date(last.since)}"))
        if course.forecast is not None:
            said.append(Fact("Forecast", sentence(course.forecast.sentence)))
    if place := _read_in(found, shown):
        said.append(Fact("Read in", place))
    said.append(Fact("Method", f"{found.method}, version {found.method_version}"))
    return tuple(said)


def trends(content: ScannerReport, found: Sequence[History], width_mm: float, figures: Figures) -> tuple[Trend, ...]:
    """Make the section of each quantity: chart, notes, further figures, good and bad images."""
    collected = []
    for number, history in enumerate(found, start=1):
        measurement = history.latest.measurement
        figure = f"trend-{number}"
        figures[figure] = draw_trend(history.chart, width_mm)
        maps: tuple[Shown, ...] = ()
        if (drawn := maps_of(measurement, f"map-{number}")) is not None:
            maps = (drawn[0],)
            figures[drawn[0].figure] = drawn[1]
        compared = [
            compare(one, f"{number}-{n}", figures)
            for n, one in enumerate(content.comparisons)
            if one.quantity == measurement.quantity and one.phantom == history.stream.phantom
        ]
        last = history.chart.points[-1]
        words = value_words(last.value, last.expanded, history.quantity, history.chart.unit)
        collected.append(
            Trend(
                title=history.quantity.title,
                place=history.stream.title,
                latest=f"{words} on {long_date(last.at.date())}",
                figure=figure,
                description=_chart_words(history),
                notes=_notes(history, content.pictures),
                maps=maps,
                compared=tuple(compared),
            )
        )
    return tuple(collected)


def happenings(content: ScannerReport) -> tuple[Happening, ...]:
    """List events and changes of the period, in order of day."""
    rows = [
        (
            event.day,
            Happening(
                letter,
                long_date(event.day) + (f" to {long_date(event.until)}" if event.until else ""),
                event.kind,
                event.text
                + (f" (concerns {', '.join(about(q).title for q in event.quantities)})" if event.quantities else "")
                + ("; baselines start anew" if event.restarts_baseline else ""),
            ),
        )
        for letter, event in event_letters(content.events)
    ]
    rows += [
        (change.day, Happening("", long_date(change.day), "change found", typeset(change.text))) for change in content.changes
    ]
    return tuple(row for _, row in sorted(rows, key=lambda pair: pair[0]))


def _versions(sessions: Sequence[Session], name: str) -> str:
    acquisitions: list[RecordedAcquisition] = [a for s in sessions for a in s.acquisitions]
    return ", ".join(sorted({str(getattr(a, name)) for a in acquisitions}))


def provenance(content: ScannerReport, attached: Sequence[AttachedFile]) -> tuple[Fact, ...]:
    """Say what everything comes from, and how to make it again."""
    said = [Fact("Report made with", f"Evenfield {content.software_version}")]
    limits = "none are set"
    if content.limits_sha256:
        limits = f"version {content.limits_version}, SHA-256 {content.limits_sha256}"
    said.append(Fact("Limits in force", limits))
    if content.sessions:
        said.append(Fact("Figures measured with", f"Evenfield {_versions(content.sessions, 'software_version')}"))
        said.append(Fact("Verdicts given by limits", f"version {_versions(content.sessions, 'limits_version')}"))
        for phantom, sha256 in sorted({(a.phantom, a.phantom_sha256) for a in content.sessions[-1].acquisitions}):
            said.append(Fact("Phantom definition", f"{phantom}, SHA-256 {sha256}"))
    said.append(Fact("Latest entry of the record", content.record_head or "the record keeps no hash"))
    said += [Fact("Data in this file", f"{file.name}, SHA-256 {file.sha256}") for file in attached]
    said.append(
        Fact(
            "How figures are written", "rounded to the second significant digit of the expanded uncertainty (JCGM 100, 7.2.6)"
        )
    )
    said.append(
        Fact("Made again", "The same record, day and version give this file to the byte; a report on file is never replaced.")
    )
    return tuple(said)


def signatures(content: ScannerReport) -> tuple[Happening, ...]:
    """List the sign-offs in the record that touch the period."""
    return tuple(
        Happening(
            "",
            long_date(s.day),
            s.name,
            f"{long_date(s.first_day)} to {long_date(s.last_day)}" + (f": {s.comment}" if s.comment else ""),
        )
        for s in sorted(content.signatures, key=lambda s: s.day)
    )


def causes(content: ScannerReport) -> tuple[Fact, ...]:
    """List what to look at first, with the evidence."""
    return tuple(
        Fact(f"{sentence(cause.sentence, 'Look first at')}.", "; ".join(sentence(one) for one in cause.evidence))
        for cause in content.causes
    )
