"""Render the dated reports: from the record and the archive to PDF."""

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import replace
from datetime import date, timedelta
from pathlib import Path
from typing import Any, cast, get_args

from qa.errors import UsageError
from qa.judge import RULES, Assessment, QuantityState, assess, compare_fleet, is_out, missed_days
from qa.pipeline.department import Department
from qa.pipeline.pictures import picture_of, pictures_of
from qa.pipeline.survey import grounds_for
from qa.pipeline.walk import Progress, no_progress
from qa.records import RecordedAcquisition, Session
from qa.report.content import (
    Change,
    ChangePoint,
    Comparison,
    ControlPoint,
    Course,
    Forecast,
    LikelyCause,
    Notice,
    PageSize,
    RefusedSeries,
    ScannerReport,
    SignOff,
)
from qa.report.fleet_content import FleetReport, fleet_scanner
from qa.report.numbers import long_date
from qa.report.words import count_of
from qa.site import SiteScanner
from qa.version import __version__

__all__ = ["fleet_report", "notices_of", "scanner_report", "write_reports"]


def write_reports(
    department: Department,
    names: Sequence[str] = (),
    first: date | None = None,
    last: date | None = None,
    as_of: date | None = None,
    *,
    page: str | None = None,
    progress: Progress = no_progress,
) -> tuple[Path, ...]:
    """Render the report of each scanner, and that of the fleet where no scanner is named.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    names : sequence of str
        Scanners; none means all.
    first, last : datetime.date or None
        The period, both days included; by default it ends on `as_of` and reaches back as far as site.toml says.
    as_of : datetime.date or None
        The day that the report is dated with and judged from; the run's own day by default.
    page : str or None
        "A4" or "Letter"; site.toml decides by default.
    progress : Progress
        Wraps the loop over scanners.

    Returns
    -------
    tuple of pathlib.Path
        The files written, in the order of the scanners, the fleet's last.

    Raises
    ------
    SiteError
        There is no scanner of that name.
    UsageError
        The period ends before it begins, lies in the future, or the page size is unknown.
    FaultError
        The disk failed.
    """
    from qa.report.files import save_report
    from qa.report.fleet import render_fleet_report
    from qa.report.scanner import render_scanner_report

    site = department.site
    scanners = [site.scanner(name) for name in names] or list(site.scanners)
    dated = as_of or department.today
    until = last or dated
    since = first or until - timedelta(weeks=site.report.weeks)
    if since > until:
        raise UsageError(f"The period from {since} to {until} ends before it begins: give --from a day before --to.")
    if dated > department.today:
        raise UsageError(f"--as-of {dated} lies in the future: give today, {department.today}, or a day before.")
    paper = site.report.page if page is None else page
    if paper not in get_args(PageSize):
        raise UsageError(f"--page {page!r} is not a page size: it must be A4 or Letter.")
    written = []
    for scanner in progress(scanners, "Rendering reports"):
        content = scanner_report(department, scanner, since, until, dated)
        content = replace(content, page_size=cast("PageSize", paper))
        written.append(save_report(site.reports, scanner.name, dated, render_scanner_report(content)))
    if not names:
        fleet = replace(fleet_report(department, since, until, dated), page_size=cast("PageSize", paper))
        written.append(save_report(site.reports, "fleet", dated, render_fleet_report(fleet)))
    return tuple(written)


def fleet_report(department: Department, first: date, last: date, as_of: date) -> FleetReport:
    """Gather what the report of all scanners shows."""
    site, record = department.site, department.record
    assessments, scanners = [], []
    for scanner in site.scanners:
        history = record.sessions(scanner.name, to_day=min(last, as_of))
        grounds = grounds_for(department, scanner)
        assessment = assess(scanner.name, history, grounds, as_of)
        assessments.append(assessment)
        scanners.append(
            fleet_scanner(
                assessment,
                history,
                schedule=grounds.schedule,
                events=grounds.events,
                first=first,
                last=min(last, as_of),
                description=_description(scanner),
            )
        )
    models = {s.name: f"{s.model}, {s.field_strength_T:g} T" for s in site.scanners if s.model}
    version, digest = _limits_in_force(department)
    return FleetReport(
        department=site.department.name,
        first_day=first,
        last_day=last,
        scanners=tuple(scanners),
        software_version=__version__,
        limits_version=version,
        limits_sha256=digest,
        record_head=record.head().hash,
        as_of=as_of,
        comparison=compare_fleet(assessments, models),
        page_size=site.report.page,
    )


def _description(scanner: SiteScanner) -> str:
    return ", ".join(text for text in (scanner.model, f"{scanner.field_strength_T:g} T", scanner.location) if text)


