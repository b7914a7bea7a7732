"""What another set of limits would have said of figures that were judged before."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

from qa.judge.baseline import in_force
from qa.judge.decide import judge
from qa.judge.limits import Context
from qa.judge.settings import as_stated
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
    *,
    field_strengths_T: Mapping[str, float] | None = None,
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
        True dimensions by phantom and quantity; an acquisition that states the true diameter of its cross-section goes by
        that.
    field_strengths_T : mapping, optional
        Field strength by scanner, as the department states it; without it, what the headers say.

    Returns
    -------
    tuple of AlteredVerdict
        In the order of the sessions.
    """
    found: list[AlteredVerdict] = []
    previous: dict[tuple[str, str, str], tuple[Measurement, date]] = {}
    truths, fields_T = true_values or {}, field_strengths_T or {}
    for session in sessions:
        valid = in_force(baselines, events, session.day)
        seen: dict[tuple[str, str, str], tuple[Measurement, date]] = {}
        for acquisition in session.acquisitions:
            stated = as_stated(truths.get(acquisition.phantom, {}), (j.measurement for j in acquisition.judged))
            context = _context(session, acquisition, valid, stated, fields_T.get(session.scanner_name))
            for judged in acquisition.judged:
                key = (session.scanner_name, acquisition.phantom, judged.measurement.quantity)
                before, day = previous.get(key, (None, None))
                verdict = judge(judged.measurement, limits, replace(context, previous=before, previous_day=day))
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
    field_strength_T: float | None,
) -> Context:
    settings = acquisition.settings
    return Context(
        session.scanner_name,
        acquisition.phantom,
        session.day,
        settings.receive_coil,
        settings.protocol,
        field_strength_T or acquisition.scanner.field_strength_T,
        settings.slice_thickness_mm,
        baselines,
        true_values,
    )
