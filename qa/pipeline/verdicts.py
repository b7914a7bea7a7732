"""Hold what was measured against the limits, with what the record knows of the scanner."""

from collections.abc import Sequence
from dataclasses import replace
from datetime import date, timedelta

from qa.judge import Context, in_force, judge, true_values, with_derived
from qa.phantoms import Phantom
from qa.pipeline.department import Department
from qa.records import Measurement, Outcome, Session, Verdict
from qa.site import SiteScanner

__all__ = ["judge_outcome"]

_LOOK_BACK = timedelta(days=400)
"""How far back the session before is looked for, for limits on the change from one to the next."""


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
    earlier = record.sessions(scanner.name, day - _LOOK_BACK, day - timedelta(days=1))
    verdicts = []
    for measurement in measurements:
        previous, previous_day = _before(earlier, outcome.phantom, measurement.quantity)
        verdicts.append(
            judge(measurement, department.site.limits, replace(context, previous=previous, previous_day=previous_day))
        )
    judged = replace(outcome, measurements=measurements, not_measured=(*outcome.not_measured, *missing))
    return judged, tuple(verdicts)


def _before(sessions: Sequence[Session], phantom: str, quantity: str) -> tuple[Measurement | None, date | None]:
    """Find the same quantity on the same phantom in the latest session that has it."""
    for session in reversed(sessions):
        for acquisition in reversed(session.acquisitions):
            if acquisition.phantom == phantom:
                for judged in acquisition.judged:
                    if judged.measurement.quantity == quantity:
                        return judged.measurement, session.day
    return None, None