def _limits_in_force(department: Department) -> tuple[int, str]:
    """Version and hash of the latest limits; 0 and nothing where none were kept yet."""
    sets = department.record.limit_sets()
    return (sets[-1].version, sets[-1].sha256) if sets else (0, "")


def scanner_report(department: Department, scanner: SiteScanner, first: date, last: date, as_of: date) -> ScannerReport:
    """Gather all that one scanner's report shows; nothing is looked up later."""
    site, record = department.site, department.record
    history = record.sessions(scanner.name, to_day=min(last, as_of))
    grounds = grounds_for(department, scanner)
    assessment = assess(scanner.name, history, grounds, as_of)
    sessions = tuple(s for s in history if s.day >= first)
    version, digest = _limits_in_force(department)
    schedule = grounds.schedule.with_events(grounds.events)
    before = _report_before(site.reports, scanner.name, as_of)
    earlier = None if before is None else assess(scanner.name, history, grounds, before)
    acquisitions = {a.identifier: (s.day, a) for s in history for a in s.acquisitions}
    return ScannerReport(
        department=site.department.name,
        scanner=scanner.name,
        description=_description(scanner),
        first_day=first,
        last_day=last,
        standing=assessment.standing,
        standing_sentence=_standing_sentence(assessment),
        sessions=sessions,
        software_version=__version__,
        limits_version=version,
        limits_sha256=digest,
        record_head=record.head().hash,
        as_of=as_of,
        pictures=tuple(p for a in (history[-1].acquisitions if history else ()) for p in pictures_of(department, a)),
        missing=missed_days(schedule, [s.day for s in history], first, min(last, as_of)),
        refused=_refused(department, first, last),
        every_days=scanner.every_days,
        grace_days=scanner.grace_days,
        attention=tuple(notices_of(assessment)),
        previous_report=before,
        since_previous=tuple(_news(earlier, assessment, history, before)),
        courses=tuple(_course(state) for state in assessment.quantities if not state.superseded),
        events=tuple(e for e in grounds.events if first <= e.day <= last),
        causes=tuple(LikelyCause(cause.sentence, cause.evidence) for cause in assessment.causes),
        changes=tuple(_changes(assessment, first, last)),
        comparisons=tuple(_comparisons(department, assessment, acquisitions)),
        signatures=tuple(
            SignOff(
                kept.who.name or kept.who.user,
                kept.when.astimezone(site.department.zone).date(),
                kept.what.first_day,
                kept.what.last_day,
                kept.what.comment,
            )
            for kept in record.sign_offs(scanner.name)
            if kept.what.last_day >= first and kept.what.first_day <= last
        ),
        next_due=assessment.due,
        page_size=site.report.page,
    )


def _standing_sentence(assessment: Assessment) -> str:
    """Say the standing in one sentence; what is out and since when stands in the notices below it."""
    last = assessment.last_session
    when = "" if last is None else f" in the session of {long_date(last)}"
    if assessment.standing == "out of limits":
        return f"{count_of(len(assessment.out), 'quantity is', 'quantities are')} out of limits{when}."
    if assessment.standing == "drifting":
        named = count_of(len(assessment.drifting), "quantity is", "quantities are")
        return f"Everything is within its limits{when}, but {named} on the way out."
    return assessment.sentence if assessment.standing == "overdue" else f"Everything is within its limits{when}."


def _report_before(reports: Path, name: str, as_of: date) -> date | None:
    """Find the day of the latest report before this one, by the names of those that were filed."""
    days = []
    for path in reports.glob(f"*/{name}_*.pdf"):
        stamp = path.stem.removeprefix(f"{name}_")[:10]
        try:
            days.append(date.fromisoformat(stamp))
        except ValueError:
            continue
    return max((day for day in days if day < as_of), default=None)


def _refused(department: Department, first: date, last: date) -> tuple[RefusedSeries, ...]:
    """Count refusals by day and reason: the department's, because what is refused may belong to no scanner."""
    zone = department.site.department.zone
    counted = Counter((r.when.astimezone(zone).date(), r.reason) for r in department.record.refusals())
    return tuple(
        RefusedSeries(day, f"{count} file{'s' if count != 1 else ''}", reason)
        for (day, reason), count in sorted(counted.items())
        if first <= day <= last
    )


def notices_of(assessment: Assessment) -> Iterable[Notice]:
    """Say what needs a person, the gravest first."""
    counting = [state for state in assessment.quantities if not state.superseded]
    if assessment.out:
        out = len([state for state in counting if state.out])
        yield from (Notice("out of limits", _sentence(text)) for text in assessment.reasons[:out])
    else:
        out = 0
    drifting = [text for state in counting for text in state.drifting]
    rest = assessment.reasons[out:]
    yield from (Notice("due", _sentence(text)) for text in rest if text not in drifting)
    yield from (Notice("drifting", _sentence(text)) for text in drifting)
    yield from (Notice("to note", _sentence(text)) for text in assessment.remarks)


