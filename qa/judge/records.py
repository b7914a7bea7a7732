"""What judgement comes to: the state of each quantity, of a scanner, of a fleet."""

from dataclasses import dataclass, field
from datetime import date
from typing import Literal

from qa.judge.control import ControlChart, ControlRules
from qa.judge.decide import is_out
from qa.judge.foresight import HORIZON_DAYS, Forecast, Onset, Trend
from qa.judge.schedule import Completeness, Schedule
from qa.judge.streams import Stream
from qa.quantities import QUANTITIES
from qa.records import Baseline, Event, Limit, Verdict

__all__ = ["Assessment", "Cause", "ControlState", "Grounds", "QuantityState", "Standing"]

Standing = Literal["within limits", "drifting", "out of limits", "overdue"]
ControlState = Literal["in control", "out of control", "still learning"]


@dataclass(frozen=True)
class Grounds:
    """What judgement rests on besides the figures: what the department has set, and what it has recorded.

    Attributes
    ----------
    limits : tuple of Limit
        Those in force on the day.
    baselines, events : tuple
        All that the record holds; those of other scanners do no harm.
    schedule : Schedule
        When the scanner is expected. Downtime that events record is added to it.
    rules : ControlRules
        Of the control charts.
    forecast_days : int
        How far ahead a crossing is foretold.
    field_strength_T : float or None
        The scanner's, as the department states it; None takes what the headers say.
    """

    limits: tuple[Limit, ...] = ()
    baselines: tuple[Baseline, ...] = ()
    events: tuple[Event, ...] = ()
    schedule: Schedule = field(default_factory=Schedule)
    rules: ControlRules = field(default_factory=ControlRules)
    forecast_days: int = HORIZON_DAYS
    field_strength_T: float | None = None


@dataclass(frozen=True)
class Cause:
    """What to look at first, in one to three sentences, and the evidence; it suggests, a person decides."""

    name: str
    sentence: str
    evidence: tuple[str, ...]
    source: str


@dataclass(frozen=True, eq=False)
class QuantityState:
    """One quantity of one scanner as of a day.

    Attributes
    ----------
    stream : Stream
        Its history; a quantity that is measured in several ways has a state for each.
    label : str
        What sentences call it: its title, and on which phantom or with which coil where there are several.
    verdict : Verdict or None
        Of the latest value, as the record keeps it.
    not_judged : str
        Why there is none, as a sentence; empty where there is one.
    chart : ControlChart
        Aligned with the stream.
    control : ControlState
        Of the latest value.
    rules : tuple of str
        What tripped there, in words.
    alarm_since : datetime.date or None
        First session of the alarm that is on.
    shift, shift_sigmas : float
        How far it has gone from the centre, in the unit and in standard deviations of a session: the lesser of the smoothed
        course and the median of the last three sessions; 0 while learning and where they lie on different sides.
    worse : bool
        That shift makes things worse.
    margin_used : float or None
        Share of the way from centre to limit that the shift is; None where no fixed limit lies that way.
    trend, forecast, onset : or None
        See `qa.judge.foresight`; None where the history does not support one.
    baseline : Baseline or None
        In force on the day.
    out_since : datetime.date or None
        First of the unbroken row of sessions out of limits up to the latest.
    superseded : bool
        Measured in another way since, so that it no longer counts.
    absent_since : datetime.date or None
        The last session that has it, where the scanner was measured without it for too long.
    drifting : tuple of str
        Why it is held to be drifting, in sentences; empty where it is not.
    """

    stream: Stream
    label: str
    verdict: Verdict | None
    not_judged: str
    chart: ControlChart
    control: ControlState
    rules: tuple[str, ...]
    alarm_since: date | None
    shift: float
    shift_sigmas: float
    worse: bool
    margin_used: float | None
    trend: Trend | None
    forecast: Forecast | None
    onset: Onset | None
    baseline: Baseline | None
    out_since: date | None
    superseded: bool
    absent_since: date | None
    drifting: tuple[str, ...]

    @property
    def quantity(self) -> str:
        """Name of the quantity."""
        return self.stream.quantity

    @property
    def title(self) -> str:
        """What a report calls it."""
        known = QUANTITIES.get(self.stream.quantity)
        return known.title if known else self.stream.quantity

    @property
    def out(self) -> bool:
        """Out of its limits, and still counting."""
        return self.verdict is not None and is_out(self.verdict.conformity) and not self.superseded


@dataclass(frozen=True, eq=False)
class Assessment:
    """One scanner as of a day.

    Attributes
    ----------
    scanner_name : str
        Whose.
    today : datetime.date
        The day; nothing later was looked at.
    standing : Standing
        *out of limits* before *overdue* before *drifting*.
    sentence : str
        The standing in one sentence, with what and since when.
    reasons : tuple of str
        All that a person should know, the gravest first.
    out, drifting, out_of_control : tuple of str
        Quantities, each once, in the order of the table of quantities. `out_of_control` also holds such as moved for the
        better, have no limit or are far from it: they are shown, and nobody is called for them.
    quantities : tuple of QuantityState
        All, in the order of the table of quantities.
    last_session, due : datetime.date or None
        None where there is none, or no day can be said.
    days_overdue : int
        0 where it is not.
    kept : Completeness
        How the schedule was kept since the first session.
    causes : tuple of Cause
        The likeliest first, three at most.
    remarks : tuple of str
        New segments, quantities no longer measured, limits that cannot be applied.
    """

    scanner_name: str
    today: date
    standing: Standing
    sentence: str
    reasons: tuple[str, ...]
    out: tuple[str, ...]
    drifting: tuple[str, ...]
    out_of_control: tuple[str, ...]
    quantities: tuple[QuantityState, ...]
    last_session: date | None
    due: date | None
    days_overdue: int
    kept: Completeness
    causes: tuple[Cause, ...]
    remarks: tuple[str, ...]
