"""Look at every scanner as of a day: standing, what is out, drifting, due."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date, datetime
from typing import TypeVar

from qa.errors import ExitStatus
from qa.judge import (
    Assessment,
    Grounds,
    ScannerStreams,
    Schedule,
    assess_streams,
    control_charts,
    control_rules,
    scanner_streams,
)
from qa.pipeline.department import Department
from qa.records import Baseline, Event
from qa.site import Site, SiteScanner

__all__ = ["Survey", "grounds_for", "survey"]

T = TypeVar("T", Baseline, Event)


@dataclass(frozen=True, eq=False)
class Survey:
    """The fleet as of a moment, in the order of site.toml.

    `clock` says that the machine's clock stands before the record's last entry, so that what is due cannot be told; empty
    where it does not. `remarks` says what was added to a period after it was signed. Both need a person.
    """

    at: datetime
    assessments: tuple[Assessment, ...]
    clock: str = ""
    remarks: tuple[str, ...] = ()

    @property
    def sentences(self) -> tuple[str, ...]:
        """What a person should know besides the standings."""
        return (self.clock, *self.remarks) if self.clock else self.remarks

    def exit_status(self, *, attention: bool = False) -> ExitStatus:
        """Give the exit status of a run; `attention` tells that something else needs a person, such as a refused series."""
        standings = {one.standing for one in self.assessments}
        if "out of limits" in standings:
            return ExitStatus.OUT_OF_LIMITS
        needed = attention or self.sentences or standings & {"overdue", "drifting"}
        return ExitStatus.NEEDS_A_PERSON if needed else ExitStatus.DONE


def survey(department: Department, today: date | None = None) -> Survey:
    """Assess every scanner of a department.

    The whole history is read as columns, and all charts are made at once; of single figures only the latest are read in
    full. So of the verdicts in the streams only the latest is there (`qa.judge.columns`).

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    today : datetime.date or None
        The day to look from; the run's own day when None.

    Returns
    -------
    Survey
        One assessment a scanner.
    """
    site, record, day = department.site, department.record, today or department.today
    baselines = _by_scanner(kept.what for kept in record.baselines())
    events = _by_scanner(kept.what for kept in record.events())
    found = scanner_streams(record.history(to_day=day), record.judged, [e for some in events.values() for e in some], day)
    ones = [found.get(scanner.name) or ScannerStreams(scanner.name, (), ()) for scanner in site.scanners]
    charts = iter(control_charts([stream for one in ones for stream in one.streams], control_rules(site.charts)))
    assessments = tuple(
        assess_streams(
            scanner.name,
            one.streams,
            one.days,
            _grounds(site, scanner, baselines.get(scanner.name, ()), events.get(scanner.name, ())),
            day,
            charts=[next(charts) for _ in one.streams],
        )
        for scanner, one in zip(site.scanners, ones, strict=True)
    )
    return Survey(department.now, assessments, record.clock_remark(department.now) or "", tuple(_signed_before(department)))


def grounds_for(department: Department, scanner: SiteScanner) -> Grounds:
    """Gather what a scanner is judged by: limits, baselines, events, schedule, charts."""
    record = department.record
    baselines = [kept.what for kept in record.baselines(scanner.name)]
    return _grounds(department.site, scanner, baselines, [kept.what for kept in record.events(scanner.name)])


def _grounds(site: Site, scanner: SiteScanner, baselines: Iterable[Baseline], events: Iterable[Event]) -> Grounds:
    return Grounds(
        limits=site.limits,
        baselines=tuple(baselines),
        events=tuple(events),
        schedule=Schedule(scanner.every_days, scanner.grace_days, scanner.since, site.downtimes_of(scanner.name)),
        rules=control_rules(site.charts),
        field_strength_T=scanner.field_strength_T,
    )


def _by_scanner(things: Iterable[T]) -> Mapping[str, list[T]]:
    found: dict[str, list[T]] = {}
    for one in things:
        found.setdefault(one.scanner_name, []).append(one)
    return found


def _signed_before(department: Department) -> Iterable[str]:
    """Say which signed periods are not what was signed."""
    added = department.record.added_to_signed()
    for kept in department.record.sign_offs() if added else ():
        count = len(added.get(kept.entry, ()))
        if count:
            what, were = kept.what, "acquisition was" if count == 1 else "acquisitions were"
            yield (
                f"{what.scanner_name}: {count} {were} added, corrected or withdrawn after {kept.who.name} had signed "
                f"the period from {what.first_day} to {what.last_day} off"
            )