def _sentence(text: str) -> str:
    text = text.strip()
    return text if text.endswith(".") else f"{text[:1].upper()}{text[1:]}."


def _news(earlier: Assessment | None, now: Assessment, history: Sequence[Session], before: date | None) -> Iterable[str]:
    """Say what changed since the report before this one."""
    if earlier is None or before is None:
        return
    sessions = sum(session.day > before for session in history)
    yield f"{sessions} session{'s' if sessions != 1 else ''} taken in."
    if earlier.standing != now.standing:
        yield f"Standing was {earlier.standing}, and is {now.standing}."
    titles = {state.quantity: state.title for state in (*earlier.quantities, *now.quantities)}
    for name in now.out:
        if name not in earlier.out:
            yield f"{titles[name]} has gone out of limits."
    for name in earlier.out:
        if name not in now.out:
            yield f"{titles[name]} is within limits again."


def _course(state: QuantityState) -> Course:
    stream, chart = state.stream, state.chart
    words: list[ControlPoint] = []
    for index, acquisition in enumerate(stream.acquisitions):
        rules = tuple(RULES[name] for name, where in chart.tripped.items() if where[index])
        centre, lower, upper = (_number(values[index]) for values in (chart.centre, chart.lower, chart.upper))
        words.append(ControlPoint(acquisition, centre, lower, upper, rules))
    return Course(
        quantity=stream.quantity,
        phantom=stream.phantom,
        protocol=stream.protocol,
        coil=stream.coil,
        state=state.control,
        sentence=_control_sentence(state),
        control=tuple(words),
        baselines=() if state.baseline is None else (state.baseline,),
        change_points=tuple(_change_point(state)),
        forecast=_forecast(state),
    )


def _number(value: Any) -> float | None:  # noqa: ANN401 - a numpy scalar
    return None if value != value else float(value)  # noqa: PLR0124 - NaN is not equal to itself


def _control_sentence(state: QuantityState) -> str:
    if state.control == "out of control":
        since = "" if state.alarm_since is None else f" since {state.alarm_since.isoformat()}"
        return f"Out of control{since}: {'; '.join(state.rules)}"
    if state.control == "still learning":
        return "Still learning what is usual: too few sessions since the charts began."
    return "In control."


def _change_point(state: QuantityState) -> Iterable[ChangePoint]:
    onset = state.onset
    if onset is None:
        return
    word = {"step": "step", "ramp": "steady change"}.get(onset.kind, onset.kind)
    between = f"between {onset.earliest.isoformat()} and {onset.latest.isoformat()}"
    sentence = f"A {word} began about {onset.begun.isoformat()} ({between})."
    yield ChangePoint(onset.begun, onset.earliest, onset.latest, sentence)


def _forecast(state: QuantityState) -> Forecast | None:
    found = state.forecast
    if found is None:
        return None
    sentence = (
        f"If it goes on like this, the limit is crossed about {found.crossing.isoformat()}, "
        f"between {found.earliest.isoformat()} and {found.latest.isoformat()} with a probability of 90 %."
    )
    return Forecast(found.from_day, found.from_value, found.crossing, found.limit, found.earliest, found.latest, sentence)


def _changes(assessment: Assessment, first: date, last: date) -> Iterable[Change]:
    """List where charts started anew because settings, software or method changed."""
    seen = {
        (start.day, start.reason)
        for state in assessment.quantities
        for start in state.stream.starts[1:]
        if first <= start.day <= last
    }
    return (Change(day, f"{reason[:1].upper()}{reason[1:]}") for day, reason in sorted(seen))


def _comparisons(
    department: Department, assessment: Assessment, acquisitions: dict[int, tuple[date, RecordedAcquisition]]
) -> Iterable[Comparison]:
    """Put the last good image beside the first bad one for each quantity that is out."""
    for state in assessment.quantities:
        if not state.out or state.superseded:
            continue
        verdicts = state.stream.verdicts
        bad = len(verdicts)
        while bad and (verdict := verdicts[bad - 1]) is not None and is_out(verdict.conformity):
            bad -= 1
        if bad in {0, len(verdicts)}:
            continue
        good_day, good = acquisitions[state.stream.acquisitions[bad - 1]]
        bad_day, worse = acquisitions[state.stream.acquisitions[bad]]
        left, right = (picture_of(department, one, state.quantity) for one in (good, worse))
        if left is not None and right is not None:
            yield Comparison(state.quantity, state.stream.phantom, left, good_day, right, bad_day)
