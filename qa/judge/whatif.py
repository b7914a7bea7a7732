"""What another set of limits would have said of figures that were judged before."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date

from qa.judge.baseline import in_force
from qa.judge.decide import judge
from qa.judge.limits import Context
from qa.records import Baseline, Event, Limit, Measurement, RecordedAcquisition, Session, Verdict

__all__ = ["AlteredVerdict", "altered_verdicts"]


@dataclass(frozen=True)
class AlteredVerdict:
    """A figure whose verdict would differ; None where no limit applied or would apply."""

    scanner_name: str
    day: date
    acquisition: int
    phantom: str
    measurement: Measurement
    was: Verdict | None
    would_be: Verdict | None


def altered_verdicts(
    sessions: Iterable[Session],
    limits: Sequence[Limit],
    baselines: Sequence[Baseline] = (),
    events: Sequence[Event] = (),
    true_values: Mapping[str, Mapping[str, float]] | None = None,
) -> tuple[AlteredVerdict, ...]:
    """Judge past figures by another set of limits and list those whose verdict's word or warning would differ.

    Parameters
    ----------
    sessions : iterable of Session
        Of any scanners, those of each in order of day.
    limits : sequence of Limit
        The set to try.
    baselines, events : sequence
        Of those scanners; each figure is judged with the baselines in force on its day.
    true_values : mapping, optional
        True dimensions by phantom and quantity.

    Returns
    -------
    tuple of AlteredVerdict
        In the order of the sessions.
    """
    found: list[AlteredVerdict] = []
    previous: dict[tuple[str, str, str], tuple[Measurement, date]] = {}
    truths = true_values or {}
    for session in sessions:
        valid = in_force(baselines, events, session.day)
        seen: dict[tuple[str, str, str], tuple[Measurement, date]] = {}
        for acquisition in session.acquisitions:
            for judged in acquisition.judged:
                key = (session.scanner_name, acquisition.phantom, judged.measurement.quantity)
                before = previous.get(key)
                context = _context(session, acquisition, valid, truths.get(acquisition.phantom, {}), before)
                verdict = judge(judged.measurement, limits, context)
                if _said(verdict) != _said(judged.verdict):
                    found.append(
                        AlteredVerdict(
                            session.scanner_name,
                            session.day,
                            acquisition.identifier,
                            acquisition.phantom,
                            judged.measurement,
                            judged.verdict,
                            verdict,
                        )
                    )
                seen[key] = judged.measurement, session.day
        previous |= seen
    return tuple(found)


def _said(verdict: Verdict | None) -> tuple[str, bool] | None:
    return None if verdict is None else (verdict.conformity, verdict.warned)


def _context(
    session: Session,
    acquisition: RecordedAcquisition,
    baselines: tuple[Baseline, ...],
    true_values: Mapping[str, float],
    before: tuple[Measurement, date] | None,
) -> Context:
    settings = acquisition.settings
    return Context(
        session.scanner_name,
        acquisition.phantom,
        session.day,
        settings.receive_coil,
        settings.protocol,
        acquisition.scanner.field_strength_T,
        settings.slice_thickness_mm,
        baselines,
        true_values,
        None if before is None else before[0],
        None if before is None else before[1],
    )
