"""Look at every scanner as of a day: standing, what is out, drifting, due."""

from dataclasses import dataclass
from datetime import date, datetime
from typing import TYPE_CHECKING

from qa.errors import ExitStatus
from qa.judge import Assessment, Grounds, Schedule, assess, control_rules
from qa.pipeline.department import Department
from qa.site import SiteScanner

if TYPE_CHECKING:
    from qa.records import Session

__all__ = ["Survey", "grounds_for", "survey"]


@dataclass(frozen=True, eq=False)
class Survey:
    """The fleet as of a moment, in the order of site.toml."""

    at: datetime
    assessments: tuple[Assessment, ...]

    def exit_status(self, *, attention: bool = False) -> ExitStatus:
        """Give the exit status of a run; `attention` tells that something else needs a person, such as a refused series."""
        standings = {one.standing for one in self.assessments}
        if "out of limits" in standings:
            return ExitStatus.OUT_OF_LIMITS
        return ExitStatus.NEEDS_A_PERSON if attention or standings & {"overdue", "drifting"} else ExitStatus.DONE


def survey(department: Department, today: date | None = None) -> Survey:
    """Assess every scanner of a department.

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
    day = today or department.today
    histories: dict[str, list[Session]] = {}
    for session in department.record.sessions(to_day=day):
        histories.setdefault(session.scanner_name, []).append(session)
    found = tuple(
        assess(scanner.name, histories.get(scanner.name, ()), grounds_for(department, scanner), day)
        for scanner in department.site.scanners
    )
    return Survey(department.now, found)


def grounds_for(department: Department, scanner: SiteScanner) -> Grounds:
    """Gather what a scanner is judged by: limits, baselines, events, schedule, charts."""
    site, record = department.site, department.record
    return Grounds(
        limits=site.limits,
        baselines=tuple(kept.what for kept in record.baselines(scanner.name)),
        events=tuple(kept.what for kept in record.events(scanner.name)),
        schedule=Schedule(scanner.every_days, scanner.grace_days, scanner.since, site.downtimes_of(scanner.name)),
        rules=control_rules(site.charts),
        field_strength_T=scanner.field_strength_T,
    )
