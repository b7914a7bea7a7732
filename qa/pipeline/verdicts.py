"""Hold what was measured against the limits, with what the record knows of the scanner."""

from collections.abc import Collection
from dataclasses import replace
from datetime import date, timedelta

from qa.judge import Context, choose, in_force, judge, true_values, with_derived
from qa.phantoms import Phantom
from qa.pipeline.department import Department
from qa.records import Limit, Measurement, Outcome, Verdict
from qa.site import SiteScanner

__all__ = ["judge_outcome"]

_LOOK_BACK = (timedelta(days=60), timedelta(days=400))
"""How far back the session before is looked for, where a limit on the change from one to the next applies: at first, and where
it is not found."""


def judge_outcome(
    department: Department, scanner: SiteScanner, phantom: Phantom, outcome: Outcome, day: date
) -> tuple[Outcome, tuple[Verdict | None, ...]]:
    """Add what follows from the scanner's history, and hold every measurement against the limit that applies to it.

    Returns
    -------
    Outcome
        With the derived measurements.
    tuple of Verdict or None
        One for each measurement, in order; None where no limit applies or it cannot be applied yet.
    """
    settings, record = outcome.acquisition.settings, department.record
    baselines = [kept.what for kept in record.baselines(scanner.name)]
    events = [kept.what for kept in record.events(scanner.name)]
    context = Context(
        scanner_name=scanner.name,
        phantom=outcome.phantom,
        day=day,
        coil=settings.receive_coil,
        protocol=settings.protocol,
        field_strength_T=scanner.field_strength_T,
        slice_thickness_mm=settings.slice_thickness_mm,
        baselines=in_force(baselines, events, day),
        true_values=true_values(phantom, outcome.measurements),
    )
    measurements, missing = with_derived(outcome.measurements, context)
    limits = department.site.limits
    changing = {m.quantity for m in measurements if _on_change(choose(limits, m.quantity, context).limit)}
    before = _before(department, scanner.name, outcome.phantom, day, changing) if changing else {}
    verdicts = []
    for measurement in measurements:
        previous, previous_day = before.get(measurement.quantity, (None, None))
        verdicts.append(judge(measurement, limits, replace(context, previous=previous, previous_day=previous_day)))
    judged = replace(outcome, measurements=measurements, not_measured=(*outcome.not_measured, *missing))
    return judged, tuple(verdicts)


def _on_change(limit: Limit | None) -> bool:
    return limit is not None and (limit.per_day is not None or limit.warn_per_day is not None)


def _before(
    department: Department, scanner_name: str, phantom: str, day: date, quantities: Collection[str]
) -> dict[str, tuple[Measurement, date]]:
    """Find each quantity on the same phantom in the latest session before a day that has it."""
    found: dict[str, tuple[Measurement, date]] = {}
    for back in _LOOK_BACK:
        sessions = department.record.sessions(scanner_name, day - back, day - timedelta(days=1), details=False)
        for session in reversed(sessions):
            for acquisition in reversed(session.acquisitions):
                for judged in acquisition.judged if acquisition.phantom == phantom else ():
                    if judged.measurement.quantity in quantities:
                        found.setdefault(judged.measurement.quantity, (judged.measurement, session.day))
        if len(found) == len(quantities):
            break
    return found
