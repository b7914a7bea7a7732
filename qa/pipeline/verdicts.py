"""Hold what was measured against the limits, with what the record knows of the scanner."""

from collections.abc import Sequence
from datetime import date, timedelta

from qa.judge import Context, judge
from qa.pipeline.department import Department
from qa.records import Measurement, Outcome, Session, Verdict
from qa.site import SiteScanner

__all__ = ["judge_outcome"]

_LOOK_BACK = timedelta(days=400)


def judge_outcome(department: Department, scanner: SiteScanner, outcome: Outcome, day: date) -> tuple[Verdict | None, ...]:
    """Hold each measurement of an outcome against the limit that applies to it.

    Returns
    -------
    tuple of Verdict or None
        One for each measurement, in order; None where no limit applies or it cannot be applied yet.
    """
    settings = outcome.acquisition.settings
    earlier = department.record.sessions(scanner.name, day - _LOOK_BACK, day - timedelta(days=1))
    verdicts = []
    for measurement in outcome.measurements:
        previous, previous_day = _before(earlier, outcome.phantom, measurement.quantity)
        context = Context(
            scanner_name=scanner.name,
            phantom=outcome.phantom,
            day=day,
            coil=settings.receive_coil,
            protocol=settings.protocol,
            field_strength_T=scanner.field_strength_T,
            slice_thickness_mm=settings.slice_thickness_mm,
            previous=previous,
            previous_day=previous_day,
        )
        verdicts.append(judge(measurement, department.site.limits, context))
    return tuple(verdicts)


def _before(sessions: Sequence[Session], phantom: str, quantity: str) -> tuple[Measurement | None, date | None]:
    """Find the same quantity on the same phantom in the latest session that has it."""
    for session in reversed(sessions):
        for acquisition in reversed(session.acquisitions):
            if acquisition.phantom == phantom:
                for judged in acquisition.judged:
                    if judged.measurement.quantity == quantity:
                        return judged.measurement, session.day
    return None, None
